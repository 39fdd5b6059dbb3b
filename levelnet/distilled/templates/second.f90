  ! Net recombinations to He II, with its lines in Sobolev's treatment and two photons from its first
  ! level; `part` is the part that its levels have in the rate of b.
  pure subroutine second_recombination(at, electrons, b, part, flow, status)
    type(plasma_conditions), intent(in) :: at
    real(dp), intent(in) :: electrons, b
    real(dp), intent(out) :: part, flow
    integer(c_int), intent(out) :: status
    type(he2_logarithms) :: rates
    real(dp) :: loss(n_he2), nothing(n_he2), departures(n_he2), column, kelvin
    kelvin = at%radiation_temperature_k
    part = ramp((b - gone) / (fading - gone))
    flow = 0.0_dp
    status = status_ok
    if (part <= 0.0_dp) return
    column = at%hydrogen_density_cm3 * at%helium_ratio * at%singly_ionized_helium &
      / at%expansion_rate_per_s
    call he2_log_rates(kelvin, at%matter_temperature_k, rates, status)
    if (status /= status_ok) return
    nothing = 0.0_dp
    loss = 0.0_dp
    loss(1) = @{ion_decay_rate}
    loss(@{ion_line_upper}) = loss(@{ion_line_upper}) - @{ion_line_a} &
      * sobolev(@{ion_line_depth} * column) / exp_less_one(-@{ion_line_energy_k} / kelvin)
    call net_recombination(rates%recombination, rates%photoionization, rates%down, rates%up, &
      he2_lower, he2_upper, he2_level, kelvin, electrons * at%doubly_ionized_helium, &
      at%singly_ionized_helium, loss, nothing, flow, departures, status)
  end subroutine second_recombination
