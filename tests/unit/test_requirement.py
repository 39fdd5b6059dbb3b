"""Requirement files: what they hold, how a history is held against them, what is refused."""

from __future__ import annotations

import dataclasses
import hashlib
import math
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest

from levelnet.errors import InputError
from levelnet.studies.requirement import (
    Finding,
    Requirement,
    check,
    load_requirement,
    parse_requirement,
)
from levelnet.studies.response import read_response
from tests.unit.test_response import RESPONSE
from tests.unit.test_response import TEXT as RESPONSE_TEXT

TEXT = """
title = "invented"
[observables]
"z_*" = 1e-4
"tau(1100.0)" = 2e-4
"x_e(900)" = 1e-3
"T_m(200)" = 1e-3
[[ranges]]
quantity = "x_e"
redshift = [200, 1600]
relative = 1e-3
[[ranges]]
quantity = "T_m"
redshift = [150.0, 250.0]
relative = 1e-2
[response]
file = "kernels.csv"
limit_sigma = 0.1
"""
Z = np.expm1(np.linspace(math.log(1801.0), math.log(21.0), 300))
KNOWN = {"last_scattering_redshift": -5e-5, "optical_depth(1100)": 3e-4}


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "kernels.csv").write_text(RESPONSE_TEXT)
    (tmp_path / "requirement.toml").write_text(TEXT)
    return tmp_path


def test_file_is_read_whole(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    # The response is looked for beside the requirement, wherever one stands.
    monkeypatch.chdir("/")
    asked = load_requirement(folder / "requirement.toml")
    assert asked.title == "invented"
    assert asked.observables == {
        "last_scattering_redshift": 1e-4,
        "optical_depth(1100)": 2e-4,
        "x_e(900)": 1e-3,
        "T_m(200)": 1e-3,
    }
    assert asked.targets == tuple(asked.observables)
    assert [one.name for one in asked.ranges] == ["x_e(200 to 1600)", "T_m(150 to 250)"]
    assert asked.response is not None
    assert asked.response.rows == RESPONSE
    assert asked.response.limit_sigma == 0.1


def test_text_comes_back_equal(folder: Path) -> None:
    asked = load_requirement(folder / "requirement.toml")
    (folder / "kernels.csv").unlink()  # the text carries the response
    assert parse_requirement(asked.to_toml()) == asked
    nothing = {"title": "", "observables": {}, "ranges": (), "response": None}
    for part, empty in nothing.items():
        less = dataclasses.replace(asked, **{part: empty})
        assert parse_requirement(less.to_toml()) == less != asked


def test_checksum(folder: Path) -> None:
    digest = hashlib.sha256(RESPONSE_TEXT.encode()).hexdigest()
    line = 'file = "kernels.csv"'
    good = TEXT.replace(line, f'{line}\nsha256 = "{digest}"')
    assert parse_requirement(good, "asked", folder).response is not None
    with pytest.raises(InputError, match=f"asked: .*SHA-256 is {digest}, but abc was asked for"):
        parse_requirement(good.replace(digest, "abc"), "asked", folder)


def test_verdicts(folder: Path) -> None:
    asked = load_requirement(folder / "requirement.toml")
    x_e = -2e-3 * np.exp(-(((Z - 700.0) / 150.0) ** 2))
    t_m = np.full(len(Z), 5e-4)
    found = check(asked, Z, x_e, t_m, KNOWN)
    assert [one.name for one in found] == [
        "last_scattering_redshift",
        "optical_depth(1100)",
        "x_e(900)",
        "T_m(200)",
        "x_e(200 to 1600)",
        "T_m(150 to 250)",
        "response",
    ]
    assert found[0] == Finding("last_scattering_redshift", 5e-5, 1e-4, "relative", True)
    assert found[1] == Finding("optical_depth(1100)", 3e-4, 2e-4, "relative", False)
    assert found[2].error == pytest.approx(2e-3 * math.exp(-16.0 / 9.0), rel=1e-4)  # the spline
    assert found[3].error == pytest.approx(5e-4, rel=1e-12)
    assert found[4].error == np.max(np.abs(x_e))
    assert found[5].passed
    assert found[6].unit == "sigma"
    assert found[6].error == RESPONSE.sigma(Z, x_e)
    assert [one.passed for one in found] == [True, False, True, True, False, True, True]
    # Order of the redshifts does not matter.
    assert check(asked, Z[::-1], x_e[::-1], t_m, KNOWN) == found


def test_the_ends_of_a_range_count() -> None:
    # The error rises towards the upper end, which no output hits.
    asked = parse_requirement(
        "[[ranges]]\nquantity = 'x_e'\nredshift = [200.0, 1600.0]\nrelative = 1e-3"
    )
    (found,) = check(asked, Z, 1e-3 * (Z / 1600.0) ** 2, 0.0 * Z, {})
    assert found.error == pytest.approx(1e-3, rel=1e-6)
    assert found.error > np.max(1e-3 * (Z[Z < 1600.0] / 1600.0) ** 2)


def test_an_error_given_for_x_e_is_taken() -> None:
    asked = Requirement(observables={"x_e(5)": 1e-3})
    (found,) = check(asked, Z, 0.0 * Z, 0.0 * Z, {"x_e(5)": 1e-4})
    assert (found.error, found.passed) == (1e-4, True)


def test_what_is_not_known_does_not_pass() -> None:
    asked = Requirement(observables={"r_s": 1e-3})
    (found,) = check(asked, Z, 0.0 * Z, 0.0 * Z, {"sound_horizon_mpc": math.nan})
    assert not found.passed


@pytest.mark.parametrize(
    ("text", "complaint"),
    [
        ("[observables]\n'x_e(10)' = 1e-3", "x_e(10) lies outside the redshifts of the study, 20"),
        ("[observables]\nr_s = 1e-3", "the error of sound_horizon_mpc is needed and was not"),
        (
            "[[ranges]]\nquantity = 'T_m'\nredshift = [10, 50]\nrelative = 1e-3",
            "T_m(10 to 50) lies outside",
        ),
        (
            "[[ranges]]\nquantity = 'T_m'\nredshift = [100, 1900]\nrelative = 1e-3",
            "T_m(100 to 1900) lies outside the redshifts of the study, 20 to 1800",
        ),
    ],
)
def test_a_study_must_cover_what_is_asked(text: str, complaint: str) -> None:
    with pytest.raises(InputError) as caught:
        check(parse_requirement(text), Z, 0.0 * Z, 0.0 * Z, {})
    assert complaint in str(caught.value)


def test_a_study_must_cover_the_response(folder: Path) -> None:
    asked = Requirement(response=load_requirement(folder / "requirement.toml").response)
    with pytest.raises(InputError, match="kernels run from redshift 100 to 1500"):
        check(asked, Z[50:], 0.0 * Z[50:], 0.0 * Z[50:], {})


RANGE = "[[ranges]]\nquantity = 'x_e'\nredshift = [200, 1600]\nrelative = 1e-3"
WRONG = {
    "empty": ("", "nothing is asked: [observables], [[ranges]] or [response] is needed"),
    "title only": ("title = 'a'", "nothing is asked"),
    "no TOML": ("x =", "not valid TOML"),
    "unknown key": ("limits = 1", "limits: unknown key"),
    "unknown observable": ("[observables]\nsize = 1e-3", 'target "size" is not known; known are'),
    "line": ("[observables]\n'line(3d-2p)' = 1e-3", "line(3d-2p): a line has no place here"),
    "no redshift": ("[observables]\nx_e = 1e-3", 'target "x_e": a redshift from 0 to 10000'),
    "twice": ("[observables]\n'z_*' = 1e-3\nlast_scattering_redshift = 1e-3", "asked twice"),
    "zero": ("[observables]\nr_s = 0", "observables.r_s = 0: input should be greater than 0"),
    "negative": ("[observables]\nr_s = -1e-3", "observables.r_s = -0.001: input should be"),
    "too large": ("[observables]\nr_s = 1.5", "observables.r_s = 1.5: input should be less"),
    "infinite": ("[observables]\nr_s = inf", "observables.r_s = inf: input should be a finite"),
    "text": ("[observables]\nr_s = 'small'", "observables.r_s = 'small': input should be"),
    "no table": ("observables = 3", "observables = 3"),
    "quantity": (RANGE.replace("x_e", "n_e"), "ranges.0.quantity = 'n_e'"),
    "range descends": (RANGE.replace("200", "1700"), "ranges.0: redshift = [1700, 1600] must"),
    "range of one": (RANGE.replace("200, ", ""), "ranges.0.redshift.1: missing"),
    "range of three": (RANGE.replace("200, ", "200, 300, "), "ranges.0.redshift"),
    "range too high": (RANGE.replace("1600", "10001"), "ranges.0.redshift.1 = 10001: input"),
    "range limit": (RANGE.replace("1e-3", "0.0"), "ranges.0.relative = 0.0: input should be"),
    "range key": (RANGE + "\nsigma = 1", "ranges.0.sigma: unknown key"),
    "response no file": ("[response]\nlimit_sigma = 1", "response.file: missing"),
    "response no limit": ("[response]\nfile = 'kernels.csv'", "response.limit_sigma: missing"),
    "limit": ("[response]\nfile = 'kernels.csv'\nlimit_sigma = 0", "limit_sigma = 0: input"),
    "no such file": ("[response]\nfile = 'none.csv'\nlimit_sigma = 1", "none.csv: cannot be read"),
    "file number": ("[response]\nfile = 3\nlimit_sigma = 1", "response: file, and sha256 where"),
    "sha256 number": ("[response]\nfile = 'kernels.csv'\nsha256 = 3", "must be text"),
    "response key": ("[response]\nfile = 'kernels.csv'\nlimit = 1", "response.limit: unknown key"),
    "both": ("[response]\nfile = 'kernels.csv'\n[response.rows]", "file and rows: give one"),
    "response number": ("response = 3", "response = 3: input should be an object"),
}


@pytest.mark.parametrize("name", sorted(WRONG))
def test_wrong_requirements(name: str, folder: Path) -> None:
    text, complaint = WRONG[name]
    (folder / "wrong.toml").write_text(text)
    with pytest.raises(InputError) as caught:
        load_requirement(folder / "wrong.toml")
    assert str(caught.value).startswith(f"{folder / 'wrong.toml'}: ")
    assert complaint in str(caught.value)
    assert "\n" not in str(caught.value)


def test_files_that_cannot_be_read(tmp_path: Path) -> None:
    for path in (tmp_path, tmp_path / "none.toml", "a\0b"):
        with pytest.raises(InputError, match="cannot be read"):
            load_requirement(path)
    (tmp_path / "binary.toml").write_bytes(b"\xff\xfe")
    with pytest.raises(InputError, match="not UTF-8 text"):
        load_requirement(tmp_path / "binary.toml")


def test_requirement_of_the_demo() -> None:
    with files("levelnet.cli").joinpath("demo-requirement.toml").open() as stream:
        path = Path(stream.name)
    asked = load_requirement(path)
    assert "INVENTED" in asked.title
    assert asked.response is not None
    assert asked.response.rows == read_response(path.with_name("demo-response.csv"))
    # The redshifts of the demo's setup cover it.
    known = dict.fromkeys(asked.targets, 0.0)
    assert all(one.passed for one in check(asked, Z, 0.0 * Z, 0.0 * Z, known))
