

  ! Helium: nothing but `status` is written unless it is status_ok.
  ! A line of He I is deeper than the table of escape holds.
  integer(c_int), parameter, public :: status_escape = 6
@{stages}
  ! Lines of He I to its ground state: @{line_names}
  ! and two photons from @{decay_name}. Escape: @{escape_rule}.
  ! In equilibrium with the radiation the field is a blackbody. What is told of light is ln u, u the
  ! photons per mode over those of the blackbody at T_r, which redshifting leaves as it is: line k
  ! is lit on its blue side by what line he1_lit_by(k) sent on its red side when ln a was lower by
  ! he1_delay(k); 0 and 0 where none is above it and its light is the blackbody.
  ! The delays are ln of the ratio of energies.
  integer, parameter, public :: n_he1_lines = @{n_lines}
  integer, parameter, public :: he1_lit_by(n_he1_lines) = [ &
@{lit_by} ]
  real(dp), parameter, public :: he1_delay(n_he1_lines) = [ &
@{delay} ]
  public :: he1_escape, he1_blackbody, he1_blue_side, plasma_right_hand_side

  ! Local conditions of hydrogen and helium. Every fraction is asked for, so that none need be
  ! formed as a difference; electrons follow from them. Fractions of hydrogen are per hydrogen
  ! nucleus, those of helium per helium nucleus; all above 0.
  type, bind(c), public :: plasma_conditions
    real(dp) :: hydrogen_density_cm3      ! all hydrogen nuclei; above 0
    real(dp) :: helium_ratio              ! n_He/n_H; above 0
    real(dp) :: ionized_hydrogen
    real(dp) :: neutral_hydrogen
    real(dp) :: neutral_helium
    real(dp) :: singly_ionized_helium
    real(dp) :: doubly_ionized_helium
    real(dp) :: matter_temperature_k
    real(dp) :: radiation_temperature_k
    real(dp) :: expansion_rate_per_s      ! H, or a third of the local divergence of velocity
    real(dp) :: log_blue_side(n_he1_lines) = 0.0_dp  ! ln u, as above; -600 to 600
    type(constant_changes) :: changes     ! 0, 0
  end type plasma_conditions

  ! Slopes of the fractions are net flows, none the difference of large rates. Far from 1/2 a
  ! fraction is best followed by its odds, to full relative precision: with
  !     u = ln(x_HII/x_HI), a = ln((x_HeII + x_HeIII)/x_HeI), b = ln(x_HeIII/x_HeII)
  ! x_HII = 1/(1 + exp(-u)), x_HI = 1/(1 + exp(u)), and so on. Where a falls below -34 and b below
  ! -30 nothing is left of the ion: let them rest there, for their rates go on being stiff.
  type, bind(c), public :: plasma_slopes
    real(dp) :: log_hydrogen_per_s = 0.0_dp  ! du/dt
    real(dp) :: log_helium_per_s = 0.0_dp    ! da/dt
    real(dp) :: log_double_per_s = 0.0_dp    ! db/dt
    real(dp) :: ionized_hydrogen_per_s = 0.0_dp
    real(dp) :: neutral_helium_per_s = 0.0_dp
    real(dp) :: singly_ionized_helium_per_s = 0.0_dp
    real(dp) :: doubly_ionized_helium_per_s = 0.0_dp
    real(dp) :: matter_temperature_k_per_s = 0.0_dp  ! -2 H T_m + compton_rate (T_r - T_m)
    real(dp) :: compton_rate_per_s = 0.0_dp
    real(dp) :: electron_fraction = 0.0_dp   ! n_e/n_H
    real(dp) :: log_red_side(n_he1_lines) = 0.0_dp  ! ln u that each line sends on
  end type plasma_slopes

  ! Lines of He I: upper level, A in 1/s, tau H/n_HeI in cm^3/s, energy in K; and two photons.
  integer, parameter :: he1_line_upper(n_he1_lines) = [ &
@{line_upper} ]
  real(dp), parameter :: he1_line_a(n_he1_lines) = [ &
@{line_a} ]
  real(dp), parameter :: he1_line_depth(n_he1_lines) = [ &
@{line_depth} ]
  real(dp), parameter :: he1_line_energy_k(n_he1_lines) = [ &
@{line_energy_k} ]
  integer, parameter :: he1_decay = @{decay}
  real(dp), parameter :: he1_decay_rate = @{decay_rate}

  ! He III/He II in Saha equilibrium at T_m: ln = offset + 1.5 ln T - I/kT - ln n_e. Pull to it in
  ! Hubble rates, and ln of the ratio between which it takes over from the levels.
  real(dp), parameter :: saha_of_double = @{saha_double}, reach_of_double_k = @{reach_double}
  real(dp), parameter :: pull = @{pull}, gone = @{gone}, fading = @{fading}
  ! Largest |ln u| of light, so that its products with rates stay within the doubles.
  real(dp), parameter :: brightest = 600.0_dp
  ! Below this T_r helium is held as it is; its rates fade to that over ebb of ln T_r.
  real(dp), parameter :: coldest_k = @{coldest}, ebb = @{ebb}
