"""The setup of a field resolved in frequency: defaults, round trip, and every refusal in one line.

The rules are the program's own; no outside source is needed for a message.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
import tomli_w

from levelnet.cli.main import main
from levelnet.escape.lines import Lines, Transfer
from levelnet.history.setup import Setup, parse_setup
from tests.small_runs import small_setup

COSMOLOGY = {"hubble_km_s_mpc": 68.0, "baryon_density_h2": 0.0224, "matter_density_h2": 0.142}
FIELD = {"hydrogen": "transfer"}
OVERRIDE = ["escape,2p,,1.1,,INVENTED"]


def values(**tables: Any) -> dict[str, Any]:
    """Give a whole setup as plain values; tables in place of, or merged into, the minimal ones."""
    return {"cosmology": COSMOLOGY, "hydrogen": {"n_max": 10}, "lines": FIELD} | tables


def test_defaults_depend_on_the_treatment() -> None:
    lines = small_setup(lines=FIELD).lines
    assert lines == Lines("transfer", "distorted", 1, Transfer(True, True, True, True, None, 4))
    assert small_setup(lines=FIELD | {"transfer": {}}).lines == lines
    assert (Lines().two_photon, Lines().transfer) == ("spontaneous", None)
    off = Lines("transfer", "spontaneous", 1, Transfer(False, False, False, False))
    assert off.field_levels == ()
    assert lines.field_levels == ((2, 0), (3, 0), (3, 2), (4, 0), (4, 2))
    raman = Lines("transfer", "spontaneous", transfer=Transfer(False, False, True, False))
    assert raman.field_levels == ((2, 0), (3, 0), (3, 2))


@pytest.mark.parametrize(
    "lines",
    [
        FIELD,
        FIELD | {"two_photon": "stimulated", "lyman_lines": 3},
        FIELD | {"transfer": {"raman": False, "frequency_step": 3e-4}},
        FIELD | {"transfer": {"highest_two_photon_n": 8, "feedback": False, "scattering": False}},
    ],
)
def test_round_trip(lines: dict[str, Any]) -> None:
    setup = small_setup(10, lines=lines)
    again = parse_setup(setup.to_toml())
    assert again == setup
    assert again.digest == setup.digest
    assert again.digest != small_setup(10).digest


@pytest.mark.parametrize(
    ("parts", "digest"),
    [
        # Frozen: as computed at commit f14e80b, before setups knew `[lines.transfer]`. A setup that
        # does not name a new choice must keep its digest, or old results lose their name.
        ({}, "c2e3dbcfba976bde"),
        (
            {
                "lines": {
                    "hydrogen": "sobolev_feedback",
                    "two_photon": "stimulated",
                    "lyman_lines": 3,
                }
            },
            "81fdc298af2a3646",
        ),
        (
            {"lines": {"hydrogen": "closed", "lyman_lines": "all"}, "title": "Tarnholt"},
            "ee8d2142bc4d42c3",
        ),
    ],
)
def test_older_setups_keep_their_digests(parts: dict[str, Any], digest: str) -> None:
    assert Setup(**({"cosmology": COSMOLOGY, "hydrogen": {"n_max": 10}} | parts)).digest == digest


REFUSED: dict[str, tuple[dict[str, Any], list[str]]] = {
    "unknown key": (
        values(lines=FIELD | {"transfer": {"recoil": True}}),
        ["lines.transfer.recoil: unknown key"],
    ),
    "wrong type": (
        values(lines=FIELD | {"transfer": {"raman": "yes"}}),
        ["lines.transfer.raman = 'yes'", "boolean"],
    ),
    "not a table": (values(lines=FIELD | {"transfer": 3}), ["lines.transfer"]),
    "step out of range": (
        values(lines=FIELD | {"transfer": {"frequency_step": 0.02}}),
        ["lines.transfer.frequency_step = 0.02", "0.002"],
    ),
    "step not a number": (
        values(lines=FIELD | {"transfer": {"frequency_step": float("nan")}}),
        ["lines.transfer.frequency_step"],
    ),
    "n out of range": (
        values(lines=FIELD | {"transfer": {"highest_two_photon_n": 11}}),
        ["lines.transfer.highest_two_photon_n = 11", "10"],
    ),
    "transfer elsewhere": (
        values(lines={"hydrogen": "sobolev", "transfer": {"raman": False}}),
        ['transfer: only with hydrogen = "transfer"'],
    ),
    "distorted elsewhere": (
        values(lines={"hydrogen": "sobolev_feedback", "two_photon": "distorted"}),
        ['two_photon = "distorted"', 'hydrogen = "transfer" only'],
    ),
    "step too coarse": (
        values(lines=FIELD | {"transfer": {"frequency_step": 1e-3}}, accuracy={"relative": 1e-9}),
        ["frequency_step = 0.001: too coarse for accuracy.relative = 1e-09", "up to 5.6e-05"],
    ),
    "lines too near to each other": (
        values(
            hydrogen={"n_max": 12},
            lines=FIELD | {"lyman_lines": 8, "transfer": {"frequency_step": 1e-3}},
        ),
        ["frequency_step = 0.001", "tells 5 Lyman lines apart", "lines.lyman_lines = 8"],
    ),
    "too many lines": (
        values(hydrogen={"n_max": 20}, lines=FIELD | {"lyman_lines": 11}),
        ["lines.lyman_lines: 11 lines with feedback; allowed are 1 to 10"],
    ),
    "too cold": (
        values(grid={"redshift_end": 10.0}),
        ["grid.redshift_end = 10", "down to redshift 19.18 (T_r = 55 K)"],
    ),
    "too cold for a stronger atom": (
        # The field knows energies over k T_r only: its limit goes with alpha^2, 1.2^2 here.
        values(physics={"fine_structure_change": 0.2}),
        ["grid.redshift_end = 20", "down to redshift 28.06 (T_r = 79.2 K)"],
    ),
    "n_max too low": (values(hydrogen={"n_max": 3}), ["up to n = 4", "highest_two_photon_n"]),
    "n_max too low for Raman": (
        values(hydrogen={"n_max": 2}, lines=FIELD | {"transfer": {"excited_two_photon": False}}),
        ["up to n = 3", "resolve_l_to = 2"],
    ),
    "whole shells too low": (
        values(
            hydrogen={"n_max": 10, "resolve_l_to": 5},
            lines=FIELD | {"transfer": {"highest_two_photon_n": 6}},
        ),
        ["up to n = 6", "resolve_l_to = 5"],
    ),
    "escape overridden": (
        values(rates={"rows": OVERRIDE}),
        ["escape", "follows from the field and cannot be overridden"],
    ),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refusal_is_one_line_and_exit_code_2(
    name: str, tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    tables, words = REFUSED[name]
    Path("bad.toml").write_text(tomli_w.dumps(tables))
    assert main(["solve", "bad.toml", "--output", "bad.h5"]) == 2
    said = capsys.readouterr()
    assert said.out == ""
    assert len(said.err.splitlines()) == 1
    assert said.err.startswith("levelnet: error: bad.toml: ")
    for word in words:
        assert word in said.err
    assert [path.name for path in tmp_path.iterdir()] == ["bad.toml"]


def test_what_is_just_allowed() -> None:
    """The other side of each limit above, so that none of them refuses too much."""
    small_setup(lines=FIELD | {"transfer": {"frequency_step": 5.5e-5}}, accuracy={"relative": 1e-9})
    small_setup(12, lines=FIELD | {"lyman_lines": 5, "transfer": {"frequency_step": 1e-3}})
    small_setup(12, lines=FIELD | {"lyman_lines": 10})
    small_setup(lines=FIELD, end=19.2)
    small_setup(lines=FIELD, end=28.1, physics={"fine_structure_change": 0.2})
    small_setup(4, lines=FIELD)
    small_setup(3, lines=FIELD | {"transfer": {"excited_two_photon": False}})
    none = {"excited_two_photon": False, "raman": False}
    small_setup(2, lines=FIELD | {"two_photon": "stimulated", "transfer": none})
    other = ["bound_bound,3d,2p,1.001,,INVENTED"]
    assert small_setup(lines=FIELD, rates={"rows": other}).rates.table


def test_step_is_chosen_from_the_accuracy() -> None:
    """Error goes as the square of the step: a hundredth of the error asks a tenth of the step."""
    coarse, fine = (
        small_setup(lines=FIELD, accuracy={"relative": one}).frequency_step for one in (1e-5, 1e-6)
    )
    assert (coarse / fine) ** 2 == pytest.approx(10.0)
    assert 1.5e-4 < fine < 1.75e-4
    assert small_setup(lines=FIELD, accuracy={"relative": 1e-9}).frequency_step == 5e-5
    asked = FIELD | {"transfer": {"frequency_step": 7e-4}}
    assert small_setup(lines=asked).frequency_step == 7e-4
