"""What do the choices of a setup change? The tables of the README's section on validity.

    python -m benchmarks.choices

An invented universe, as in the other benchmarks; runs for about two minutes.
"""

from __future__ import annotations

from benchmarks.history import COSMOLOGY  # pins threads

# isort: split
import math
import warnings
from typing import Any

import numpy as np
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq

from levelnet.background.matter import compton_rate_per_s
from levelnet.constants import SECONDS_PER_YEAR
from levelnet.errors import AccuracyWarning
from levelnet.history.result import History
from levelnet.history.run import solve
from levelnet.history.setup import Setup

REDSHIFTS = (1400.0, 1300.0, 1200.0, 1100.0, 1050.0, 1000.0, 900.0, 800.0, 500.0, 200.0)


def run(n_max: int, lines: dict[str, Any] | None = None, **hydrogen: Any) -> History:
    """A history at the listed redshifts."""
    grid = {"redshift_start": 1400.0, "redshift_end": 200.0, "redshifts": REDSHIFTS}
    return solve(Setup(COSMOLOGY, {"n_max": n_max} | hydrogen, lines=lines or {}, grid=grid))


def change(one: History, other: History) -> str:
    """Relative change of x_e from one history to another, at the listed redshifts."""
    ratio = other.free_electron_fraction / one.free_electron_fraction - 1.0
    pairs = zip(REDSHIFTS, ratio.tolist(), strict=True)
    return "  ".join(f"{z:g}: {value:+.1e}" for z, value in pairs)


def open_lyman_lines() -> None:
    """Print what isolated high Lyman lines add."""
    for n_max in (4, 10, 30, 100):
        one, every = run(n_max), run(n_max, {"lyman_lines": "all"})
        net = every.channels.net_rate_per_s
        share = net[:, 2:].sum(axis=1) / net[:, 1:].sum(axis=1)
        text = "  ".join(f"{z:g}: {100 * x:.2f} %" for z, x in zip(REDSHIFTS, share, strict=True))
        print(f"n_max {n_max:3d}: share of the escape above Lyman-alpha  {text}")
        print(f"           change of x_e                         {change(one, every)}", flush=True)


def feedback() -> None:
    """Print what feedback among the Lyman lines does."""
    one = run(12)
    for count in (2, 3, 8):
        lit = run(12, {"hydrogen": "sobolev_feedback", "lyman_lines": count})
        print(f"feedback among {count} lines, against one:      {change(one, lit)}", flush=True)
    print(f"against 8 isolated lines: {change(run(12, {'lyman_lines': 8}), lit)}", flush=True)


def redshift_of(curve: CubicSpline, level: float) -> float:
    """Redshift where x_e, given as ln x_e over ln(1 + z), falls through `level`."""
    return math.expm1(brentq(lambda y: float(curve(y)) - math.log(level), *curve.x[[0, -1]]))


def without_two_photons() -> None:
    """Print when a universe with and without the 2s-1s channel recombines."""
    grid = {"redshift_start": 1700.0, "redshift_end": 400.0, "n_redshifts": 600}
    for rate in (8.2246, 0.0):
        history = solve(Setup(COSMOLOGY, {"n_max": 50, "two_photon_rate_per_s": rate}, grid=grid))
        growth = np.log1p(history.redshift[::-1])
        curve = CubicSpline(growth, np.log(history.free_electron_fraction[::-1]))
        events = [(f"x_e = {x:g}", redshift_of(curve, x)) for x in (0.9, 0.5, 0.1, 0.01)]
        events.append(("tau = 1", history.milestones.last_scattering_redshift))
        for event, redshift in events:
            years = COSMOLOGY.cosmic_time_s(redshift) / SECONDS_PER_YEAR
            print(f"two-photon rate {rate:g}: {event:9s} z = {redshift:.1f}, {years:,.0f} years")
        late = math.exp(float(curve(math.log1p(500.0))))
        print(f"two-photon rate {rate:g}: x_e(500) = {late:.3e}", flush=True)


def whole_shells() -> None:
    """Print what it does to put whole shells in place of levels resolved in l."""
    resolved = run(100)
    for top in (2, 10, 30, 50, 70, 90):
        print(
            f"l to n = {top:2d} of 100: {change(resolved, run(100, resolve_l_to=top))}", flush=True
        )


def heat_of_recombination() -> None:
    """Print the bound on what recombining electrons take along, over T_m."""
    grid = {"redshift_start": 1700.0, "redshift_end": 20.0, "n_redshifts": 400}
    history = solve(Setup(COSMOLOGY, {"n_max": 30}, grid=grid))
    x, helium = history.free_electron_fraction, COSMOLOGY.helium_ratio()
    speed = np.abs(np.gradient(x, -np.log1p(history.redshift)))
    compton = compton_rate_per_s(history.radiation_temperature_k, x, helium)
    bound = speed / (1.0 + helium + x) / (compton / history.hubble_rate_per_s + 2.0)
    top = int(np.argmax(bound))
    where = history.redshift[top]
    print(f"heat of recombination left out: {bound[top]:.1e} of T_m at z = {where:.0f}")


if __name__ == "__main__":
    warnings.simplefilter("ignore", AccuracyWarning)
    open_lyman_lines()
    feedback()
    without_two_photons()
    whole_shells()
    plain, plainer = run(30), run(30, energies="nonrelativistic")
    print(f"nonrelativistic for measured energies: {change(plain, plainer)}")
    stimulated = run(30, {"two_photon": "stimulated"})
    print(f"stimulated 2s-1s alone:                {change(plain, stimulated)}")
    print(f"n_max 30 for 100:                      {change(run(100), plain)}")
    heat_of_recombination()
