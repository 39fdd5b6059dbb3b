  ! He II has no network: its levels have no part in the rate of b.
  pure subroutine second_recombination(at, electrons, b, part, flow, status)
    type(plasma_conditions), intent(in) :: at
    real(dp), intent(in) :: electrons, b
    real(dp), intent(out) :: part, flow
    integer(c_int), intent(out) :: status
    part = 0.0_dp
    flow = 0.0_dp * electrons * b * at%doubly_ionized_helium
    status = status_ok
  end subroutine second_recombination
