"""The cases of a sweep: grids, lists and rows made into setups, and every complaint at once.

What is expected is the project's own contract; counts and orders are closed forms.
"""

from __future__ import annotations

import math
import time
from pathlib import Path

import pytest

from levelnet.errors import InputError
from levelnet.history.setup import parse_setup
from levelnet.studies.sweep_cases import Cases, vary
from levelnet.studies.sweep_files import load_sweep
from tests.small_runs import small_setup

BASE = """\
[setup.cosmology]
hubble_km_s_mpc = 68.0
baryon_density_h2 = 0.0224
matter_density_h2 = 0.142
[setup.hydrogen]
n_max = 4
"""


def loaded(folder: Path, text: str, name: str = "sweep.toml", setup: str = "") -> Cases:
    (folder / name).write_text(text)
    if setup:
        (folder / "base.toml").write_text(setup)
    return load_sweep(folder / name, folder / "base.toml" if setup else None)


def complaint(folder: Path, text: str, name: str = "sweep.toml") -> str:
    with pytest.raises(InputError) as caught:
        loaded(folder, text, name)
    said = str(caught.value)
    assert "\n" not in said
    return said.removeprefix(f"{folder / name}: ")


def test_every_combination_the_last_key_fastest_and_lists_side_by_side(tmp_path: Path) -> None:
    cases = loaded(
        tmp_path,
        'title = "t"\n'
        + BASE
        + """
        [combine]
        hydrogen.n_max = [4, 5]
        "cosmology.curvature_density" = { from = 0.0, to = 0.1, count = 3 }
        [together]
        cosmology.hubble_km_s_mpc = [60, 70.5]
        cosmology.neutrino_masses_ev = [[], [0.06]]
        """,
    )
    assert cases.title == "t"
    assert len(cases) == 2 * 3 * 2
    assert cases.swept == (
        "hydrogen.n_max",
        "cosmology.curvature_density",
        "cosmology.hubble_km_s_mpc",
        "cosmology.neutrino_masses_ev",
    )
    assert cases.columns[0] == (4,) * 6 + (5,) * 6
    assert cases.columns[1] == (0.0, 0.0, 0.05, 0.05, 0.1, 0.1) * 2
    assert cases.columns[2] == (60.0, 70.5) * 6
    assert cases.columns[3] == ("[]", "[0.06]") * 6
    for k, setup in enumerate(cases.setups):
        assert setup.hydrogen.n_max == cases.columns[0][k]
        assert setup.cosmology.curvature_density == cases.columns[1][k]
        assert setup.cosmology.neutrino_masses_ev == ((0.06,) if k % 2 else ())
    assert cases.label(3).startswith("case 3 (hydrogen.n_max = 4, cosmology.curvature_density")


@pytest.mark.parametrize(
    ("key", "text", "values"),
    [
        ("hydrogen.n_max", "{ from = 4, to = 10, count = 4 }", [4, 6, 8, 10]),
        ("hydrogen.n_max", "{ from = 10, to = 4, count = 3 }", [10, 7, 4]),
        ("cosmology.dark_energy_w0", "{ from = -2.0, to = 0, count = 3 }", [-2.0, -1.0, 0.0]),
        (
            "cosmology.baryon_density_h2",
            '{ from = 0.001, to = 0.1, count = 3, spacing = "logarithmic" }',
            [0.001, 0.01, 0.1],
        ),
    ],
)
def test_ranges(tmp_path: Path, key: str, text: str, values: list[float]) -> None:
    (column,) = loaded(tmp_path, BASE + f"[combine]\n{key} = {text}\n").columns
    assert column == pytest.approx(tuple(values), rel=1e-15)
    assert column[0] == values[0] and column[-1] == values[-1]
    assert [type(one) for one in column] == [type(one) for one in values]


def test_rows_of_csv_with_and_without_a_common_setup(tmp_path: Path) -> None:
    rows = (
        "# invented\n"
        "hydrogen.n_max,cosmology.hubble_km_s_mpc,cosmology.baryon_density_h2,"
        "cosmology.matter_density_h2,lines.hydrogen,accuracy.relative\n"
        "4,68,0.022,0.14,sobolev,\n\n"
        '5,70.5,0.023,0.15,"open",1e-5\n'
    )
    cases = loaded(tmp_path, rows, "rows.csv")
    assert [one.hydrogen.n_max for one in cases.setups] == [4, 5]
    assert [one.lines.hydrogen for one in cases.setups] == ["sobolev", "open"]
    assert [one.accuracy.relative for one in cases.setups] == [1e-6, 1e-5]
    assert cases.columns[0] == (4, 5)
    assert cases.columns[4] == ("sobolev", "open")
    assert math.isnan(cases.columns[5][0]) and cases.columns[5][1] == 1e-5
    base = BASE.replace("[setup.", "[")
    few = loaded(tmp_path, "hydrogen.n_max\n4\n6\n", "rows.csv", setup=base)
    assert [one.hydrogen.n_max for one in few.setups] == [4, 6]
    assert few.setups[0].cosmology.hubble_km_s_mpc == 68.0


def test_an_empty_cell_does_not_make_the_table_of_its_key(tmp_path: Path) -> None:
    rows = "lines.hydrogen,lines.transfer.scattering\nsobolev,\ntransfer,false\n"
    base = BASE.replace("[setup.", "[")
    cases = loaded(tmp_path, rows, "rows.csv", setup=base + "[grid]\nredshift_end = 200.0\n")
    assert cases.setups[0].lines.transfer is None
    assert cases.setups[1].lines.transfer is not None
    assert not cases.setups[1].lines.transfer.scattering
    assert cases.columns[1] == ("", "false")


def test_a_date_is_a_title_like_any_other(tmp_path: Path) -> None:
    base = BASE.replace("[setup.", "[")
    cases = loaded(tmp_path, "title\n2026-12-01\nplain\n", "rows.csv", setup=base)
    assert [one.title for one in cases.setups] == ["2026-12-01", "plain"]
    assert cases.columns == (("2026-12-01", "plain"),)


def test_an_empty_cell_leaves_its_key_to_the_common_setup(tmp_path: Path) -> None:
    rows = "hydrogen.n_max,cosmology.hubble_km_s_mpc\n4,66\n5,\n"
    cases = loaded(tmp_path, rows, "rows.csv", setup=BASE.replace("[setup.", "["))
    assert [one.cosmology.hubble_km_s_mpc for one in cases.setups] == [66.0, 68.0]
    assert cases.columns == ((4, 5), (66.0, 68.0))
    assert cases.label(1) == "case 1 (hydrogen.n_max = 5, cosmology.hubble_km_s_mpc = 68)"


def test_a_setup_is_named_relative_to_the_file_that_names_it(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    folder = tmp_path / "sweeps"
    folder.mkdir()
    (folder / "common.toml").write_text(BASE.replace("[setup.", "["))
    (tmp_path / "common.toml").write_text("of another")
    monkeypatch.chdir(tmp_path)
    text = 'setup = "common.toml"\n[combine]\nhydrogen.n_max = [4, 6]\n'
    (folder / "sweep.toml").write_text(text)
    assert len(load_sweep("sweeps/sweep.toml")) == 2
    (folder / "sweep.toml").write_text(text.replace("common", f"{tmp_path}/sweeps/common"))
    assert len(load_sweep("sweeps/sweep.toml")) == 2


def test_from_python() -> None:
    setup = small_setup(5)
    cases = vary(setup, {"hydrogen.n_max": [4, 6]}, {"grid.redshift_end": [200.0, 300.0]})
    assert len(cases) == 4
    assert cases.setups[0] == parse_setup(cases.setups[0].to_toml())
    assert cases.setups[3].hydrogen.n_max == 6
    assert cases.setups[3].grid.redshift_end == 300.0
    assert cases.setups[3].cosmology == setup.cosmology


def test_every_complaint_at_once_with_its_row(tmp_path: Path) -> None:
    rows = (
        "hydrogen.n_max,cosmology.hubble_km_s_mpc,cosmology.baryon_density_h2,"
        "cosmology.matter_density_h2,hydrogen.nmax\n"
        "4,68,0.022,0.14,1\n"
        "1,68,0.022,0.14,1\n"
        "5,fast,0.022,0.14,1\n"
        "1,68,0.022,0.14,1\n"
    )
    said = complaint(tmp_path, rows, "rows.csv")
    assert said.startswith("every case: hydrogen.nmax: unknown key; ")
    assert "row 2 and 1 more: hydrogen.n_max = 1: input should be greater than or equal" in said
    assert "row 3: cosmology.hubble_km_s_mpc = 'fast': " in said


def test_a_rule_about_several_keys_names_its_case(tmp_path: Path) -> None:
    said = complaint(
        tmp_path, BASE + "[combine]\nhydrogen.n_max = [2, 4]\nlines.lyman_lines = [1, 3]\n"
    )
    assert said.startswith("case 1 (hydrogen.n_max = 2, lines.lyman_lines = 3): lines.lyman_lines")


def test_a_long_list_of_complaints_is_cut(tmp_path: Path) -> None:
    said = complaint(tmp_path, BASE + f"[combine]\nhydrogen.n_max = {[-k for k in range(50)]}\n")
    assert said.endswith("; and 30 further complaints")
    assert said.count("hydrogen.n_max = -") < 60


def test_too_many_levels_are_among_the_complaints(tmp_path: Path) -> None:
    said = complaint(tmp_path, BASE + "[combine]\nhydrogen.n_max = [4, 1, 5000]\n")
    assert "case 1 (hydrogen.n_max = 1): hydrogen.n_max = 1: " in said
    assert "case 2 (hydrogen.n_max = 5000): hydrogen.n_max = 5000: allowed are 2 to 1000" in said


DEEP = ".".join("a" * 20_000)
# Files over which a reader takes gigabytes, minutes or its stack.
HOSTILE = {
    "wide.csv": ",".join(f"a{k}" for k in range(50_000)) + "\n" + ",".join("1" * 50_000) + "\n",
    "fairly-wide.csv": ",".join(f"{k}" for k in range(10_000)) + "\n" + "1," * 9999 + "1\n",
    "bad-rows.csv": "hydrogen.n_max\n" + "1\n" * 200_000,
    "rows.csv": "hydrogen.n_max\n" + "5\n" * 5_000_000,
    "cells.csv": ",".join(f"a{k}" for k in range(100)) + "\n" + ("," * 99 + "\n") * 200_000,
    "deep-key.csv": DEEP + "\n1\n",
    "deep-cell.csv": "hydrogen.n_max\n{" + DEEP + " = 1}\n",
    "hexadecimal.csv": "hydrogen.n_max\n0x" + "f" * 9000 + "\n",
    "open-quote.csv": 'hydrogen.n_max\n"' + "\n1" * 900_000,
    "deep-key.toml": BASE + f"[combine]\n{DEEP} = [1]\n",
    "far.toml": BASE + f"[combine]\nhydrogen.n_max = {{ from = 3, to = 1{'0' * 400}, count = 3 }}",
    "ranges.toml": BASE
    + "[together]\n"
    + "".join(f"a{k} = {{ from = 0, to = 1, count = 1000000 }}\n" for k in range(500)),
    "product.toml": BASE + "[combine]\n" + "".join(f"a{k} = [1, 2]\n" for k in range(4000)),
    "many-keys.toml": BASE
    + f"[combine]\na = [{'1, ' * 10_000}]\n"
    + "".join(f"a{k} = [1]\n" for k in range(4000)),
    "long-key.toml": BASE + f'[combine]\n"{"a" * 900_000}" = [1]\n',
    "long-table.toml": BASE + f'["{"a" * 900_000}"]\n',
}


@pytest.mark.parametrize("name", HOSTILE)
def test_files_that_blow_up_are_refused_at_once(tmp_path: Path, name: str) -> None:
    (tmp_path / "base.toml").write_text(BASE.replace("[setup.", "["))
    (tmp_path / name).write_text(HOSTILE[name])
    before = time.process_time()
    with pytest.raises(InputError) as caught:
        load_sweep(tmp_path / name, tmp_path / "base.toml" if name.endswith(".csv") else None)
    assert time.process_time() - before < 10.0
    said = str(caught.value)
    assert said.startswith(f"{tmp_path / name}: ")
    assert "\n" not in said
    assert len(said) < 5000


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("[combine]\nhydrogen.n_max = [4]\n", "setup: a table, or the name of a setup file"),
        ("title = 3\n" + BASE, "title: text is needed"),
        (BASE, "nothing is varied; give combine or together"),
        (BASE + "[combine]\n", "nothing is varied"),
        (BASE + "[combine]\nhydrogen.n_max = []\n", "hydrogen.n_max: no values"),
        (BASE + "[combine]\nhydrogen.n_max = 4\n", "combine.hydrogen.n_max: a list of values"),
        (BASE + "[grids]\nx = [1]\n", "grids: unknown key; allowed are setup, combine, together"),
        (
            BASE + "[combine]\nhydrogen.n_max = [4]\n[together]\nhydrogen.n_max = [4]\n",
            "hydrogen.n_max: in combine and in together",
        ),
        (
            BASE + "[together]\nhydrogen.n_max = [4, 5]\ngrid.n_redshifts = [9]\n",
            "together needs lists of one length: hydrogen.n_max has 2, grid.n_redshifts has 1",
        ),
        (
            BASE + "[combine]\nhydrogen.n_max = { from = 4, to = 6 }\n",
            "combine.hydrogen.n_max: count: a whole number from 2",
        ),
        (
            BASE + "[combine]\nhydrogen.n_max = { to = 9, count = 3 }\n",
            "combine.hydrogen.n_max: from: missing; a range is { from = , to = , count = }",
        ),
        (
            BASE + "[combine]\nhydrogen.n_max = { from = 9 }\n",
            "combine.hydrogen.n_max: to: missing; a range is { from = , to = , count = }",
        ),
        (
            BASE + "[combine]\nhydrogen.n_max = { from = 4, to = 6, count = 2, step = 1 }\n",
            "combine.hydrogen.n_max: step: unknown key; allowed are from, to, count, spacing",
        ),
        (
            BASE + '[combine]\nx.y = { from = 0, to = 6, count = 2, spacing = "logarithmic" }\n',
            "combine.x.y: from and to: logarithmic spacing needs both above 0",
        ),
        (
            BASE + '[combine]\nx.y = { from = 0, to = inf, count = 2, spacing = "odd" }\n',
            "combine.x.y: from and to: finite numbers",
        ),
        (
            BASE + '[combine]\nx.y = { from = 0, to = 1, count = 2, spacing = "odd" }\n',
            'combine.x.y: spacing = "odd": allowed are even, logarithmic',
        ),
        (
            BASE
            + "[combine]\nx.a = { from = 0, to = 1, count = 2000 }\n"
            + "x.b = { from = 0, to = 1, count = 2000 }\n",
            "4000000 cases; allowed are up to 1000000",
        ),
        (
            BASE + "[combine]\ntitle.x = [1]\n",
            "case 0 (title.x = 1): title: Input should be a valid string",
        ),
        ("setup = [", "not valid TOML"),
    ],
)
def test_bad_files_are_one_line(tmp_path: Path, text: str, expected: str) -> None:
    assert complaint(tmp_path, text).startswith(expected)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("", "a header of keys such as hydrogen.n_max and rows are needed"),
        ("hydrogen.n_max\n", "a header of keys"),
        ("a.b,a.b\n1,2\n", "column a.b stands there twice"),
        ("a.b,\n1,2\n", "every case"),
        ("a.b\n1,2\n3\n4,5\n", "row 1: 2 cells, the header has 1; row 3: 2 cells"),
        ('a.b\n"1\n', "not valid CSV"),
    ],
)
def test_bad_rows_are_one_line(tmp_path: Path, text: str, expected: str) -> None:
    said = complaint(tmp_path, text, "rows.csv")
    assert said.startswith(expected) or (expected == "every case" and "unknown key" in said)


def test_a_setup_goes_with_csv_only(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="--setup goes with CSV files only"):
        loaded(tmp_path, BASE, setup="[hydrogen]\n")
