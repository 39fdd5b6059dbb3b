"""The Coulomb approximation of He I against published rates, line by line: a table of the README.

    python -m benchmarks.helium_atom

Rates as published (`atomic_tables/helium/transition_rates.csv`), rates of the Coulomb approximation
alone with measured energies, their ratio; then absorption oscillator strengths that follow.
"""

from __future__ import annotations

from levelnet import constants as const
from levelnet.atomic import helium_lines
from levelnet.atomic.bound_bound import dipole_blocks
from levelnet.atomic.helium_ground import GROUND, published_rates_per_s
from levelnet.atomic.helium_levels import helium_levels, term_numbers

N_MAX = 5


def main() -> None:
    """Print the table."""
    levels, hydrogen = helium_levels(N_MAX), dipole_blocks(N_MAX)
    # The one place that leaves published rates out.
    plain = tuple(helium_lines._computed(levels, spin, hydrogen) for spin in (0, 1))
    computed = helium_lines.HeliumLines(levels, (plain[0], plain[1]))
    print("line           published s^-1   computed s^-1   ratio   f (published)")
    for (upper, lower), rate in published_rates_per_s().items():
        if not upper[-1].isalpha() or lower == GROUND:
            continue
        ends = levels.index(*term_numbers(upper)), levels.index(*term_numbers(lower))
        found = computed.einstein_a(*ends)
        omega = (levels.energy_ev[ends[0]] - levels.energy_ev[ends[1]]) / (2.0 * const.RYDBERG_EV)
        strength = rate * const.ATOMIC_TIME_S / (2.0 * const.FINE_STRUCTURE**3 * omega**2)
        strength *= levels.statistical_weight[ends[0]] / levels.statistical_weight[ends[1]]
        print(
            f"{upper + ' - ' + lower:14} {rate:14.4e} {found:15.4e} {found / rate:9.4f}"
            f" {strength:11.5f}"
        )


if __name__ == "__main__":
    main()
