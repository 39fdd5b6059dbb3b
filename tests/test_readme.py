"""The README says what is there: its two commands, every key of the setup, nothing left open."""

from __future__ import annotations

import dataclasses
import os
import re
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import levelnet
from levelnet.atomic.species import Helium
from levelnet.cli.main import build_parser
from levelnet.escape.lines import HeliumContinuum, Transfer
from levelnet.history.setup import Setup, parse_setup
from levelnet.store import (
    DISTILLED_LAYOUT,
    ESCAPE_LAYOUT,
    LEVEL_LAYOUT,
    SWEEP_LAYOUT,
    TABLE_LAYOUT,
    WEIGHING_LAYOUT,
)
from levelnet.store.layout import SPECIES_GROUPS, groups_of

ROOT = Path(__file__).resolve().parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
PARTS = {field.name: field for field in dataclasses.fields(Setup) if field.name != "title"}
KEYS = [
    (part, field)
    for part in PARTS
    for field in dataclasses.fields(
        type(getattr(parse_setup(re.findall(r"```toml\n(.*?)```", README, re.S)[0]), part))
    )
]


def section(heading: str) -> str:
    """Give the text under a heading of level two."""
    return README.split(f"\n## {heading}\n")[1].split("\n## ")[0]


def test_start_has_two_commands_of_one_line() -> None:
    blocks = re.findall(r"^```sh\n(.*?)^```$", section("Start"), re.S | re.M)
    assert len(blocks) == 2
    for block in blocks:
        assert len(block.splitlines()) == 1
    assert "levelnet demo" in blocks[0]
    assert "pytest" in blocks[1]
    assert len(re.findall("^```sh", README, re.M)) == 2


def commands() -> list[str]:
    """Give the words that the parser knows as commands."""
    actions = build_parser()._actions
    return [one for action in actions if action.metavar == "COMMAND" for one in action.choices]


def test_every_command_has_a_row_and_no_other() -> None:
    rows = re.findall(r"^\| `levelnet (\w+)", section("What you get"), re.M)
    assert sorted(rows) == sorted(commands())
    assert len(rows) > 5


KINDS = {
    "levelnet history": groups_of(tuple(SPECIES_GROUPS), with_field=True, with_helium=True),
    **{
        kind.name: (*kind.required, *kind.optional)
        for kind in (
            LEVEL_LAYOUT,
            ESCAPE_LAYOUT,
            WEIGHING_LAYOUT,
            SWEEP_LAYOUT,
            TABLE_LAYOUT,
            DISTILLED_LAYOUT,
        )
    },
}


@pytest.mark.parametrize("kind", KINDS)
def test_every_group_of_a_file_is_explained(kind: str) -> None:
    """Some table of "Result file" has a row for each group of this kind of file, no other."""
    wanted = {group.name for group in KINDS[kind]}
    tables = section("Result file").split("| group | holds |")[1:]
    found = [set(re.findall(r"^\| `(\w+)` \|", table.split("\n\n")[0], re.M)) for table in tables]
    assert wanted in found


def rows_of(part: str) -> dict[str, list[str]]:
    """Read the table of a part: key -> cells of its row."""
    text = section("Setup file").split(f"`[{part}]`")[1].split("\n\n`[")[0]
    found: dict[str, list[str]] = {}
    for line in text.splitlines():
        if line.startswith("| `"):
            cells = [cell.strip() for cell in line.strip("|").split("|")]
            found.update(dict.fromkeys(re.findall(r"`(\w+)`", cells[0]), cells))
    return found


@pytest.mark.parametrize(("part", "field"), KEYS, ids=[f"{p}.{f.name}" for p, f in KEYS])
def test_every_key_of_the_setup_is_explained(part: str, field: dataclasses.Field) -> None:
    cells = rows_of(part)[field.name]
    if field.default is dataclasses.MISSING:
        assert cells[1] == "needed"
    elif field.name == "helium_mass_fraction":
        # None stands for a value that depends on another key.
        assert cells[1] == "`0.245`"
    elif part == "helium" and field.default is None:
        # None stands for a value wherever helium has levels.
        value = tomllib.loads(f"x = {cells[1].strip('`')}")["x"]
        assert value == getattr(Helium(n_max=2), field.name)
    elif (part, field.name) == ("lines", "two_photon"):
        assert cells[1] == '`"spontaneous"`'
    elif field.default is None:
        assert cells[1] == "not set"
    else:
        value = tomllib.loads(f"x = {cells[1].strip('`')}")["x"]
        assert (tuple(value) if isinstance(value, list) else value) == field.default


@pytest.mark.parametrize(
    ("part", "record", "field"),
    [
        (part, record, field)
        for part, record in (
            ("lines.transfer", Transfer),
            ("lines.helium_continuum", HeliumContinuum),
        )
        for field in dataclasses.fields(record)
    ],
)
def test_every_key_of_a_table_of_lines_is_explained(
    part: str, record: type, field: dataclasses.Field
) -> None:
    rows = rows_of(part)
    assert set(rows) == {one.name for one in dataclasses.fields(record)}
    found = rows[field.name][1]
    if field.default is None:
        assert found == "not set"
    else:
        assert tomllib.loads(f"x = {found.strip('`')}")["x"] == field.default


@pytest.mark.parametrize("part", PARTS)
def test_no_key_is_explained_that_is_not_there(part: str) -> None:
    assert set(rows_of(part)) == {field.name for one, field in KEYS if one == part}


def test_version_is_the_same_everywhere() -> None:
    citation = (ROOT / "CITATION.cff").read_text(encoding="utf-8")
    assert f"\nversion: {levelnet.__version__}\n" in citation
    assert f"### {levelnet.__version__}" in section("Changes")


def test_nothing_is_left_to_fill() -> None:
    assert "TO FILL" not in README


def example(start: str) -> str:
    """Give the block of Python that begins with `start`."""
    blocks = re.findall(r"```python\n(.*?)```", README, re.S)
    # Two begin with the import alone; the first of them is meant.
    found = next(block for block in blocks if block.startswith(start))
    return str(found)


def run_example(names: dict[str, Any], start: str) -> None:
    exec(compile(example(start), "README.md", "exec"), names)


@pytest.fixture(scope="module")
def first_example(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    """Names that the first example leaves: every later one builds on it."""
    folder, before = tmp_path_factory.mktemp("readme"), Path.cwd()
    names: dict[str, Any] = {}
    os.chdir(folder)
    try:
        run_example(names, "import levelnet")
        assert Path("result.h5").exists()
    finally:
        os.chdir(before)
    return names


def test_python_example_runs(first_example: dict[str, Any]) -> None:
    assert repr(first_example["again"]) == repr(first_example["history"])


def test_notebook_example_runs(
    first_example: dict[str, Any], capsys: pytest.CaptureFixture[str]
) -> None:
    run_example(dict(first_example), "levelnet.plot(history)")
    assert "%" in capsys.readouterr().out


def test_sweep_example_runs(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    names: dict[str, Any] = {}
    run_example(names, "import levelnet\n\ncases")
    assert names["swept"].not_ok == ()
    assert levelnet.read("sweep.h5")["sound_horizon_mpc"].shape == (2,)
    # The file beside it is one of the program's too.
    toml = next(b for b in re.findall(r"```toml\n(.*?)```", README, re.S) if "[combine]" in b)
    setup = re.findall(r"```toml\n(.*?)```", README, re.S)[0]
    (tmp_path / "setup.toml").write_text(setup)
    (tmp_path / "sweep.toml").write_text(toml)
    assert len(levelnet.load_sweep("sweep.toml")) == 3 * 4 * 3


def test_error_budget_example_runs(first_example: dict[str, Any]) -> None:
    names = dict(first_example)
    run_example(names, "from levelnet.studies.budget import")
    assert names["budget"].targets == ("x_e(900)", "last_scattering_redshift")
    assert names["budget"].sigma.min() > 0.0


def test_own_line_treatment_example_runs(first_example: dict[str, Any]) -> None:
    names = dict(first_example)
    run_example(names, "import numpy")
    leaky, plain = names["leaky"], names["history"]
    assert leaky.outcome.ok
    # A file never names a treatment of one's own; its notes say that there was one.
    assert any("treatment of one's own" in note for note in leaky.notes)
    assert not any("LeakyLines" in note for note in leaky.notes)
    # The escape falls to 1.8e-9: the leak is 6 per cent of it, and ln x_e answers to ln of
    # the escape with -0.25 (`weigh`).
    change = leaky.free_electron_fraction / plain.free_electron_fraction - 1.0
    assert change.min() == pytest.approx(-0.25 * 0.056, rel=0.2)
    # It comes out the same with the leak as an exact slope: a tighter run agrees.
    tight = dataclasses.replace(names["setup"].accuracy, relative=1e-8)
    setup = dataclasses.replace(names["setup"], accuracy=tight)
    again = levelnet.solve(setup, line_treatment=names["LeakyLines"]())
    np.testing.assert_allclose(
        again.free_electron_fraction, leaky.free_electron_fraction, rtol=1e-6
    )
