"""Shares of the channels of He I from the outputs, against the same added up over all steps."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from levelnet.cli.helium_output import helium_values
from levelnet.cli.output import summary_text
from levelnet.history.helium_outputs import helium_channels
from levelnet.history.helium_through import recombined_through, through_text
from levelnet.history.integrate import integrate_history
from levelnet.history.outputs import assemble_history
from levelnet.history.result import History
from levelnet.history.run import solve
from levelnet.report.page.content import Origin
from levelnet.report.page.history_chapter import history_chapter
from tests.small_runs import small_setup


def nothing(stage: str, fraction: float) -> None:
    """No progress."""


@pytest.fixture(scope="module")
def run() -> tuple[History, dict[str, float]]:
    """A history, and the shares from the spline over its accepted steps."""
    grid = {"redshift_start": 3500.0, "redshift_end": 1600.0, "n_redshifts": 60}
    setup = small_setup(4, helium={"n_max": 3, "helium_ion": "saha"}, grid=grid)
    integrated = integrate_history(setup, nothing)
    found = helium_channels(integrated, integrated.redshift)
    shares = dict(zip(found.names, found.cumulative_share[-1].tolist(), strict=True))
    return assemble_history(setup, integrated, nothing), shares


def test_shares_are_those_of_the_steps(run: tuple[History, dict[str, float]]) -> None:
    history, shares = run
    found = recombined_through(history)
    assert sum(found.values()) == pytest.approx(1.0)
    assert list(found.values()) == sorted(found.values(), reverse=True)
    assert found.keys() == shares.keys()
    for name, share in shares.items():
        assert found[name] == pytest.approx(share, abs=0.01)


def test_summary_report_and_json_say_them(run: tuple[History, dict[str, float]]) -> None:
    history = run[0]
    text = through_text(history)
    assert "2 1S-1 1S " in text and "2 3P-1 1S " in text and "2 1P-1 1S " in text
    assert f"He I through          {text}" in summary_text(history)
    assert text in str(history_chapter(history, Origin("result.h5", {}), "a").sections[1].blocks[0])
    values = helium_values(history, [0])
    assert values is not None and values["recombined_through"] == recombined_through(history)


def test_nothing_is_said_where_it_is_not_known(run: tuple[History, dict[str, float]]) -> None:
    history = run[0]
    inert = solve(small_setup(3, 1000.0, 5))
    assert recombined_through(inert) == {} and "He I through" not in summary_text(inert)
    late = np.full(len(history.redshift), 0.5)
    assert recombined_through(dataclasses.replace(history, neutral_helium_fraction=late)) == {}
    sudden = np.where(history.redshift > 2000.0, 0.0, 1.0)
    assert recombined_through(dataclasses.replace(history, neutral_helium_fraction=sudden)) == {}
