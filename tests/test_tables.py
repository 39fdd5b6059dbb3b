"""The published tables: every entry whole and sourced, laws over whole tables, damage refused."""

import hashlib
import shutil
from pathlib import Path

import numpy as np
import pytest

import atomic_tables
from levelnet import constants as const
from levelnet.atomic.levels import binding_energy_ev
from levelnet.errors import InputError, TableError
from levelnet.tables import list_tables, read_table

NAMES = [source.name for source in list_tables()]
PER_CM_EV = const.PLANCK_EV_S * const.SPEED_OF_LIGHT_CM_S


def test_every_file_has_an_entry_and_every_entry_a_file():
    folder = atomic_tables.path("")
    files = {str(file.relative_to(folder).with_suffix("")) for file in folder.rglob("*.csv")}
    assert files == set(NAMES)


@pytest.mark.parametrize("name", NAMES)
def test_entry_says_what_a_reader_must_know(name):
    source = read_table(name).source
    for field in ("quantity", "authors", "journal", "place", "obtained", "digits", "valid"):
        assert getattr(source, field), field
    if "NIST Atomic Spectra Database, He I" in source.journal:
        assert source.year is None  # which edition was seen is not known
    else:
        assert 1900 < source.year < 2100
    for column in source.columns:
        assert column.kind in {"number", "text"}
        assert bool(column.unit) == (column.kind == "number"), column.name


@pytest.mark.parametrize("name", NAMES)
def test_header_block_repeats_units_and_source(name):
    lines = atomic_tables.path(f"{name}.csv").read_text(encoding="utf-8").splitlines()
    comments = [line for line in lines if line.startswith("#")]
    assert comments == lines[:3]
    assert comments[1].startswith("# units: ")
    assert comments[2].startswith(f"# source: {name} in sources.toml")
    for column in read_table(name).source.columns:
        assert column.name in comments[1]
        assert column.unit in comments[1]


@pytest.mark.parametrize("name", NAMES)
def test_readme_names_every_table(name):
    folder, _, file = name.partition("/")
    text = atomic_tables.path("README.md").read_text(encoding="utf-8")
    assert f"## {folder}" in text
    assert f"`{file}.csv`" in text


def test_two_photon_rates():
    table = read_table("hydrogen/two_photon_rates")
    rate = table.numbers["rate_per_s"]
    assert len(rate) == 5
    assert np.all((rate > 8.22) & (rate < 8.23))
    assert rate.sum() == pytest.approx(41.1308, abs=1e-9)  # so that no digit changes unseen
    assert set(table.texts["theory"]) == {"non-relativistic", "relativistic"}
    assert set(table.texts["nuclear_mass"]) <= {"infinite", "finite", ""}
    for text in ("authors", "publication", "obtained"):
        assert all(table.texts[text])


def test_energy_levels_obey_the_rules_of_fine_structure():
    table = read_table("hydrogen/energy_levels")
    n, l, j, energy = (table.numbers[name][:-1] for name in ("n", "l", "j", "energy_per_cm"))
    letters = ["spd"[int(one)] for one in l]
    names = [f"{int(a)}{b}{round(2 * c)}/2" for a, b, c in zip(n, letters, j, strict=True)]
    assert tuple(names) == table.texts["level"][:-1]
    assert np.all((l >= 0) & (l < n) & (np.abs(j - l) == 0.5))
    assert len(energy) == sum(max(1, 2 * k - 1) for k in (1, 2, 3))  # all of n = 1 to 3
    assert np.all(energy < table.numbers["energy_per_cm"][-1])
    assert energy.sum() == pytest.approx(734238.5860249821, abs=1e-7)
    # Bohr: -1/n^2 below the limit, up to the fine structure alpha^2 (Bethe & Salpeter 1957).
    limit = table.numbers["energy_per_cm"][-1]
    np.testing.assert_allclose(energy, limit * (1 - n**-2.0), rtol=const.FINE_STRUCTURE**2)


def test_energy_levels_limit_is_the_ionization_energy():
    table = read_table("hydrogen/energy_levels")
    assert table.texts["level"][-1] == "limit"
    assert np.isnan(table.numbers["n"][-1])
    assert table.numbers["energy_per_cm"][-1] == const.HYDROGEN_IONIZATION_PER_CM


@pytest.mark.parametrize(("n", "l"), [(2, 0), (2, 1), (3, 0), (3, 1), (3, 2)])
def test_level_formula_agrees_with_the_measured_centroids(n, l):
    numbers = read_table("hydrogen/energy_levels").numbers
    chosen = (numbers["n"] == n) & (numbers["l"] == l)
    weight = 2.0 * numbers["j"][chosen] + 1.0
    assert weight.sum() == 2.0 * (2 * l + 1)
    centroid = float(np.average(numbers["energy_per_cm"][chosen], weights=weight))
    binding_per_cm = numbers["energy_per_cm"][-1] - centroid
    got = binding_energy_ev(np.array([n]), np.array([l]), "measured")[0] / PER_CM_EV
    assert got == pytest.approx(binding_per_cm, abs=0.005)


def test_case_b_table_against_an_independent_fit():
    numbers = read_table("hydrogen/case_b_recombination").numbers
    scaled = numbers["scaled_coefficient"]
    assert scaled.sum() == pytest.approx(25.796, abs=1e-9)
    np.testing.assert_allclose(np.diff(numbers["log10_temperature"]), 0.2, rtol=1e-12)
    assert np.all(np.diff(scaled) < 0.0)
    # Pequignot, Petitjean & Boisson 1991, A&A 251, 680 (from memory).
    t = 10.0 ** (numbers["log10_temperature"] - 4.0)
    fit = 1e-13 * 4.309 * t**-0.6166 / (1.0 + 0.6703 * t**0.5300)
    np.testing.assert_allclose(scaled * 1e-11 / np.sqrt(1e4 * t), fit, rtol=3e-3)


def test_table_arrays_are_read_only():
    table = read_table("hydrogen/case_b_recombination")
    with pytest.raises(ValueError, match="read-only"):
        table.numbers["scaled_coefficient"][0] = 1.0
    with pytest.raises(TypeError):
        table.numbers["scaled_coefficient"] = np.zeros(8)


def test_unknown_table_names_the_known_ones():
    with pytest.raises(InputError, match=r"hydrogen/nothing.*hydrogen/energy_levels"):
        read_table("hydrogen/nothing")


# Damage, on a copy of the tables.

CASE_B = "hydrogen/case_b_recombination"


@pytest.fixture
def folder(tmp_path, monkeypatch):
    copy = tmp_path / "tables"
    shutil.copytree(atomic_tables.path(""), copy)
    monkeypatch.setattr(atomic_tables, "path", lambda name: copy / name)
    return copy


def _edit(folder: Path, old: str, new: str, resign: bool = True) -> None:
    """Change the case-B file, with or without the checksum in the catalogue."""
    file, catalogue = folder / f"{CASE_B}.csv", folder / "sources.toml"
    before = file.read_bytes()
    assert before.count(old.encode()) >= 1
    file.write_bytes(before.replace(old.encode(), new.encode("latin-1"), 1))
    if resign:
        checksums = [hashlib.sha256(data).hexdigest() for data in (before, file.read_bytes())]
        catalogue.write_text(catalogue.read_text().replace(*checksums))


def test_changed_digit_is_refused(folder):
    _edit(folder, "4.700", "4.701", resign=False)
    with pytest.raises(TableError, match="checksum differs"):
        read_table(CASE_B)


@pytest.mark.parametrize(
    ("old", "new", "complaint"),
    [
        ("scaled_coefficient\n", "coefficient\n", "columns"),
        ("3.2,", "2.9,", "does not ascend"),
        ("3.2,", "3.0,", "does not ascend"),
        ("3.2,", ",", "does not ascend"),
        ("4.258", "four", "row 2: 'four' is no number"),
        ("4.258", "nan", "row 2: 'nan' is no number"),
        ("4.258", "-inf", "row 2: '-inf' is no number"),
        ("4.258", "4.258,1", "row 2 has 3 cells"),
        ("4.258", "\xe9", "not a CSV file in UTF-8"),
        ("4.258", '"4.258', "not a CSV file in UTF-8"),
    ],
)
def test_damage_behind_a_right_checksum_is_refused(folder, old, new, complaint):
    _edit(folder, old, new)
    with pytest.raises(TableError, match=complaint) as caught:
        read_table(CASE_B)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(("kept", "complaint"), [(0, "columns"), (4, "no rows")])
def test_short_file_is_refused(folder, kept, complaint):
    lines = (folder / f"{CASE_B}.csv").read_text().splitlines(keepends=True)
    _edit(folder, "".join(lines[kept:]), "")
    with pytest.raises(TableError, match=complaint):
        read_table(CASE_B)


def test_missing_file_is_refused(folder):
    (folder / f"{CASE_B}.csv").unlink()
    with pytest.raises(TableError, match="cannot be read"):
        read_table(CASE_B)


@pytest.mark.parametrize(
    ("old", "new", "complaint"),
    [
        ('doi = ""\n', "", "bad entry"),
        ('doi = ""\n', 'doi = ""\nvolume = 3\n', "bad entry"),
        ("year = 1994", 'year = "1994"', "wrong type"),
        ('kind = "number"', "kind = 1", "wrong type"),
        ('axis = "year"', 'axis = "authors"', "not a number column"),
        ("year = 1994", "year = ", "not valid TOML"),
    ],
)
def test_damaged_catalogue_is_refused(folder, old, new, complaint):
    catalogue = folder / "sources.toml"
    text = catalogue.read_text()
    assert old in text
    catalogue.write_text(text.replace(old, new, 1))
    with pytest.raises(TableError, match=complaint):
        list_tables()


def test_missing_catalogue_is_refused(folder):
    (folder / "sources.toml").unlink()
    with pytest.raises(TableError, match=r"sources\.toml: cannot be read"):
        list_tables()
