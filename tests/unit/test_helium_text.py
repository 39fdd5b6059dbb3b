"""Helium as comma-separated text, read as its head says, without levelnet, by splines of scipy."""

from __future__ import annotations

import math
import re

import numpy as np
import pytest
from scipy.interpolate import RectBivariateSpline, make_interp_spline

from levelnet.distilled.export import endings, exported_texts
from levelnet.distilled.helium_text import stage_names
from levelnet.distilled.plasma import packed
from levelnet.distilled.series import local_series
from levelnet.errors import InputError
from levelnet.kernels.effective_helium import gain, locate, make_line_room
from tests.helium_tables import helium_setup, helium_table
from tests.small_runs import small_setup
from tests.small_tables import small_table
from tests.unit.test_export import read_grid


@pytest.mark.parametrize(("lines", "ion"), [("sobolev", "network"), ("continuum", "saha")])
def test_files_are_those_foretold(lines: str, ion: str) -> None:
    table = helium_table(lines, ion)
    texts = exported_texts(table, "csv", "lantern")
    assert list(texts) == [f"lantern{end}" for end in endings("csv", helium_setup(lines, ion))]
    assert ("lantern-he2.csv" in texts) == (ion == "network")
    assert ("lantern-he1-lines.csv" in texts) == (lines == "continuum")
    for text in texts.values():
        assert text.isascii()
        head = " ".join(line.lstrip("# ") for line in text.splitlines()[:30])
        for word in ("hydrogen and helium", table.setup.digest, lines, "BSD-3-Clause"):
            assert word in head
    assert endings("csv", small_setup(4)) == (".csv",)


@pytest.mark.parametrize(("end", "charge"), [("-he1.csv", 1), ("-he2.csv", 2)])
def test_grid_gives_the_rates_by_a_spline_of_scipy(end: str, charge: int) -> None:
    table = helium_table("sobolev", "network")
    stage = table.helium if charge == 1 else table.helium_ion
    atom = packed(table)[charge - 1]
    text = exported_texts(table, "csv", "lantern")[f"lantern{end}"]
    names, data = read_grid(text)
    assert data.shape[1] == len(names)
    stated = float(text.split("against the table: ")[1].split()[0])
    # What the README says.
    assert stated < 5e-8
    random = np.random.default_rng(7)
    x = random.uniform(stage.log_low, stage.log_high, 200)
    y = random.uniform(stage.ratio_low, stage.ratio_high, 200)
    here = local_series(stage, x, y)
    equilibrium, exchange = here.equilibrium, here.exchange
    recombination = equilibrium + y[:, None] * here.departure
    levels = stage_names(stage, charge)
    grid_y = np.linspace(stage.ratio_low, stage.ratio_high, 33)
    for k, level in enumerate(levels):
        columns = [c for c, name in enumerate(names) if f"recombination_{level}_at_" in name]
        spline = RectBivariateSpline(data[:, 0], grid_y, data[:, columns])
        assert np.max(np.abs(spline(x, y, grid=False) - recombination[:, k])) < 3.0 * stated
        # Detailed balance with the packed Saha coefficients; the head names the factor.
        column = names.index(f"ln_photoionization_{level}")
        depth = float(re.search(rf"photoionization of {level} .*exp\((\S+)/T_r", text)[1])
        photo = make_interp_spline(data[:, 0], data[:, column], 3)(x) - depth / np.exp(x)
        offset, reach = atom.level[2:, k]
        truth = equilibrium[:, k] - (offset - 1.5 * x + reach / np.exp(x))
        assert np.max(np.abs(photo - truth)) < 3.0 * stated
    for k, (lower, upper) in enumerate(zip(stage.lower, stage.upper, strict=True)):
        column = data[:, names.index(f"ln_exchange_{levels[upper]}_to_{levels[lower]}")]
        if np.isneginf(column).all():
            assert exchange[0, k] < -500.0  # stands for none at all
            continue
        found = make_interp_spline(data[:, 0], column, 3)(x)
        assert np.max(np.abs(found - exchange[:, k])) < 3.0 * stated


def test_escape_by_a_spline_of_scipy_is_that_of_the_table() -> None:
    table = helium_table("continuum", "saha")
    text = exported_texts(table, "csv", "lantern")["lantern-he1-lines.csv"]
    names, data = read_grid(text)
    axes = {
        name: (float(low), float(step), int(top) + 1)
        for name, low, step, top in re.findall(r"([qwx]) = (\S+) \+ k (\S+), k = 0 to (\d+)", text)
    }
    nodes = [low + step * np.arange(count) for low, step, count in axes.values()]
    assert np.allclose(np.unique(data[:, 0]), nodes[0], rtol=1e-11)
    values = data[:, 2:].reshape(len(nodes[0]), len(nodes[1]), -1, len(nodes[2]))
    assert values.shape[2] == 4
    assert names[2].startswith("ln_gain_2_3S-1_1S_at_")
    lines, room = table.helium_lines.packed(), make_line_room(1, 4)
    random = np.random.default_rng(8)
    for share in random.uniform(0.0, 1.0, (10, 3)):
        place = [n[0] + part * (n[-1] - n[0]) for n, part in zip(nodes, share, strict=True)]
        found = values
        for axis, (node, at) in enumerate(zip(nodes, place, strict=True)):
            locate(lines, axis, at, room)
            # Columns first; then lines stand before temperatures.
            found = make_interp_spline(node, found, 3, axis=1 if axis == 2 else 0)(at)
        truth = [gain(lines, k, room)[0] for k in range(4)]
        np.testing.assert_allclose(found, truth, atol=1e-9)


def test_changed_constants_with_helium_are_refused() -> None:
    # Rates would be of changed atoms and escape of measured ones.
    table = helium_table().with_constants(0.01, -0.02)
    for call in (
        lambda: exported_texts(table, "csv", "lantern"),
        lambda: endings("csv", table.setup),
    ):
        with pytest.raises(
            InputError, match=r'export = "csv": with changed .* 0.01, -0.02'
        ) as told:
            call()
        assert "\n" not in str(told.value)
    assert endings("c99", table.setup) == (".h", ".c")


def test_heads_say_where_changed_constants_are() -> None:
    table = small_table().with_constants(0.01, 0.0)
    for language, said in (("csv", "follows holds these changes"), ("c99", "pass these changes")):
        for text in exported_texts(table, language, "lantern").values():
            head = " ".join(line.lstrip("# *") for line in text.splitlines()[:30])
            assert "fine structure 0.01" in head
            assert said in head


def test_constants_of_the_lines_are_in_the_head() -> None:
    table = helium_table("sobolev_feedback", "network")
    text = exported_texts(table, "csv", "lantern")["lantern-he1.csv"]
    plain = text.replace("\n# ", " ")
    found = re.search(r"2 1P-1 1S: from 2_1P, A = (\S+) 1/s, depth = (\S+) cm\^3/s", plain)
    rate, depth = float(found[1]), float(found[2])
    # Drake 2006 in Drake (ed.), Handbook of Atomic, Molecular and Optical Physics: 1.799e9 1/s and
    # 584.334 A; tau H/n_1 = (g/g_1) A lambda^3/(8 pi).
    assert rate == pytest.approx(1.799e9, rel=2e-3)
    assert depth == pytest.approx(3.0 * rate * 584.334e-8**3 / (8.0 * math.pi), rel=1e-4)
    delay = float(re.search(r"lit by what 2 1P-1 1S sent (\S+) of ln a", plain)[1])
    # 584.334 A and 591.412 A (NIST).
    assert delay == pytest.approx(math.log(591.412 / 584.334), abs=2e-5)
