"""The setup: defaults, round trip through TOML, and every complaint at once with its path."""

from __future__ import annotations

import tomllib
import tracemalloc
from pathlib import Path
from typing import Any

import pytest
import tomli_w
from hypothesis import given, settings
from hypothesis import strategies as st

from levelnet.atomic.species import Hydrogen
from levelnet.background.cosmology import Cosmology
from levelnet.errors import InputError
from levelnet.escape.lines import Lines
from levelnet.history.setup import Accuracy, Grid, Setup, load_setup, parse_setup
from tests.small_runs import small_setup

COSMOLOGY = {"hubble_km_s_mpc": 68.0, "baryon_density_h2": 0.0224, "matter_density_h2": 0.142}
VALUES: dict[str, Any] = {"cosmology": COSMOLOGY, "hydrogen": {"n_max": 10}}


def minimal(**changes: Any) -> Setup:
    """Make a setup with the required keys only, and `changes`."""
    return Setup(**(VALUES | changes))


def complaint(**tables: Any) -> str:
    """Say what is wrong with the minimal setup, given as TOML, once `tables` are put in."""
    values = {key: {**value, **tables.pop(key, {})} for key, value in VALUES.items()} | tables
    with pytest.raises(InputError) as caught:
        parse_setup(tomli_w.dumps(values), "run.toml")
    text = str(caught.value)
    assert text.startswith("run.toml: ")
    assert "\n" not in text
    return text.removeprefix("run.toml: ")


def test_defaults() -> None:
    setup = minimal()
    assert setup.hydrogen == Hydrogen(n_max=10, two_photon_rate_per_s=8.2246, energies="measured")
    assert setup.helium.n_max == 0
    assert setup.lines == Lines(hydrogen="sobolev", two_photon="spontaneous", lyman_lines=1)
    assert (setup.grid.redshift_start, setup.grid.redshift_end) == (1800.0, 20.0)
    assert setup.grid.redshifts is None
    assert setup.accuracy == Accuracy(relative=1e-6, interpolate=True)
    assert setup.cosmology.cmb_temperature_k == 2.7255
    assert setup.cosmology.effective_neutrinos == 3.046


def test_parts_may_be_records_or_mappings() -> None:
    records = Setup(cosmology=Cosmology(**COSMOLOGY), hydrogen=Hydrogen(n_max=10))
    assert records == minimal()


redshifts = st.floats(0.0, 1000.0)
setups = st.builds(
    lambda n_max, rate, energies, lines, grid, accuracy, title: minimal(
        hydrogen=Hydrogen(n_max=n_max, two_photon_rate_per_s=rate, energies=energies),
        lines=lines,
        grid=grid,
        accuracy=accuracy,
        title=title,
    ),
    st.integers(4, 1000),
    st.floats(0.0, 1e6),
    st.sampled_from(["measured", "nonrelativistic"]),
    st.builds(
        Lines,
        hydrogen=st.sampled_from(["closed", "open", "sobolev"]),
        two_photon=st.sampled_from(["spontaneous", "stimulated"]),
        lyman_lines=st.one_of(st.integers(1, 3), st.just("all")),
    ),
    st.builds(
        Grid,
        redshift_start=st.floats(1000.5, 10_000.0),
        redshift_end=st.just(0.0),
        n_redshifts=st.integers(2, 100_000),
        redshifts=st.one_of(
            st.none(), st.lists(redshifts, min_size=2, max_size=5, unique=True).map(tuple)
        ),
    ),
    st.builds(
        Accuracy,
        relative=st.floats(1e-9, 1e-3),
        max_steps=st.integers(10, 1_000_000),
        interpolate=st.booleans(),
    ),
    st.text(max_size=30),
)


@given(setup=setups)
def test_toml_round_trip(setup: Setup) -> None:
    text = setup.to_toml()
    again = parse_setup(text)
    assert again == setup
    assert again.to_toml() == text
    assert again.digest == setup.digest


def test_digest_names_the_setup() -> None:
    assert minimal().digest == minimal().digest
    assert minimal().digest != minimal(hydrogen={"n_max": 11}).digest
    assert minimal().digest != minimal(title="another").digest
    assert len(minimal().digest) == 16
    int(minimal().digest, 16)


@pytest.mark.parametrize(
    ("tables", "parts"),
    [
        ({"hydrogen": {"n_max": 1}}, ["hydrogen.n_max = 1", "greater than or equal to 2"]),
        ({"hydrogen": {"n_max": 1001}}, ["hydrogen.n_max = 1001", "2.67 GB", "2 to 1000"]),
        ({"hydrogen": {"n_max": 10.5}}, ["hydrogen.n_max = 10.5", "integer"]),
        ({"hydrogen": {"n_max": "10"}}, ["hydrogen.n_max = '10'", "integer"]),
        ({"hydrogen": {"two_photon_rate_per_s": -1.0}}, ["two_photon_rate_per_s = -1.0"]),
        ({"hydrogen": {"two_photon_rate_per_s": float("nan")}}, ["two_photon_rate_per_s"]),
        ({"hydrogen": {"energies": "exact"}}, ["hydrogen.energies = 'exact'", "'measured'"]),
        ({"hydrogen": {"nmax": 3}}, ["hydrogen.nmax: unknown key"]),
        ({"helium": {"n_max": 1}}, ["helium.n_max = 1"]),
        ({"lines": {"hydrogen": "thin"}}, ["lines.hydrogen = 'thin'", "'sobolev'"]),
        ({"lines": {"lyman_lines": 0}}, ["lines.lyman_lines", '"all"']),
        ({"lines": {"lyman_lines": "some"}}, ["lines.lyman_lines", '"all"']),
        ({"lines": {"lyman_lines": 10}}, ["lyman_lines = 10", "only 9 Lyman lines"]),
        ({"hydrogen": {"n_max": 10, "resolve_l_to": 1}}, ["hydrogen.resolve_l_to = 1", "2"]),
        (
            {"hydrogen": {"n_max": 10, "resolve_l_to": 11}},
            ["hydrogen: resolve_l_to = 11: allowed are 2 to n_max = 10"],
        ),
        ({"hydrogen": {"n_max": 10, "resolve_l_to": 5.5}}, ["resolve_l_to = 5.5", "integer"]),
        (
            {"hydrogen": {"n_max": 10, "resolve_l_to": 5}, "lines": {"lyman_lines": 5}},
            ["lines.lyman_lines = 5: only levels resolved in l", "a number from 1 to 4"],
        ),
        (
            {"hydrogen": {"n_max": 10, "resolve_l_to": 5}, "lines": {"lyman_lines": "all"}},
            ["lines.lyman_lines = 'all': only levels resolved in l", "a number from 1 to 4"],
        ),
        ({"grid": {"redshift_start": 100.0, "redshift_end": 200.0}}, ["200", "below", "100"]),
        ({"grid": {"redshift_start": -1.0}}, ["grid.redshift_start = -1.0"]),
        ({"grid": {"redshift_start": 1e5}}, ["grid.redshift_start = 100000.0", "10000"]),
        ({"grid": {"n_redshifts": 1}}, ["grid.n_redshifts = 1"]),
        ({"grid": {"redshifts": [100.0, 5000.0]}}, ["redshifts: 5000 lies outside"]),
        ({"grid": {"redshifts": [100.0, 100.0]}}, ["redshifts: at least two different"]),
        ({"grid": {"redshifts": [100.0, "x"]}}, ["grid.redshifts.1"]),
        ({"accuracy": {"relative": 0.1}}, ["accuracy.relative = 0.1", "0.001"]),
        ({"accuracy": {"max_steps": 9}}, ["accuracy.max_steps = 9"]),
        ({"accuracy": {"interpolate": 1}}, ["accuracy.interpolate = 1"]),
        ({"cosmology": {"baryon_density_h2": -0.02}}, ["cosmology.baryon_density_h2 = -0.02"]),
        ({"cosmology": {"matter_density_h2": -0.1}}, ["cosmology.matter_density_h2 = -0.1"]),
        ({"cosmology": {"hubble_km_s_mpc": 0.0}}, ["cosmology.hubble_km_s_mpc = 0.0"]),
        ({"cosmology": {"cmb_temperature_k": 0.0}}, ["cosmology.cmb_temperature_k = 0.0"]),
        ({"cosmology": {"hubble": 68.0}}, ["cosmology.hubble: unknown key"]),
        ({"hydrogenn": {"n_max": 3}}, ["hydrogenn: unknown key"]),
        ({"title": 3}, ["title = 3"]),
    ],
)
def test_a_bad_key_is_named_with_its_path(tables: dict[str, Any], parts: list[str]) -> None:
    text = complaint(**tables)
    for part in parts:
        assert part in text
    assert "; " not in text, "one mistake, one complaint"


def test_required_keys() -> None:
    with pytest.raises(InputError) as caught:
        parse_setup("")
    assert str(caught.value) == "setup: cosmology: missing; hydrogen: missing"
    with pytest.raises(InputError, match=r"hydrogen\.n_max: missing"):
        parse_setup(tomli_w.dumps({"cosmology": COSMOLOGY, "hydrogen": {}}))


def test_all_complaints_come_at_once() -> None:
    text = complaint(
        hydrogen={"n_max": 1, "colour": "red"},
        lines={"two_photon": "none"},
        accuracy={"relative": -1.0},
        cosmology={"baryon_density_h2": -1.0},
    )
    for part in (
        "hydrogen.n_max = 1",
        "hydrogen.colour: unknown key",
        "lines.two_photon = 'none'",
        "accuracy.relative = -1.0",
        "cosmology.baryon_density_h2 = -1.0",
    ):
        assert part in text
    assert len(text.split("; ")) == 5


def test_too_many_levels_stand_in_the_list_too() -> None:
    text = complaint(hydrogen={"n_max": 5000}, cosmology={"hubble_km_s_mpc": -3.0})
    # Line strengths: n^3/3 numbers of 8 bytes.
    assert "hydrogen.n_max = 5000: allowed are 2 to 1000" in text
    assert "333 GB of memory" in text
    assert "cosmology.hubble_km_s_mpc = -3.0" in text


def test_long_and_many_complaints_are_cut() -> None:
    assert len(complaint(**{"x" * 900_000: 1})) < 200
    text = complaint(**{f"x{k}": 1 for k in range(1000)})
    assert text.endswith("; and 980 further complaints")
    assert len(text) < 2000


@pytest.mark.parametrize(
    "part",
    [
        "[grid]\nredshifts = [{}]\n",
        "[cosmology]\nneutrino_masses_ev = [{}]\n",
        "[cosmology]\nexpansion_redshift = [{}]\n",
        "[rates]\nrows = [{}]\n",
    ],
)
def test_a_long_list_of_bad_values_costs_nothing(part: str) -> None:
    # Each complaint would take a kilobyte: 30 MB here, 2 GB for a file of 4 MB.
    text = part.format("[], " * 30_000)
    tracemalloc.start()
    try:
        with pytest.raises(InputError, match=r"\w\.0 = "):
            parse_setup(text)
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert peak < 15e6


def test_highest_n_resolved_in_l() -> None:
    assert minimal(hydrogen={"n_max": 12}).hydrogen.highest_resolved == 12
    shells = minimal(hydrogen={"n_max": 12, "resolve_l_to": 4}, lines={"lyman_lines": 3})
    assert shells.hydrogen.highest_resolved == 4
    assert parse_setup(shells.to_toml()) == shells
    whole = minimal(hydrogen={"n_max": 12, "resolve_l_to": 12}, lines={"lyman_lines": "all"})
    assert whole.hydrogen.highest_resolved == 12


def test_load_setup(tmp_path: Path) -> None:
    path = tmp_path / "run.toml"
    path.write_text(minimal(title="Größe").to_toml(), encoding="utf-8")
    assert load_setup(path) == load_setup(str(path)) == minimal(title="Größe")


def test_files_that_cannot_be_read(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"none\.toml: cannot be read: No such file"):
        load_setup(tmp_path / "none.toml")
    with pytest.raises(InputError, match="cannot be read: Is a directory"):
        load_setup(tmp_path)
    (tmp_path / "binary.toml").write_bytes(b"\x89HDF\r\n\x1a\n\xff")
    with pytest.raises(InputError, match=r"binary\.toml: not UTF-8 text"):
        load_setup(tmp_path / "binary.toml")
    (tmp_path / "broken.toml").write_text("[hydrogen\nn_max = 3\n")
    with pytest.raises(InputError, match=r"broken\.toml: not valid TOML: .*line 1"):
        load_setup(tmp_path / "broken.toml")


HOSTILE = [
    "n_max = " + "9" * 5000,
    "x = " + "[" * 5000 + "]" * 5000,
    "x = 1e999",
    "x = 1979-05-27T07:32:00Z",
    "[hydrogen]\nn_max = " + "9" * 400,
    "[hydrogen]\nn_max = [1, 2]",
    "hydrogen = 3",
    "[[hydrogen]]\nn_max = 3",
    "cosmology = []",
    "\x00",
    '"" = 1',
    "[cosmology.cosmology.cosmology]",
]


@pytest.mark.parametrize("text", HOSTILE, ids=range(len(HOSTILE)))
def test_hostile_text_gives_one_line(text: str) -> None:
    with pytest.raises(InputError) as caught:
        parse_setup(text)
    assert "\n" not in str(caught.value)


scalars = st.one_of(
    st.booleans(), st.integers(-(10**20), 10**20), st.floats(), st.text(max_size=5), st.dates()
)
keys = st.sampled_from(
    ["title", "cosmology", "hydrogen", "lines", "grid", "accuracy", "n_max", "redshifts",
     "lyman_lines", "hubble_km_s_mpc", "baryon_density_h2", "matter_density_h2", "relative", ""]
)  # fmt: skip
tables = st.recursive(
    scalars,
    lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(keys, inner, max_size=4)),
    max_leaves=12,
)


@settings(max_examples=500)
@given(values=st.dictionaries(keys, tables, max_size=6))
def test_random_setups_never_give_a_traceback(values: dict[str, Any]) -> None:
    text = tomli_w.dumps(values)
    assert tomllib.loads(text).keys() == values.keys()
    try:
        parse_setup(text)
    except InputError as error:
        assert "\n" not in str(error)


def test_feedback_among_too_many_lines() -> None:
    fed = {"hydrogen": "sobolev_feedback"}
    assert small_setup(11, lines=fed | {"lyman_lines": "all"}).atom_size.lyman_lines == 10
    for count in ("all", 11):
        with pytest.raises(InputError, match="allowed are 1 to 10"):
            small_setup(30, lines=fed | {"lyman_lines": count})
