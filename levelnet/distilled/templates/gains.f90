  ! Cell of x on an axis and the four B-splines there. Below the columns ln(P/S) is proportional to
  ! them: `factor` becomes less than 1.
  pure subroutine spline_cell(axis, x, first, weights, factor, status)
    integer, intent(in) :: axis
    real(dp), intent(in) :: x
    integer, intent(out) :: first
    real(dp), intent(out) :: weights(4)
    real(dp), intent(inout) :: factor
    integer(c_int), intent(out) :: status
    real(dp) :: position, t, u
    integer :: cells
    cells = size(escape_gain, 4 - axis) - 3
    position = (x - escape_low(axis)) / escape_step(axis)
    if (axis < 3 .and. position < 0.0_dp) then
      factor = factor * exp(x - escape_low(axis))
      position = 0.0_dp
    end if
    first = 1
    weights = 0.0_dp
    status = status_escape
    if (.not. within(position, -1.0e-9_dp, cells + 1.0e-9_dp)) return
    status = status_ok
    first = min(int(position), cells - 1)
    t = min(max(position - first, 0.0_dp), 1.0_dp)
    u = 1.0_dp - t
    first = first + 1
    weights(1) = u**3 / 6.0_dp
    weights(2) = 2.0_dp / 3.0_dp - t * t * (1.0_dp - 0.5_dp * t)
    weights(3) = 2.0_dp / 3.0_dp - u * u * (1.0_dp - 0.5_dp * u)
    weights(4) = t**3 / 6.0_dp
  end subroutine spline_cell

  ! ln(P/S) of each line; arguments are ln(n_HeI/H), ln(n_HI/H) and ln T_r.
  pure subroutine gains(column, hydrogen_column, log_kelvin, gain, status)
    real(dp), intent(in) :: column, hydrogen_column, log_kelvin
    real(dp), intent(out) :: gain(n_he1_lines)
    integer(c_int), intent(out) :: status
    real(dp) :: x(3), weights(4, 3), factor
    integer :: first(3), axis, a, b, k
    x = [column, hydrogen_column, log_kelvin]
    gain = 0.0_dp
    factor = 1.0_dp
    do axis = 1, 3
      call spline_cell(axis, x(axis), first(axis), weights(:, axis), factor, status)
      if (status /= status_ok) return
    end do
    do k = 1, n_he1_lines
      do a = 1, 4
        do b = 1, 4
          gain(k) = gain(k) + weights(a, 1) * weights(b, 2) * dot_product(weights(:, 3), &
            escape_gain(first(3):first(3) + 3, first(2) + b - 1, first(1) + a - 1, k))
        end do
      end do
    end do
    gain = factor * gain
  end subroutine gains

