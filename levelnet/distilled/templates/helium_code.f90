  ! Helium. Place, series and solver stand a second time here: those of hydrogen have its sizes as
  ! constants and take changed constants, and stay as they are in the code of a table without helium;
  ! those below serve ions of any size and subtract nothing.

@{stages}  ! Escape probability P of each line from the columns n_HeI/H and n_HI/H in s/cm^3 (H the expansion
  ! rate in 1/s) and T_r in K, in the range of the rates of He I.
  pure subroutine he1_escape(helium_column, hydrogen_column, radiation_temperature_k, escape, status)
    real(dp), intent(in) :: helium_column, hydrogen_column, radiation_temperature_k
    real(dp), intent(inout) :: escape(n_he1_lines)
    integer(c_int), intent(out) :: status
    real(dp) :: x, y, gain(n_he1_lines)
    status = status_conditions
    if (.not. (positive(helium_column) .and. positive(hydrogen_column))) return
    call stage_place(radiation_temperature_k, radiation_temperature_k, he1_span, x, y, status)
    if (status /= status_ok) return
    call gains(log(helium_column), log(hydrogen_column), x, gain, status)
    if (status == status_ok) escape = sobolev(he1_line_depth * helium_column) * exp(gain)
  end subroutine he1_escape

  ! The blackbody on the blue side of every line: ln u = 0.
  pure subroutine he1_blackbody(log_blue_side)
    real(dp), intent(out) :: log_blue_side(n_he1_lines)
    log_blue_side = 0.0_dp
  end subroutine he1_blackbody

  ! ln u on the blue side of a line from what the line above sent (ln u on its red side) one delay
  ! earlier@{feedback_rule}.
  ! |ln u| is 600 at most. The columns n_HI/H in s/cm^3, above 0, are those of then and of now.
  pure subroutine he1_blue_side( &
    line, log_sent, hydrogen_column_then, hydrogen_column_now, log_blue_side, status)
    integer, intent(in) :: line
    real(dp), intent(in) :: log_sent, hydrogen_column_then, hydrogen_column_now
    real(dp), intent(inout) :: log_blue_side
    integer(c_int), intent(out) :: status
    status = status_conditions
    if (.not. (line >= 1 .and. line <= n_he1_lines .and. abs(log_sent) <= brightest .and. &
      positive(hydrogen_column_then) .and. positive(hydrogen_column_now))) return
    status = status_ok
    log_blue_side = 0.0_dp
    if (he1_lit_by(line) < 1) return
    log_blue_side = log_sent
@{absorb}  end subroutine he1_blue_side

  ! Rates of change at local conditions, kept levels of every ion in the quasi-steady state.
  ! Below T_r = @{coldest_k} K helium is held as it is; its rates fade to that over @{ebb} of ln T_r.
  ! Where a slope would be no number within the doubles, status_conditions.
  ! He III: @{ion_rule}.
  pure subroutine plasma_right_hand_side(plasma, slopes, status)
    type(plasma_conditions), intent(in) :: plasma
    type(plasma_slopes), intent(inout) :: slopes
    integer(c_int), intent(out) :: status
    type(plasma_slopes) :: found
    real(dp) :: electron_fraction, full
    status = status_conditions
    if (.not. plasma_allowed(plasma)) return
    electron_fraction = plasma%ionized_hydrogen + plasma%helium_ratio &
      * (plasma%singly_ionized_helium + 2.0_dp * plasma%doubly_ionized_helium)
    call hydrogen_slopes(plasma, electron_fraction, found, status)
    if (status /= status_ok) return
    full = ramp(log(plasma%radiation_temperature_k / coldest_k) / ebb)
    if (full > 0.0_dp) call helium_slopes( &
      plasma, electron_fraction * plasma%hydrogen_density_cm3, found, status)
    if (status /= status_ok) return
    found%log_helium_per_s = full * found%log_helium_per_s
    found%log_double_per_s = full * found%log_double_per_s
    found%neutral_helium_per_s = full * found%neutral_helium_per_s
    found%doubly_ionized_helium_per_s = full * found%doubly_ionized_helium_per_s
    found%singly_ionized_helium_per_s = &
      -found%neutral_helium_per_s - found%doubly_ionized_helium_per_s
    status = status_conditions
    if (.not. finite(found)) return
    status = status_ok
    slopes = found
  end subroutine plasma_right_hand_side

  ! Whether every slope is a number within the doubles.
  pure logical function finite(of)
    type(plasma_slopes), intent(in) :: of
    real(dp), parameter :: largest = 1.0e300_dp
    finite = all(abs([of%log_hydrogen_per_s, of%log_helium_per_s, of%log_double_per_s, &
      of%ionized_hydrogen_per_s, of%neutral_helium_per_s, of%singly_ionized_helium_per_s, &
      of%doubly_ionized_helium_per_s, of%matter_temperature_k_per_s, of%compton_rate_per_s, &
      of%electron_fraction]) <= largest) .and. all(abs(of%log_red_side) <= largest)
  end function finite

  pure elemental logical function positive(value)
    real(dp), intent(in) :: value
    positive = value > 0.0_dp .and. value <= 1.0e300_dp
  end function positive

  pure logical function unchanged(changes)
    type(constant_changes), intent(in) :: changes
    unchanged = abs(changes%fine_structure) <= 0.0_dp .and. abs(changes%electron_mass) <= 0.0_dp
  end function unchanged

  pure logical function plasma_allowed(at)
    type(plasma_conditions), intent(in) :: at
    plasma_allowed = all(positive([at%hydrogen_density_cm3, at%helium_ratio, at%ionized_hydrogen, &
      at%neutral_hydrogen, at%neutral_helium, at%singly_ionized_helium, at%doubly_ionized_helium, &
      at%expansion_rate_per_s])) .and. all(abs(at%log_blue_side) <= brightest) .and. &
      unchanged(at%changes)
  end function plasma_allowed

  ! exp(x) - 1 to full precision for any x.
  pure elemental real(dp) function exp_minus_one(x)
    real(dp), intent(in) :: x
    exp_minus_one = exp_less_one(-abs(x))
    if (x > 0.0_dp) exp_minus_one = -exp(x) * exp_minus_one
  end function exp_minus_one

  ! ln(1 + x) to full precision.
  pure elemental real(dp) function log_one_plus(x)
    real(dp), intent(in) :: x
    if (abs(x) < 0.5_dp) then
      log_one_plus = 2.0_dp * atanh(x / (2.0_dp + x))
    else
      log_one_plus = log(1.0_dp + x)
    end if
  end function log_one_plus

  ! ln of the sum of two numbers from their ln.
  pure elemental real(dp) function add_logs(a, b)
    real(dp), intent(in) :: a, b
    add_logs = max(a, b) + log_one_plus(exp(-abs(a - b)))
  end function add_logs

  ! Smooth step from 0 at x = 0 to 1 at x = 1.
  pure real(dp) function ramp(x)
    real(dp), intent(in) :: x
    real(dp) :: t
    t = min(max(x, 0.0_dp), 1.0_dp)
    ramp = t * t * (3.0_dp - 2.0_dp * t)
  end function ramp

  pure elemental real(dp) function sobolev(depth)
    real(dp), intent(in) :: depth
    sobolev = 1.0_dp - 0.5_dp * depth
    if (depth > 1.0e-8_dp) sobolev = -exp_less_one(-depth) / depth
  end function sobolev

  pure real(dp) function series(coefficient, t)
    real(dp), intent(in) :: coefficient(:), t
    integer :: k
    series = coefficient(size(coefficient))
    do k = size(coefficient) - 1, 1, -1
      series = series * t + coefficient(k)
    end do
  end function series

  pure subroutine stage_place(radiation_k, matter_k, span, x, y, status)
    real(dp), intent(in) :: radiation_k, matter_k, span(4)
    real(dp), intent(out) :: x, y
    integer(c_int), intent(out) :: status
    status = status_radiation_temperature
    x = 0.0_dp
    y = 0.0_dp
    if (.not. radiation_k > 0.0_dp) return
    x = log(radiation_k)
    if (.not. within(x, span(1), span(2))) return
    status = status_temperature_ratio
    if (.not. matter_k > 0.0_dp) return
    y = log(matter_k / radiation_k)
    if (.not. within(y, span(3), span(4))) return
    status = status_matter_temperature
    if (matter_k <= max(hottest_k, radiation_k) * (1.0_dp + 1.0e-12_dp)) status = status_ok
  end subroutine stage_place

  ! Logarithms of the rates of one ion from its power series, laid out as those of hydrogen are.
  pure subroutine stage_at(radiation_k, matter_k, span, alone, swapped, apart, pair, level, &
    recombination, photoionization, down, up, status)
    real(dp), intent(in) :: radiation_k, matter_k, span(4), alone(:, :, :), swapped(:, :, :)
    real(dp), intent(in) :: apart(:, :, :, :, :), pair(:, :), level(:, :)
    real(dp), intent(inout) :: recombination(:), photoionization(:), down(:), up(:)
    integer(c_int), intent(out) :: status
    real(dp) :: x, y, in_x, in_y, more
    integer :: cell, cell_y, i, k
    call stage_place(radiation_k, matter_k, span, x, y, status)
    if (status /= status_ok) return
    call locate(x, span(1), span(2), size(alone, 3), cell, in_x)
    call locate(y, span(3), span(4), size(apart, 4), cell_y, in_y)
    do i = 1, size(recombination)
      recombination(i) = series(alone(:, i, cell), in_x)
      photoionization(i) = recombination(i) &
        - (level(i, 3) - 1.5_dp * x + level(i, 4) / radiation_k)
      more = 0.0_dp
      do k = size(apart, 2), 1, -1
        more = more * in_x + series(apart(:, k, i, cell_y, cell), in_y)
      end do
      recombination(i) = recombination(i) + y * more
    end do
    do i = 1, size(down)
      down(i) = series(swapped(:, i, cell), in_x)
      if (down(i) <= never) then
        down(i) = -huge(down)
        up(i) = -huge(up)
        cycle
      end if
      down(i) = down(i) - pair(i, 1) / radiation_k
      up(i) = down(i) + pair(i, 3) - pair(i, 2) / radiation_k
    end do
  end subroutine stage_at

  ! Rate from its ln; 0 long before products of rates leave the doubles.
  pure elemental real(dp) function rate_of(log_rate)
    real(dp), intent(in) :: log_rate
    rate_of = 0.0_dp
    if (log_rate > -300.0_dp) rate_of = exp(log_rate)
  end function rate_of

  ! Elimination without a single subtraction (Grassmann, Taksar & Heyman 1985, Oper. Res. 33, 1107);
  ! `total` receives the exits.
  pure subroutine eliminate(rate, loss, photo, total)
    real(dp), intent(inout) :: rate(:, :), loss(:), photo(:)
    real(dp), intent(out) :: total(:)
    real(dp) :: part
    integer :: m, i, j
    do m = size(loss), 1, -1
      total(m) = loss(m) + photo(m) + sum(rate(m, :m - 1))
      do i = 1, m - 1
        part = rate(i, m) / total(m)
        loss(i) = loss(i) + part * loss(m)
        photo(i) = photo(i) + part * photo(m)
        do j = 1, m - 1
          if (j /= i) rate(i, j) = rate(i, j) + part * rate(m, j)
        end do
      end do
    end do
  end subroutine eliminate

  ! Net recombinations per nucleus and second, kept levels of one ion in the quasi-steady state, and
  ! their departures from Boltzmann equilibrium with the ground state; pairs = n_e n_ion over the
  ! nuclei, in cm^-3; excess: what a level takes from the ground state beyond equilibrium.
  pure subroutine net_recombination(recombination, photoionization, down, up, lower_levels, &
    upper_levels, level, radiation_k, pairs, ground, loss, excess, flow, departures, status)
    real(dp), intent(in) :: recombination(:), photoionization(:), down(:), up(:), level(:, :)
    integer, intent(in) :: lower_levels(:), upper_levels(:)
    real(dp), intent(in) :: radiation_k, pairs, ground, loss(:), excess(:)
    real(dp), intent(out) :: flow, departures(:)
    integer(c_int), intent(out) :: status
    real(dp), dimension(size(loss)) :: capture, lift, source, lost, photo, total, fate, again
    real(dp) :: rate(size(loss), size(loss))
    integer :: p, m
    capture = recombination + log(pairs)
    lift = photoionization + log(ground) + level(:, 1) - level(:, 2) / radiation_k
    source = sign(exp(max(capture, lift)) * exp_less_one(-abs(capture - lift)), capture - lift)
    rate = 0.0_dp
    do p = 1, size(down)
      rate(upper_levels(p), lower_levels(p)) = rate_of(down(p))
      rate(lower_levels(p), upper_levels(p)) = rate_of(up(p))
    end do
    lost = loss
    photo = rate_of(photoionization)
    call eliminate(rate, lost, photo, total)
    flow = 0.0_dp
    departures = source + excess
    status = status_singular
    if (.not. all(total > 0.0_dp)) return
    do m = 1, size(loss)
      fate(m) = (lost(m) + dot_product(rate(m, :m - 1), fate(:m - 1))) / total(m)
      again(m) = (photo(m) + dot_product(rate(m, :m - 1), again(:m - 1))) / total(m)
      flow = flow + fate(m) * source(m) - again(m) * excess(m)
    end do
    do m = size(loss), 2, -1
      departures(:m - 1) = departures(:m - 1) + rate(m, :m - 1) * (departures(m) / total(m))
    end do
    do m = 1, size(loss)
      departures(m) = &
        (departures(m) + dot_product(rate(:m - 1, m), departures(:m - 1))) / total(m)
    end do
    status = status_ok
  end subroutine net_recombination

@{gains}
  ! Losses of the kept levels of He I, and what they take from the ground state where the light on
  ! the blue side of a line is no blackbody: A S f (u - 1), f the photons per mode of a blackbody.
  pure subroutine couple(at, column, loss, excess, status)
    type(plasma_conditions), intent(in) :: at
    real(dp), intent(in) :: column
    real(dp), intent(out) :: loss(n_he1), excess(n_he1)
    integer(c_int), intent(out) :: status
    real(dp) :: gain(n_he1_lines), exponent, emitted, rate, blue, kelvin
    integer :: i, k
    kelvin = at%radiation_temperature_k
    loss = 0.0_dp
    excess = 0.0_dp
    call gains(log(column), log(at%hydrogen_density_cm3 * at%neutral_hydrogen &
      / at%expansion_rate_per_s), log(kelvin), gain, status)
    if (status /= status_ok) return
    do k = 1, n_he1_lines
      i = he1_line_upper(k)
      exponent = he1_line_energy_k(k) / kelvin
      blue = at%log_blue_side(k)
      emitted = -1.0_dp / exp_less_one(-exponent)
      rate = he1_line_a(k) * sobolev(he1_line_depth(k) * column)
      loss(i) = loss(i) + rate * emitted * exp(gain(k)) &
        + rate * (exp(blue - exponent) - exp(-exponent)) * emitted
      excess(i) = excess(i) + rate * exp_minus_one(blue) * at%neutral_helium &
        * exp(he1_level(i, 1) - he1_level(i, 2) / kelvin)
    end do
    loss(he1_decay) = loss(he1_decay) + he1_decay_rate
  end subroutine couple

  ! ln u that each line sends on: its own light where it is thick, its blue side where it is thin.
  pure subroutine send(at, column, departures, log_red_side)
    type(plasma_conditions), intent(in) :: at
    real(dp), intent(in) :: column, departures(n_he1)
    real(dp), intent(out) :: log_red_side(n_he1_lines)
    real(dp) :: exponent, own, above, depth, lost, kelvin
    integer :: i, k
    kelvin = at%radiation_temperature_k
    do k = 1, n_he1_lines
      i = he1_line_upper(k)
      exponent = he1_line_energy_k(k) / kelvin
      above = departures(i) &
        / (at%neutral_helium * exp(he1_level(i, 1) - he1_level(i, 2) / kelvin))
      own = log_one_plus(max(above, -1.0_dp + 1.0e-15_dp))
      own = own + log(-exp_less_one(-exponent)) &
        - log(-exp_less_one(min(own - exponent, -1.0e-12_dp)))
      depth = he1_line_depth(k) * column
      lost = -exp_less_one(-depth)
      log_red_side(k) = at%log_blue_side(k)
      if (lost > 0.0_dp) log_red_side(k) = add_logs(own + log(lost), log_red_side(k) - depth)
    end do
  end subroutine send

  ! Slopes of helium, before they fade.
  pure subroutine helium_slopes(at, electrons, slopes, status)
    type(plasma_conditions), intent(in) :: at
    real(dp), intent(in) :: electrons
    type(plasma_slopes), intent(inout) :: slopes
    integer(c_int), intent(out) :: status
    type(he1_logarithms) :: rates
    real(dp) :: loss(n_he1), excess(n_he1), departures(n_he1), column, first, second, part, pulled
    real(dp) :: singly, doubly, charged, b
    singly = at%singly_ionized_helium
    doubly = at%doubly_ionized_helium
    charged = singly + doubly
    b = log(doubly / singly)
    column = at%hydrogen_density_cm3 * at%helium_ratio * at%neutral_helium / at%expansion_rate_per_s
    call he1_log_rates(at%radiation_temperature_k, at%matter_temperature_k, rates, status)
    if (status /= status_ok) return
    call couple(at, column, loss, excess, status)
    if (status /= status_ok) return
    call net_recombination(rates%recombination, rates%photoionization, rates%down, rates%up, &
      he1_lower, he1_upper, he1_level, at%radiation_temperature_k, electrons * singly, &
      at%neutral_helium, loss, excess, first, departures, status)
    if (status /= status_ok) return
    call send(at, column, departures, slopes%log_red_side)
    call second_recombination(at, electrons, b, part, second, status)
    if (status /= status_ok) return
    pulled = pull * at%expansion_rate_per_s * (saha_of_double + 1.5_dp * log(at%matter_temperature_k) &
      - reach_of_double_k / at%matter_temperature_k - log(electrons) - b)
    slopes%log_helium_per_s = -first / (at%neutral_helium * charged)
    slopes%log_double_per_s = (1.0_dp - part) * pulled
    if (part > 0.0_dp) slopes%log_double_per_s = slopes%log_double_per_s &
      - part * (second * (1.0_dp / doubly + 1.0_dp / singly) - first / singly)
    slopes%neutral_helium_per_s = first
    slopes%doubly_ionized_helium_per_s = -part * second &
      + (1.0_dp - part) * doubly * (singly * pulled - first) / charged
  end subroutine helium_slopes

@{second}
  pure subroutine hydrogen_slopes(at, electron_fraction, slopes, status)
    type(plasma_conditions), intent(in) :: at
    real(dp), intent(in) :: electron_fraction
    type(plasma_slopes), intent(inout) :: slopes
    integer(c_int), intent(out) :: status
    type(local_slopes) :: found
    call right_hand_side(local_conditions(at%hydrogen_density_cm3, electron_fraction, &
      at%ionized_hydrogen, at%neutral_hydrogen, at%matter_temperature_k, &
      at%radiation_temperature_k, at%expansion_rate_per_s, at%helium_ratio, &
      constant_changes(0.0_dp, 0.0_dp)), found, status)
    slopes%ionized_hydrogen_per_s = found%ionized_fraction_per_s
    slopes%log_hydrogen_per_s = &
      found%ionized_fraction_per_s / (at%ionized_hydrogen * at%neutral_hydrogen)
    slopes%matter_temperature_k_per_s = found%matter_temperature_k_per_s
    slopes%compton_rate_per_s = found%compton_rate_per_s
    slopes%electron_fraction = electron_fraction
  end subroutine hydrogen_slopes

