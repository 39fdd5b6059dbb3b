
  ! ln of c times the cross section of H I at each line in cm^3/s.
  real(dp), parameter :: he1_line_continuum(n_he1_lines) = [ &
@{line_continuum} ]
  ! ln(P/S) of each line, P the escape probability and S that of Sobolev, where hydrogen absorbs:
  ! coefficients of uniform cubic B-splines in ln T_r, ln(n_HI/H) and ln(n_HeI/H). First node and
  ! spacing of each axis, the last first.
  real(dp), parameter :: escape_low(3) = [ &
@{escape_low} ]
  real(dp), parameter :: escape_step(3) = [ &
@{escape_step} ]
  real(dp), save :: escape_gain(@{escape_3}, @{escape_2}, @{escape_1}, n_he1_lines)
@{escape_data}
