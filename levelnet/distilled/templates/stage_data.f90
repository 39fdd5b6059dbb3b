
  ! Effective rates of @{species}, with the measured constants alone: changes that are not 0 are refused.
  ! T_r from @{low_k} to @{high_k} K, T_m/T_r from @{ratio_low} to @{ratio_high}, T_m as above.
  ! Kept levels, in the order of all arrays: @{level_names}
  ! Pairs, lower - upper: @{pair_names}
  integer, parameter, public :: n_@{ion} = @{n_kept}, n_@{ion}_pairs = @{n_pairs}
  public :: @{ion}_log_rates

  type, bind(c), public :: @{ion}_logarithms
    real(dp) :: recombination(n_@{ion})    ! ln A_i, A_i in cm^3/s
    real(dp) :: photoionization(n_@{ion})  ! ln B_i, B_i in 1/s
    real(dp) :: down(n_@{ion}_pairs)       ! ln of exchange, upper to lower, 1/s
    real(dp) :: up(n_@{ion}_pairs)         ! ln of exchange, lower to upper, 1/s
  end type @{ion}_logarithms

  ! Ranges of x and y; pairs: positions, barrier and energy difference in K, ln of the ratio of
  ! weights; levels: ln of the weight over that of the ground state, energy in K, and
  ! ln[(g/g_ion) (thermal wavelength at 1 K)^3 / (2 cm^3)], ionization energy in K.
  real(dp), parameter :: @{ion}_span(4) = [ &
@{span} ]
  integer, parameter :: @{ion}_lower(n_@{ion}_pairs) = [ &
@{lower} ]
  integer, parameter :: @{ion}_upper(n_@{ion}_pairs) = [ &
@{upper} ]
  real(dp), parameter :: @{ion}_pair(n_@{ion}_pairs, 3) = reshape([ &
@{pair} &
    ], [n_@{ion}_pairs, 3])
  real(dp), parameter :: @{ion}_level(n_@{ion}, 4) = reshape([ &
@{level} &
    ], [n_@{ion}, 4])
  real(dp), save :: @{ion}_equilibrium(0:@{top}, n_@{ion}, @{cells_x})
  real(dp), save :: @{ion}_exchange(0:@{top}, n_@{ion}_pairs, @{cells_x})
  real(dp), save :: @{ion}_departure(0:@{top}, 0:@{top}, n_@{ion}, @{cells_y}, @{cells_x})
@{data}
