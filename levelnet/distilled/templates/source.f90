@{about}
!
! Effective rates of hydrogen between the kept levels and the continuum, at radiation temperature
! T_r and matter temperature T_m, and the right-hand side of ionization and matter temperature.
! Fortran 2018, double precision, no dependencies; every procedure is pure (nothing but data that
! never change is shared), so they are safe in threads. Units are cgs; temperatures in K; rates come
! as natural logarithms, since they leave the doubles in cold radiation.
!
! Kept levels, in the order of all arrays: @{level_names}
! Pairs of kept levels, lower - upper:     @{pair_names}
! Lines to the ground state:               @{line_names}
!
! Range: T_r from @{low_k} to @{high_k} K, T_m/T_r from @{ratio_low} to @{ratio_high}, and T_m up
! to @{hottest_k} K or T_r, whichever is higher: collisional ionization is not in the rates.
!
! Every procedure sets `status` to status_ok (0), or to one of the codes below; its other results
! then hold nothing to rely on.
!
! With x = ln T_r and y = ln(T_m/T_r), cut into cells on which t runs from -1 to 1:
!     ln A_i(T_r, T_m) = E_i(x) + y D_i(x, y),   E_i and D_i polynomials in t of each cell.
!
! Compile: gfortran -std=f2018 -O2 -c @{prefix}.f90
module @{prefix}_module
  use, intrinsic :: iso_c_binding, only: dp => c_double, c_int
  implicit none
  private
  public :: dp, log_recombination, log_photoionization, log_exchange, log_rates, right_hand_side

  integer(c_int), parameter, public :: status_ok = 0
  ! T_r outside the range, or not a number.
  integer(c_int), parameter, public :: status_radiation_temperature = 1
  ! T_m/T_r outside the range, or not a number.
  integer(c_int), parameter, public :: status_temperature_ratio = 2
  ! T_m above the range.
  integer(c_int), parameter, public :: status_matter_temperature = 3
  ! A density, fraction, rate or change is not allowed.
  integer(c_int), parameter, public :: status_conditions = 4
  ! A kept level has no exit at these conditions.
  integer(c_int), parameter, public :: status_singular = 5

  integer, parameter, public :: n_kept = @{n_kept}, n_pairs = @{n_pairs}
  integer, parameter :: n_lines = @{n_lines}
  integer, parameter :: cells_x = @{cells_x}, cells_y = @{cells_y}
  ! Powers of a polynomial run from 0 to top.
  integer, parameter :: top = @{top}

  ! Relative changes of the constants of nature against their values in the laboratory, each from
  ! -0.2 to 0.2. The range of temperatures scales by (1 + fine_structure)^2 times the change of the
  ! reduced mass.
  type, bind(c), public :: constant_changes
    real(dp) :: fine_structure = 0.0_dp
    real(dp) :: electron_mass = 0.0_dp
  end type constant_changes

  type, bind(c), public :: rate_logarithms
    real(dp) :: recombination(n_kept)    ! ln A_i, A_i in cm^3/s
    real(dp) :: photoionization(n_kept)  ! ln B_i, B_i in 1/s
    real(dp) :: down(n_pairs)            ! ln of exchange, upper to lower, 1/s
    real(dp) :: up(n_pairs)              ! ln of exchange, lower to upper, 1/s
  end type rate_logarithms

  ! Local conditions. All fractions are per hydrogen nucleus. The neutral fraction is asked for so
  ! that it need not be formed as a difference; excited atoms are negligible in it.
  type, bind(c), public :: local_conditions
    real(dp) :: hydrogen_density_cm3     ! all hydrogen nuclei; above 0
    real(dp) :: electron_fraction        ! n_e/n_H; above 0
    real(dp) :: ionized_fraction         ! n_HII/n_H; above 0
    real(dp) :: neutral_fraction         ! n_HI/n_H; above 0
    real(dp) :: matter_temperature_k
    real(dp) :: radiation_temperature_k
    real(dp) :: expansion_rate_per_s     ! H, or a third of the local divergence of velocity
    real(dp) :: helium_ratio             ! n_He/n_H, 0 or above: shares the heat
    type(constant_changes) :: changes
  end type local_conditions

  type, bind(c), public :: local_slopes
    real(dp) :: ionized_fraction_per_s      ! d(n_HII/n_H)/dt; dx_e/dt while helium rests
    real(dp) :: matter_temperature_k_per_s  ! -2 H T_m + compton_rate (T_r - T_m)
    real(dp) :: compton_rate_per_s
  end type local_slopes

  ! Factors of changed constants: alpha, electron mass, reduced mass, and energies of the atom.
  type :: factors
    real(dp) :: alpha, electron, reduced, energy
  end type factors

  real(dp), parameter :: x_low = @{x_low}, x_high = @{x_high}
  real(dp), parameter :: y_low = @{y_low}, y_high = @{y_high}
  real(dp), parameter :: hottest_k = @{hottest}
  ! Stands for the logarithm of an exchange rate that is zero; the result is then -huge.
  real(dp), parameter :: never = @{never}
  real(dp), parameter :: pi = 3.14159265358979323846_dp

  ! Kept levels: weight over that of 1s, energies over the Boltzmann constant in K, and
  ! ln[(g/2) (thermal wavelength at 1 K)^3 / cm^3].
  real(dp), parameter :: weight(n_kept) = [ &
@{weight} ]
  real(dp), parameter :: energy_k(n_kept) = [ &
@{energy_k} ]
  real(dp), parameter :: ionization_k(n_kept) = [ &
@{ionization_k} ]
  real(dp), parameter :: saha_offset(n_kept) = [ &
@{saha_offset} ]

  ! Pairs: positions of the levels, barrier taken out of the fit and energy difference in K, ln of
  ! the ratio of weights.
  integer, parameter :: lower(n_pairs) = [ &
@{lower} ]
  integer, parameter :: upper(n_pairs) = [ &
@{upper} ]
  real(dp), parameter :: barrier_k(n_pairs) = [ &
@{barrier_k} ]
  real(dp), parameter :: rise_k(n_pairs) = [ &
@{rise_k} ]
  real(dp), parameter :: log_weight_ratio(n_pairs) = [ &
@{log_weight_ratio} ]

  ! Lines to 1s: position of the upper level, A in 1/s, energy in K, wavelength in cm.
  integer, parameter :: line_upper(n_lines) = [ &
@{line_upper} ]
  real(dp), parameter :: line_a(n_lines) = [ &
@{line_a} ]
  real(dp), parameter :: line_energy_k(n_lines) = [ &
@{line_energy_k} ]
  real(dp), parameter :: line_wavelength_cm(n_lines) = [ &
@{line_wavelength_cm} ]
  real(dp), parameter :: line_weight_ratio(n_lines) = [ &
@{line_weight_ratio} ]

  ! 2s-1s decay in 1/s; Compton rate over T_r^4 x_e/(1 + f_He + x_e), in 1/(s K^4); electron mass
  ! over that of the nucleus.
  real(dp), parameter :: two_photon_rate = @{two_photon_rate}
  real(dp), parameter :: compton = @{compton}
  real(dp), parameter :: mass_ratio = @{mass_ratio}

  ! Never written to. No named constants, because compilers copy those to every place of use.
  real(dp), save :: equilibrium(0:top, n_kept, cells_x)
  real(dp), save :: exchange(0:top, n_pairs, cells_x)
  ! Power of t in y, power of t in x, level, cell in y, cell in x.
  real(dp), save :: departure(0:top, 0:top, n_kept, cells_y, cells_x)
@{stimulation_table}
@{data}@{helium_data}

contains

  ! ln A_i in cm^3/s of each kept level: recombination into it, directly or through the others.
  pure subroutine log_recombination(radiation_temperature_k, matter_temperature_k, values, status)
    real(dp), intent(in) :: radiation_temperature_k, matter_temperature_k
    real(dp), intent(out) :: values(n_kept)
    integer(c_int), intent(out) :: status
    real(dp) :: x, y, t
    integer :: cell
    values = 0.0_dp
    call check_radiation(radiation_temperature_k, x, status)
    if (status /= status_ok) return
    call check_matter(radiation_temperature_k, matter_temperature_k, y, status)
    if (status /= status_ok) return
    call locate(x, x_low, x_high, cells_x, cell, t)
    call at_equilibrium(cell, t, values)
    call add_departure(cell, t, y, values)
  end subroutine log_recombination

  ! ln B_i in 1/s of each kept level, from A_i at T_m = T_r by detailed balance.
  pure subroutine log_photoionization(radiation_temperature_k, values, status)
    real(dp), intent(in) :: radiation_temperature_k
    real(dp), intent(out) :: values(n_kept)
    integer(c_int), intent(out) :: status
    real(dp) :: x, t
    integer :: cell
    values = 0.0_dp
    call check_radiation(radiation_temperature_k, x, status)
    if (status /= status_ok) return
    call locate(x, x_low, x_high, cells_x, cell, t)
    call at_equilibrium(cell, t, values)
    values = values - saha(radiation_temperature_k, x)
  end subroutine log_photoionization

  ! ln of the exchange of each pair in 1/s; the upward rate by detailed balance.
  pure subroutine log_exchange(radiation_temperature_k, down, up, status)
    real(dp), intent(in) :: radiation_temperature_k
    real(dp), intent(out) :: down(n_pairs), up(n_pairs)
    integer(c_int), intent(out) :: status
    real(dp) :: x, t
    integer :: cell
    down = 0.0_dp
    up = 0.0_dp
    call check_radiation(radiation_temperature_k, x, status)
    if (status /= status_ok) return
    call locate(x, x_low, x_high, cells_x, cell, t)
    call exchange_at(radiation_temperature_k, cell, t, down, up)
  end subroutine log_exchange

  ! All of these at once; changes of the constants may be left out.
  pure subroutine log_rates(radiation_temperature_k, matter_temperature_k, rates, status, changes)
    real(dp), intent(in) :: radiation_temperature_k, matter_temperature_k
    type(rate_logarithms), intent(out) :: rates
    integer(c_int), intent(out) :: status
    type(constant_changes), intent(in), optional :: changes
    type(constant_changes) :: chosen
    type(factors) :: by
    if (present(changes)) chosen = changes
    rates = rate_logarithms(0.0_dp, 0.0_dp, 0.0_dp, 0.0_dp)
    call scale_constants(chosen, by, status)
    if (status /= status_ok) return
    call scaled_rates(radiation_temperature_k, matter_temperature_k, by, rates, status)
  end subroutine log_rates

  ! Rates of change at local conditions, kept levels in the quasi-steady state.
  ! Lines: @{line_rule}.
  ! 2s-1s: @{two_photon_rule}.
  pure subroutine right_hand_side(conditions, slopes, status)
    type(local_conditions), intent(in) :: conditions
    type(local_slopes), intent(out) :: slopes
    integer(c_int), intent(out) :: status
    type(rate_logarithms) :: rates
    type(factors) :: by
    real(dp) :: flow, compton_here
    slopes = local_slopes(0.0_dp, 0.0_dp, 0.0_dp)
    status = status_conditions
    if (.not. allowed(conditions)) return
    call scale_constants(conditions%changes, by, status)
    if (status /= status_ok) return
    call scaled_rates( &
      conditions%radiation_temperature_k, conditions%matter_temperature_k, by, rates, status)
    if (status /= status_ok) return
    call net_flow(conditions, rates, by, flow, status)
    if (status /= status_ok) return
    compton_here = compton * by%alpha**2 / by%electron**3 * conditions%radiation_temperature_k**4 &
      * conditions%electron_fraction &
      / (1.0_dp + conditions%helium_ratio + conditions%electron_fraction)
    slopes%ionized_fraction_per_s = -flow
    slopes%compton_rate_per_s = compton_here
    slopes%matter_temperature_k_per_s = &
      -2.0_dp * conditions%expansion_rate_per_s * conditions%matter_temperature_k &
      + compton_here * (conditions%radiation_temperature_k - conditions%matter_temperature_k)
  end subroutine right_hand_side

  pure logical function allowed(at)
    type(local_conditions), intent(in) :: at
    real(dp), parameter :: largest = 1.0e300_dp
    real(dp) :: values(5)
    values = [at%hydrogen_density_cm3, at%electron_fraction, at%ionized_fraction, &
      at%neutral_fraction, at%expansion_rate_per_s]
    allowed = all(values > 0.0_dp .and. values <= largest) .and. &
      at%helium_ratio >= 0.0_dp .and. at%helium_ratio <= largest
  end function allowed

  ! Cell and place in it; a rounding beyond an end of the range belongs to the last cell there.
  pure subroutine locate(value, low, high, cells, cell, t)
    real(dp), intent(in) :: value, low, high
    integer, intent(in) :: cells
    integer, intent(out) :: cell
    real(dp), intent(out) :: t
    real(dp) :: position
    position = (value - low) * (real(cells, dp) / (high - low))
    cell = min(max(int(position), 0), cells - 1)
    t = 2.0_dp * (position - real(cell, dp)) - 1.0_dp
    cell = cell + 1
  end subroutine locate

  pure logical function within(value, low, high)
    real(dp), intent(in) :: value, low, high
    within = value >= low - 1.0e-12_dp .and. value <= high + 1.0e-12_dp
  end function within

  pure subroutine check_radiation(radiation_k, x, status)
    real(dp), intent(in) :: radiation_k
    real(dp), intent(out) :: x
    integer(c_int), intent(out) :: status
    status = status_radiation_temperature
    x = 0.0_dp
    if (.not. radiation_k > 0.0_dp) return
    x = log(radiation_k)
    if (within(x, x_low, x_high)) status = status_ok
  end subroutine check_radiation

  pure subroutine check_matter(radiation_k, matter_k, y, status)
    real(dp), intent(in) :: radiation_k, matter_k
    real(dp), intent(out) :: y
    integer(c_int), intent(out) :: status
    status = status_temperature_ratio
    y = 0.0_dp
    if (.not. matter_k > 0.0_dp) return
    y = log(matter_k / radiation_k)
    if (.not. within(y, y_low, y_high)) return
    status = status_matter_temperature
    if (matter_k <= max(hottest_k, radiation_k) * (1.0_dp + 1.0e-12_dp)) status = status_ok
  end subroutine check_matter

  pure real(dp) function polynomial(coefficient, t)
    real(dp), intent(in) :: coefficient(0:top), t
    integer :: k
    polynomial = coefficient(top)
    do k = top - 1, 0, -1
      polynomial = polynomial * t + coefficient(k)
    end do
  end function polynomial

  pure subroutine at_equilibrium(cell, t, values)
    integer, intent(in) :: cell
    real(dp), intent(in) :: t
    real(dp), intent(out) :: values(n_kept)
    integer :: i
    do i = 1, n_kept
      values(i) = polynomial(equilibrium(:, i, cell), t)
    end do
  end subroutine at_equilibrium

  ! Turn ln A_i at T_m = T_r into ln A_i at T_m.
  pure subroutine add_departure(cell, t, y, values)
    integer, intent(in) :: cell
    real(dp), intent(in) :: t, y
    real(dp), intent(inout) :: values(n_kept)
    real(dp) :: in_y, total
    integer :: cell_y, i, k
    call locate(y, y_low, y_high, cells_y, cell_y, in_y)
    do i = 1, n_kept
      total = 0.0_dp
      do k = top, 0, -1
        total = total * t + polynomial(departure(:, k, i, cell_y, cell), in_y)
      end do
      values(i) = values(i) + y * total
    end do
  end subroutine add_departure

  ! ln of n_level/(n_electron n_ion) in equilibrium, with the volume in cm^3.
  pure function saha(temperature_k, log_temperature) result(values)
    real(dp), intent(in) :: temperature_k, log_temperature
    real(dp) :: values(n_kept)
    values = saha_offset - 1.5_dp * log_temperature + ionization_k / temperature_k
  end function saha

  pure subroutine exchange_at(radiation_k, cell, t, down, up)
    real(dp), intent(in) :: radiation_k, t
    integer, intent(in) :: cell
    real(dp), intent(out) :: down(n_pairs), up(n_pairs)
    integer :: p
    do p = 1, n_pairs
      down(p) = polynomial(exchange(:, p, cell), t)
      if (down(p) <= never) then
        down(p) = -huge(down)
        up(p) = -huge(up)
        cycle
      end if
      down(p) = down(p) - barrier_k(p) / radiation_k
      up(p) = down(p) + log_weight_ratio(p) - rise_k(p) / radiation_k
    end do
  end subroutine exchange_at

  pure subroutine scale_constants(changes, by, status)
    type(constant_changes), intent(in) :: changes
    type(factors), intent(out) :: by
    integer(c_int), intent(out) :: status
    by%alpha = 1.0_dp + changes%fine_structure
    by%electron = 1.0_dp + changes%electron_mass
    status = status_conditions
    by%reduced = 1.0_dp
    by%energy = 1.0_dp
    if (.not. (within(by%alpha, 0.8_dp, 1.2_dp) .and. within(by%electron, 0.8_dp, 1.2_dp))) return
    by%reduced = by%electron * (1.0_dp + mass_ratio) / (1.0_dp + mass_ratio * by%electron)
    by%energy = by%alpha**2 * by%reduced
    status = status_ok
  end subroutine scale_constants

  pure subroutine scaled_rates(actual_radiation_k, actual_matter_k, by, rates, status)
    real(dp), intent(in) :: actual_radiation_k, actual_matter_k
    type(factors), intent(in) :: by
    type(rate_logarithms), intent(out) :: rates
    integer(c_int), intent(out) :: status
    real(dp) :: radiation_k, x, y, t, log_rate
    integer :: cell
    rates = rate_logarithms(0.0_dp, 0.0_dp, 0.0_dp, 0.0_dp)
    radiation_k = actual_radiation_k / by%energy
    call check_radiation(radiation_k, x, status)
    if (status /= status_ok) return
    call check_matter(radiation_k, actual_matter_k / by%energy, y, status)
    if (status /= status_ok) return
    call locate(x, x_low, x_high, cells_x, cell, t)
    call at_equilibrium(cell, t, rates%recombination)
    rates%photoionization = rates%recombination - saha(radiation_k, x)
    call add_departure(cell, t, y, rates%recombination)
    call exchange_at(radiation_k, cell, t, rates%down, rates%up)
    log_rate = 5.0_dp * log(by%alpha) + log(by%reduced)
    rates%recombination = rates%recombination + 2.0_dp * (log(by%alpha) - log(by%reduced))
    rates%photoionization = rates%photoionization + log_rate
    rates%down = rates%down + log_rate
    rates%up = rates%up + log_rate
  end subroutine scaled_rates

  ! exp(x) - 1 to full precision, for x up to 0.
  pure elemental real(dp) function exp_less_one(x)
    real(dp), intent(in) :: x
    real(dp) :: half
    half = tanh(0.5_dp * x)
    exp_less_one = 2.0_dp * half / (1.0_dp - half)
  end function exp_less_one

  pure real(dp) function escape_probability(depth)
    real(dp), intent(in) :: depth
@{escape}
  end function escape_probability

  ! Rates to the ground state out of each kept level, in 1/s.
  pure subroutine exits(at, by, loss)
    type(local_conditions), intent(in) :: at
    type(factors), intent(in) :: by
    real(dp), intent(out) :: loss(n_kept)
    real(dp) :: reduced_k, column, rate, wavelength, depth
    integer :: k
    reduced_k = at%radiation_temperature_k / by%energy
    column = at%hydrogen_density_cm3 * at%neutral_fraction / (8.0_dp * pi * at%expansion_rate_per_s)
    loss = 0.0_dp
    do k = 1, n_lines
      rate = line_a(k) * by%alpha**5 * by%reduced
      wavelength = line_wavelength_cm(k) / by%energy
      depth = line_weight_ratio(k) * rate * wavelength**3 * column
      loss(line_upper(k)) = loss(line_upper(k)) &
        - rate * escape_probability(depth) / exp_less_one(-line_energy_k(k) / reduced_k)
    end do
    loss(1) = loss(1) + two_photon_rate * by%alpha**8 * by%reduced@{stimulation_factor}
  end subroutine exits
@{stimulation_function}
  ! Net recombinations per hydrogen nucleus and second. The unknowns are the departures of the kept
  ! levels from Boltzmann equilibrium with 1s at T_r, so that no large flows are subtracted.
  pure subroutine net_flow(at, rates, by, flow, status)
    type(local_conditions), intent(in) :: at
    type(rate_logarithms), intent(in) :: rates
    type(factors), intent(in) :: by
    real(dp), intent(out) :: flow
    integer(c_int), intent(out) :: status
    real(dp), dimension(n_kept) :: loss, capture, lift, departures
    real(dp) :: matrix(n_kept, n_kept), down, up
    integer :: i, j, p
    call exits(at, by, loss)
    capture = rates%recombination + log(at%hydrogen_density_cm3) + log(at%electron_fraction) &
      + log(at%ionized_fraction)
    lift = rates%photoionization + log(at%neutral_fraction * weight) &
      - energy_k * by%energy / at%radiation_temperature_k
    departures = sign(exp(max(capture, lift)) * exp_less_one(-abs(capture - lift)), capture - lift)
    matrix = 0.0_dp
    do i = 1, n_kept
      matrix(i, i) = loss(i) + exp(rates%photoionization(i))
    end do
    do p = 1, n_pairs
      i = lower(p)
      j = upper(p)
      down = exp(rates%down(p))
      up = exp(rates%up(p))
      matrix(i, i) = matrix(i, i) + up
      matrix(j, j) = matrix(j, j) + down
      matrix(j, i) = matrix(j, i) - up
      matrix(i, j) = matrix(i, j) - down
    end do
    call solve(matrix, departures, status)
    flow = sum(loss * departures)
  end subroutine net_flow

  ! Solve a x = b by elimination with row pivoting; x takes the place of b.
  pure subroutine solve(a, b, status)
    real(dp), intent(inout) :: a(n_kept, n_kept), b(n_kept)
    integer(c_int), intent(out) :: status
    real(dp) :: row(n_kept), held
    integer :: k, i, best
    status = status_singular
    do k = 1, n_kept
      best = k - 1 + maxloc(abs(a(k:, k)), dim=1)
      if (.not. abs(a(best, k)) > 0.0_dp) return
      row = a(k, :)
      a(k, :) = a(best, :)
      a(best, :) = row
      held = b(k)
      b(k) = b(best)
      b(best) = held
      do i = k + 1, n_kept
        held = a(i, k) / a(k, k)
        a(i, k:) = a(i, k:) - held * a(k, k:)
        b(i) = b(i) - held * b(k)
      end do
    end do
    do k = n_kept, 1, -1
      b(k) = (b(k) - dot_product(a(k, k + 1:), b(k + 1:))) / a(k, k)
    end do
    status = status_ok
  end subroutine solve

@{helium_code}end module @{prefix}_module
