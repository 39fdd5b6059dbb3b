  ! P = S: hydrogen does not absorb.
  pure subroutine gains(column, hydrogen_column, log_kelvin, gain, status)
    real(dp), intent(in) :: column, hydrogen_column, log_kelvin
    real(dp), intent(out) :: gain(n_he1_lines)
    integer(c_int), intent(out) :: status
    gain = 0.0_dp * (column + hydrogen_column + log_kelvin)
    status = status_ok
  end subroutine gains

