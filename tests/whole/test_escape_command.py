"""``levelnet escape`` from outside: the verdict, the file, JSON, figures, one-line complaints.

What is expected is the project's own contract, as in test_command_line.py.
"""

from __future__ import annotations

import json
import time
from pathlib import Path

import numpy as np
import pytest

import levelnet
from levelnet.cli.main import main
from levelnet.studies.escape_plan import SWITCHES
from levelnet.studies.escape_records import EscapeStudy
from tests.whole.test_command_line import GOOD

# Coarse cells: what they err by is of no concern here.
SMALL = (
    GOOD.replace("n_max = 4", "n_max = 6").replace("end = 200.0", "end = 500.0")
    + "[accuracy]\nrelative = 1e-4\n"
    + '[lines]\nhydrogen = "transfer"\nlyman_lines = 3\n[lines.transfer]\nfrequency_step = 1e-3\n'
)

FIELD = '[lines]\nhydrogen = "transfer"\n[lines.transfer]\nfrequency_step = {}\n'


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Work in an empty folder that holds one good setup."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "good.toml").write_text(SMALL)
    return tmp_path


def test_study_from_setup_to_verdict(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (folder / "asked.toml").write_text("[observables]\nz_drag = 0.01\n'tau(1000)' = 0.2\n")
    words = ["escape", "good.toml", "--within", "0.2", "--between", "600", "1500"]
    words += ["--plot", "figures", "--workers", "1", "--requirement", "asked.toml"]
    assert main([*words, "--quiet"]) == 0
    said = capsys.readouterr().out
    assert "Sobolev with feedback errs by at most " in said
    assert "for 20 % in x_e at 600 <= z <= 1500: " in said
    assert "for the requirement: " in said
    assert "optical_depth(1000)" in said
    for name in SWITCHES:
        assert f"\n{name} " in said
    study = levelnet.read("good-escape.h5")
    assert isinstance(study, EscapeStudy)
    assert study.switches.name == tuple(SWITCHES)
    assert study.field is not None
    assert study.setup.lines.two_photon == "distorted"

    # Nothing of a field is left of a field without switches: it is Sobolev's treatment.
    x_e = study.variants.free_electron_fraction
    plain = x_e[study.variants.name.index("Sobolev")]
    np.testing.assert_allclose(x_e[study.switches.base], plain, rtol=1e-3)

    stems = ("escape", "escape-channels", "escape-spectrum", "escape-switches")
    found = sorted(path.name for path in (folder / "figures").iterdir())
    assert found == sorted(f"{stem}.{end}" for stem in stems for end in ("pdf", "svg"))
    # The file is never replaced unasked, and this is said before any work.
    start = time.monotonic()
    assert main(words) == 2
    assert "already exists" in capsys.readouterr().err
    assert main([*words, "--output", "other.h5"]) == 2
    assert "exists already" in capsys.readouterr().err
    assert time.monotonic() - start < 5.0

    assert main(["show", "good-escape.h5"]) == 0
    shown = capsys.readouterr().out
    verdicts = [line for line in said.splitlines() if line.startswith(("verdict", "note"))]
    assert len(verdicts) > 8
    assert all(line in shown for line in verdicts)
    assert main(["show", "good-escape.h5", "--json"]) == 0
    values = json.loads(capsys.readouterr().out)
    assert values["variants"]["name"] == list(study.variants.name)
    assert values["verdict"]["within"] == 0.2
    assert values["switches"]["alone"] == study.switches.alone.tolist()
    assert values["field"]["n_spectra"] == len(study.field.redshift)
    assert main(["show", "good-escape.h5", "--plot", "again"]) == 0
    assert (folder / "again" / "escape.svg").exists()
    capsys.readouterr()
    assert main(["show", "good-escape.h5", "--csv"]) == 2
    assert "not for a study of the escape" in capsys.readouterr().err


def test_help_names_the_order_that_is_used(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit):
        main(["escape", "--help"])
    said = "".join(capsys.readouterr().out.split())
    assert f"(default:{','.join(SWITCHES)})" in said


@pytest.mark.parametrize(
    ("changed", "words", "message"),
    [
        (("", ""), ["--within", "0"], "within = 0"),
        (("", ""), ["--between", "1", "2"], "they run from 500 to 1700"),
        (("", ""), ["--between", "400", "1600"], "do not cover that"),
        (("", ""), ["--workers", "0"], "--workers = 0"),
        (("", ""), ["--output", "no/such/x.h5"], "does not exist"),
        (("", ""), ["--plot", "good.toml"], "is a file, not a folder"),
        (("", ""), ["--requirement", "none.toml"], "none.toml: cannot be read"),
        (("", ""), ["--order", "raman"], "order = raman: each switch once is needed"),
        (("", ""), ["--order", "raman,magic"], '"magic" is no switch; they are stimulated'),
        (("lyman_lines = 3", "lyman_lines = 6"), [], "hydrogen.n_max = 6 has only 5 Lyman lines"),
        (("lyman_lines = 3", "lyman_lines = 9"), [], "lines.lyman_lines = 9"),
        (("lyman_lines = 3", 'lyman_lines = "none"'), [], "lyman_lines"),
    ],
)
def test_complaints_are_one_line(
    folder: Path,
    capsys: pytest.CaptureFixture[str],
    changed: tuple[str, str],
    words: list[str],
    message: str,
) -> None:
    (folder / "good.toml").write_text(SMALL.replace(*changed) if changed[0] else SMALL)
    start = time.monotonic()
    assert main(["escape", "good.toml", *words]) == 2
    said = capsys.readouterr()
    assert said.out == ""
    assert len(said.err.splitlines()) == 1
    assert message in said.err
    assert [path.name for path in folder.iterdir()] == ["good.toml"]
    assert time.monotonic() - start < 5.0


# The setup names no field, so that it is the study that asks for one.
PLAIN = GOOD.replace("n_max = 4", "n_max = 8")


@pytest.mark.parametrize(
    ("changed", "message"),
    [
        (
            ("n_max = 8", "n_max = 3"),
            "transfer with every switch: lines.transfer: needs levels up to n = 4",
        ),
        (
            ("end = 200.0", "end = 10.0"),
            "transfer with every switch: grid.redshift_end = 10: the field is resolved down to",
        ),
        (
            ("[grid]", "[accuracy]\nrelative = 2e-8\n" + FIELD.format(1.5e-4) + "[grid]"),
            "lines.transfer.frequency_step = 0.00015: the study also runs cells twice as wide to "
            "tell its error, "
            "so that at accuracy.relative = 2e-08 it allows up to 0.000125",
        ),
        (
            ("[grid]", FIELD.format(1.5e-3) + "[grid]"),
            "lines.transfer.frequency_step = 0.0015: the study also runs cells twice as wide to "
            "tell its error, "
            "so that at accuracy.relative = 1e-06 it allows up to 0.000886",
        ),
        (
            ("[grid]", "[accuracy]\nrelative = 1e-5\n" + FIELD.format(1.1e-3) + "[grid]"),
            "lines.transfer.frequency_step = 0.0011: the study also runs cells twice as wide to "
            "tell its error, so that at accuracy.relative = 1e-05 it allows up to 0.001",
        ),
        (
            (
                "[grid]",
                "[accuracy]\nrelative = 1e-4\n"
                + FIELD.format(1e-3).replace("[lines]\n", "[lines]\nlyman_lines = 5\n")
                + "[grid]",
            ),
            "lines.transfer.frequency_step = 0.001: the study also runs cells twice as wide to "
            "tell its error, which tell 4 Lyman lines apart, and lines.lyman_lines = 5",
        ),
    ],
)
def test_setup_that_does_not_go_with_the_reference(
    folder: Path, capsys: pytest.CaptureFixture[str], changed: tuple[str, str], message: str
) -> None:
    assert changed[0] in PLAIN
    (folder / "good.toml").write_text(PLAIN.replace(*changed))
    assert main(["escape", "good.toml"]) == 2
    said = capsys.readouterr()
    assert said.out == ""
    assert len(said.err.splitlines()) == 1
    assert f"error: {message}" in said.err
    assert [path.name for path in folder.iterdir()] == ["good.toml"]
