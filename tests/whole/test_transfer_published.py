"""Published sizes of what a resolved field does to x_e, each to 0.1 per cent of x_e (slow).

Sizes of single effects depend on what else is on: each test says which baseline
reproduces the published one. The universe is one of the time of the papers (h = 0.701, omega_b =
0.02265, omega_m = 0.1369, T_0 = 2.725 K, Y = 0.24; from memory); the sizes differ from those in the
universe of the other tests by 0.03 per cent of x_e at most. What is published stands in the
abstracts of the papers.

The papers:
Chluba & Sunyaev 2007, Astron. Astrophys. 475, 109; Hirata 2008, Phys. Rev. D 78, 023001;
Hirata & Forbes 2009, Phys. Rev. D 80, 023001; Chluba & Sunyaev 2009, Astron. Astrophys. 503, 345.
"""

from __future__ import annotations

import importlib.util
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest

from levelnet.arrays import FloatArray
from levelnet.background.cosmology import Cosmology
from levelnet.escape.cells import frequency_cells
from levelnet.history import field, march
from levelnet.history.run import solve
from levelnet.kernels import transfer
from levelnet.kernels.transfer import Cells
from tests.transfer_runs import REDSHIFTS, electrons, field_setup

pytestmark = pytest.mark.slow

THEN = Cosmology(70.1, 0.02265, 0.1369, cmb_temperature_k=2.725, helium_mass_fraction=0.24)
RUN = {"step": 2.5e-4, "n_max": 10, "lyman_lines": 3, "cosmology": THEN}
# As close as the sizes are published, and as the issue asks: 0.1 per cent of x_e.
WITHIN = 1e-3
SECOND_ORDER = ("excited_two_photon", "raman")


def x_e(*on: str, two_photon: str = "spontaneous") -> FloatArray:
    """x_e at `REDSHIFTS`."""
    return electrons(*on, two_photon=two_photon, **RUN)


def change(one: FloatArray, other: FloatArray) -> dict[float, float]:
    """Relative change of x_e from one run to another, by redshift."""
    return dict(zip(REDSHIFTS, (other / one - 1.0).tolist(), strict=True))


def test_feedback() -> None:
    """+0.22 per cent near z = 1050 (Chluba & Sunyaev 2007), on isolated lines."""
    found = change(x_e(), x_e("feedback"))
    assert found[1050.0] == pytest.approx(0.0022, abs=WITHIN)
    assert max(found.values()) == found[1050.0]


def test_two_photon_and_raman() -> None:
    """-1.3 per cent near z = 1300, +1.3 near 900 (Hirata 2008).

    On lines with feedback: two-photon decay and absorption of 2s, ns and nd, and Raman scattering.
    With stimulated 2s decay in the baseline too they would be -0.8 and +2.2.
    """
    on = x_e("feedback", *SECOND_ORDER, two_photon="distorted")
    found = change(x_e("feedback"), on)
    assert found[1300.0] == pytest.approx(-0.013, abs=WITHIN)
    assert found[900.0] == pytest.approx(0.013, abs=WITHIN)


def only_2s(*arguments: object) -> Cells:
    """Cells in which 2s alone has second-order rates."""
    cells = frequency_cells(*arguments)  # type: ignore[arg-type]
    weight = np.zeros_like(cells.weight)
    weight[0] = cells.weight[0]
    return cells._replace(weight=weight)


def test_raman_scattering_from_2s(monkeypatch: pytest.MonkeyPatch) -> None:
    """About +0.9 per cent near z = 920 (Hirata 2008), with all two-photon processes on.

    With feedback alone it would be +1.05. What 3s and 3d add is shown to be nothing: runs without
    two-photon cells of their own, in which 2s alone scatters or all do.
    """
    base = ("feedback", "excited_two_photon")
    found = change(x_e(*base, two_photon="distorted"), x_e(*base, "raman", two_photon="distorted"))
    assert found[920.0] == pytest.approx(0.009, abs=WITHIN)
    every = x_e("feedback", "raman")
    monkeypatch.setattr(field, "frequency_cells", only_2s)
    alone = solve(field_setup("feedback", "raman", **RUN)).free_electron_fraction  # type: ignore[arg-type]
    assert 0.0 < np.max(np.abs(alone / every - 1.0)) < 3e-5


def test_diffusion_with_recoil() -> None:
    """-0.45 per cent at z = 900 with all else on (Hirata & Forbes 2009).

    -0.6 per cent near z = 900 on isolated lines (Chluba & Sunyaev 2009).
    """
    base = ("feedback", *SECOND_ORDER)
    on = x_e(*base, "scattering", two_photon="distorted")
    found = change(x_e(*base, two_photon="distorted"), on)
    assert found[900.0] == pytest.approx(-0.0045, abs=WITHIN)
    alone = change(x_e(), x_e("scattering"))
    assert alone[900.0] == pytest.approx(-0.006, abs=WITHIN)


def without_recoil(folder: Path) -> ModuleType:
    """The kernel with recoil struck out: T_m infinite in the drift, as it is in the diffusion."""
    text = (
        Path(transfer.__file__)
        .read_text()
        .replace("from .compile", "from levelnet.kernels.compile")
    )
    for old, new in (
        ("rise = math.exp(energy / moment.matter_kt_ev)", "rise = 1.0"),
        ("push = energy / moment.matter_kt_ev - energy", "push = -energy"),
    ):
        assert text.count(old) == 1
        text = text.replace(old, new)
    path = folder / "transfer_without_recoil.py"
    path.write_text(text)
    spec = importlib.util.spec_from_file_location(path.stem, path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def test_recoil(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """About -1.2 per cent near z = 900, on isolated lines (Chluba & Sunyaev 2009)."""
    with_it = x_e("scattering")
    monkeypatch.setattr(march, "kernel", without_recoil(tmp_path))
    without = solve(field_setup("scattering", **RUN)).free_electron_fraction  # type: ignore[arg-type]
    assert change(without, with_it)[900.0] == pytest.approx(-0.012, abs=WITHIN)
    # Diffusion alone delays recombination: the sum is smaller than recoil.
    assert change(x_e(), without)[900.0] > 0.004
