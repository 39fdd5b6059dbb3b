"""Channels of hydrogen while it is in Saha equilibrium: the net flow is none, and so are shares."""

from __future__ import annotations

import numpy as np
import pytest

from levelnet.cli.output import summary_text
from levelnet.history.result import History
from levelnet.history.run import solve
from levelnet.report.page.wording import most_through
from levelnet.report.plots import channel_figure
from tests.small_runs import small_setup
from tests.tolerances import ROUND_OFF


def from_early(n_max: int, end: float) -> History:
    """Outputs from z = 8000, above where hydrogen begins to lag."""
    grid = {"redshift_start": 8000.0, "redshift_end": end, "n_redshifts": 40}
    lines = {"helium": "sobolev"} if n_max else {}
    return solve(small_setup(4, helium={"n_max": n_max}, grid=grid, lines=lines))


@pytest.fixture(scope="module")
def both() -> tuple[History, History]:
    """Without and with helium."""
    return from_early(0, 900.0), from_early(2, 900.0)


def test_shares_begin_where_hydrogen_leaves_equilibrium(both: tuple[History, History]) -> None:
    for history in both:
        z, channels = history.redshift, history.channels
        known = np.isfinite(channels.share)
        np.testing.assert_array_equal(known, np.isfinite(channels.cumulative_share))
        np.testing.assert_array_equal(known, np.repeat(known[:, :1], known.shape[1], axis=1))
        first = int(np.argmax(known[:, 0]))
        assert known[first:].all() and not known[:first].any()
        # Of 1e-6 of all atoms, the accuracy, 5 have recombined (Saha) when the first share is told.
        assert 1e-7 < history.neutral_hydrogen_fraction[first] < 1e-3
        assert 1700.0 < z[first] < 2100.0
        for values in (channels.share, channels.cumulative_share):
            np.testing.assert_allclose(values[first:].sum(axis=1), 1.0, rtol=ROUND_OFF)
            assert values[first:].min() > -1e-3
        axes = channel_figure(history).axes
        assert all(one.get_xlim() == (z[-1], z[first]) for one in axes)
        assert all(-0.1 < one.get_ylim()[0] and one.get_ylim()[1] < 1.1 for one in axes)
        assert "Most atoms" in most_through(channels)


def test_helium_changes_neither_where_shares_begin_nor_what_they_are(
    both: tuple[History, History],
) -> None:
    """Helium is all but neutral while hydrogen recombines, so that it changes a share by little."""
    without, with_helium = (one.channels for one in both)
    known = np.isfinite(without.share)
    assert np.sum(np.isfinite(with_helium.share) != known) <= 2  # one output, as it lies
    known &= np.isfinite(with_helium.share)
    np.testing.assert_allclose(with_helium.share[known], without.share[known], atol=3e-3)
    last = without.cumulative_share[-1]
    np.testing.assert_allclose(with_helium.cumulative_share[-1], last, atol=1e-3)


def test_outputs_that_end_early_have_no_shares_and_say_so() -> None:
    history = from_early(0, 2500.0)
    assert np.isnan(history.channels.share).all()
    assert "nothing yet: hydrogen is in Saha equilibrium" in summary_text(history)
    assert most_through(history.channels) == ""
    channel_figure(history)
