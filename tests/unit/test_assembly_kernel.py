"""The compiled assembly of the symmetric blocks against its own source and a line-by-line sum."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from scipy import constants as codata

from levelnet.atomic.bound_bound import einstein_a
from levelnet.kernels import assembly
from levelnet.kernels.assembly import symmetric_blocks
from levelnet.network.ladder import Ladder, hydrogen_ladder
from levelnet.network.line_rates import half_angle_tables
from tests.tolerances import ROUND_OFF

KELVIN_PER_EV = codata.e / codata.k
KEPT = {
    "2s 2p": ((2, 0), (2, 1)),
    "gap in a block": ((2, 0), (2, 1), (4, 1), (5, 3)),
    "none of l = 0": ((2, 1),),
}


def assembled(ladder: Ladder, kelvin: float, kernel: Any) -> dict[str, np.ndarray]:
    """Run the kernel with a sink of 3 s^-1 everywhere; buffers start as not-a-number."""
    inside = ladder.interior
    kt = kelvin / KELVIN_PER_EV
    energy = ladder.levels.energy_ev[inside.position]
    weight = ladder.levels.statistical_weight[inside.position]
    root = np.sqrt(weight * np.exp(-(energy - energy.min()) / kt))
    n = inside.shape.n_unknowns
    scale, down, diagonal = (np.full(n, np.nan) for _ in range(3))
    coupling = np.full(inside.shape.n_couplings, np.nan)
    kernel(
        ladder.n_max,
        inside.first_n,
        ladder.dipole.strength_per_s,
        ladder.dipole.offset,
        *half_angle_tables(ladder, kt),
        inside.shape.start,
        inside.shape.coupling_start,
        root,
        ladder.energy_excess_ev[inside.position] / kt,
        np.where(inside.idle, 0.0, 1.0),
        np.full(n, 3.0),
        scale,
        down,
        diagonal,
        coupling,
    )
    return {
        "coupling": coupling,
        "scale": scale,
        "diagonal": diagonal,
        "downward": down,
        "root": root,
    }


def both_directions(ladder: Ladder, kelvin: float) -> np.ndarray:
    """Rates between interior levels from A, the Planck occupation and Einstein's relations."""
    inside = ladder.interior
    n, l, energy = inside.n, inside.l, ladder.levels.energy_ev[inside.position]
    rates = np.zeros((len(n), len(n)))
    for i in range(len(n)):
        for j in range(len(n)):
            allowed = n[i] > n[j] and abs(l[i] - l[j]) == 1
            if allowed and not inside.idle[i] and not inside.idle[j]:
                occupation = 1.0 / np.expm1((energy[i] - energy[j]) * KELVIN_PER_EV / kelvin)
                a = einstein_a(n[i], l[i], n[j], l[j])
                rates[i, j] = a * (1.0 + occupation)
                rates[j, i] = a * occupation * (2 * l[i] + 1) / (2 * l[j] + 1)
    return rates


@pytest.mark.parametrize("kept", KEPT.values(), ids=KEPT)
@pytest.mark.parametrize("energies", ["measured", "nonrelativistic"])
def test_against_its_own_source(kept: Any, energies: str, monkeypatch: pytest.MonkeyPatch) -> None:
    ladder = hydrogen_ladder(7, energies, kept)
    ours = assembled(ladder, 2500.0, symmetric_blocks)
    plain: Any = symmetric_blocks
    inner: Any = assembly._fill
    monkeypatch.setattr(assembly, "_fill", inner.py_func)
    source = assembled(ladder, 2500.0, plain.py_func)
    for name, values in ours.items():
        # Compiled code may join a product and a sum in one rounding.
        np.testing.assert_allclose(values, source[name], rtol=10 * ROUND_OFF, err_msg=name)


@pytest.mark.parametrize("kept", KEPT.values(), ids=KEPT)
@pytest.mark.parametrize("energies", ["measured", "nonrelativistic"])
@pytest.mark.parametrize("kelvin", [100.0, 2500.0, 6000.0])
def test_against_line_by_line_rates(kept: Any, energies: str, kelvin: float) -> None:
    # Einstein 1917, Phys. Z. 18, 121, with the occupation of the actual line energy. The kernel
    # expands in the fine structure d: (d/kT)^3/96 for a line far above kT, (1e-5)^2 of one below;
    # d is up to 6e-5 eV (the Lamb shift and fine structure of n = 2).
    tolerance = 1e-12
    if energies == "measured":
        tolerance = 1e-9 + (6e-5 * KELVIN_PER_EV / kelvin) ** 3 / 96
    ladder = hydrogen_ladder(7, energies, kept)
    inside, found = ladder.interior, assembled(ladder, kelvin, symmetric_blocks)
    rates = both_directions(ladder, kelvin)
    diagonal = rates.sum(axis=1) + 3.0
    np.testing.assert_allclose(found["diagonal"], diagonal, rtol=tolerance)
    symmetric = np.sqrt(rates * rates.T / np.multiply.outer(diagonal, diagonal))
    vector = found["root"] * np.sqrt(diagonal)
    below = np.zeros(len(vector))
    for block in range(len(inside.shape.size) - 1):
        rows = np.flatnonzero(inside.l == block)
        columns = np.flatnonzero(inside.l == block + 1)
        part = symmetric[np.ix_(rows, columns)]
        computed = inside.shape.coupling(found["coupling"], block)
        computed = computed * np.multiply.outer(found["scale"][rows], found["scale"][columns])
        np.testing.assert_allclose(computed, part, rtol=tolerance)
        below[columns] = part.T @ vector[rows]
    np.testing.assert_allclose(found["downward"], below, rtol=tolerance)


def test_idle_levels_take_no_part() -> None:
    ladder = hydrogen_ladder(7, "measured", KEPT["gap in a block"])
    found, inside = assembled(ladder, 2500.0, symmetric_blocks), ladder.interior
    idle = zip(inside.n[inside.idle].tolist(), inside.l[inside.idle].tolist(), strict=True)
    assert set(idle) == {(4, 1), (5, 3)}
    assert np.all(found["diagonal"][inside.idle] == 3.0)
    assert np.all(found["downward"][inside.idle] == 0.0)
