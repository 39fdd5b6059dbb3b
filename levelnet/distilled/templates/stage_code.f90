  ! All logarithms of rates of @{species}; changes of the constants may be left out or none.
  pure subroutine @{ion}_log_rates(radiation_temperature_k, matter_temperature_k, rates, status, changes)
    real(dp), intent(in) :: radiation_temperature_k, matter_temperature_k
    type(@{ion}_logarithms), intent(inout) :: rates
    integer(c_int), intent(out) :: status
    type(constant_changes), intent(in), optional :: changes
    status = status_conditions
    if (present(changes)) then
      if (.not. unchanged(changes)) return
    end if
    call stage_at(radiation_temperature_k, matter_temperature_k, @{ion}_span, @{ion}_equilibrium, &
      @{ion}_exchange, @{ion}_departure, @{ion}_pair, @{ion}_level, rates%recombination, &
      rates%photoionization, rates%down, rates%up, status)
  end subroutine @{ion}_log_rates

