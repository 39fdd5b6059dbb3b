    block
      real(dp) :: start, rise, depth, filled
      integer :: above
      above = he1_lit_by(line)
      ! The depth between the lines grows exponentially from its value at the line above, then.
      start = log(hydrogen_column_then) + he1_line_continuum(above)
      rise = log(hydrogen_column_now) + he1_line_continuum(line) - start
      depth = he1_delay(line) * exp(start)
      if (abs(rise) > 1.0e-8_dp) then
        depth = depth * exp_minus_one(rise) / rise
      else
        depth = depth * (1.0_dp + 0.5_dp * rise)
      end if
      filled = -exp_less_one(-depth)
      log_blue_side = log_sent - depth
      if (filled > 0.0_dp) log_blue_side = add_logs(log_blue_side, log(filled))
    end block
