"""Results in a notebook: small tables, xarray, figures, progress, and the examples."""

from __future__ import annotations

import dataclasses
import inspect
import runpy
from functools import lru_cache
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import html5lib
import numpy as np
import pytest

import levelnet
from levelnet.errors import InputError
from levelnet.history.result import History
from levelnet.history.setup import parse_setup
from levelnet.markup import html_table, html_text
from levelnet.report.plot import makers_of
from levelnet.store.layout import HISTORY
from tests.small_runs import small_setup
from tests.unit.test_report_page import record_of

KINDS = ("history", "field", "levels", "escape", "certificate", "table", "fast", "budget", "sweep")
EXAMPLES = Path(levelnet.__file__).parent / "examples"
BAD = '<img src=x onerror="alert(1)">&'


@pytest.mark.parametrize("kind", KINDS)
def test_results_show_themselves_small_and_sound(kind: str) -> None:
    record: Any = record_of(kind)[0]
    shown = record._repr_html_()
    assert len(shown) < 10_000
    # Any error of HTML that the parser knows is raised.
    tree = html5lib.HTMLParser(strict=True, namespaceHTMLElements=False).parseFragment(shown)
    assert len(tree.findall(".//tbody/tr")) >= 2
    assert tree.findall(".//script") == [] and "nan" not in shown


def test_setup_shows_itself_and_its_title_is_text() -> None:
    setup = dataclasses.replace(small_setup(4), title=BAD)
    shown = setup._repr_html_()
    assert "<img" not in shown and "&lt;img src=x" in shown and setup.digest in shown
    assert "n_max = 4" in shown


def test_text_is_escaped_and_cut() -> None:
    assert html_table(BAD, (BAD,), [(BAD,)]).count("<img") == 0
    assert "... (cut here)" in html_text("title", "x" * 5000)
    assert len(html_text("title", "x" * 1_000_000)) < 5000


@pytest.mark.parametrize("kind", KINDS)
def test_results_become_xarray(kind: str) -> None:
    record: Any = record_of(kind)[0]
    data = record.to_xarray()
    assert data.sizes
    if kind in {"history", "field", "fast"}:
        assert data["free_electron_fraction"].dims == ("redshift",)
        assert np.array_equal(data["free_electron_fraction"], record.free_electron_fraction)
    if kind == "levels":
        last = data["free_electron_fraction"].sel(n_max=int(record.rungs.n_max[-1]))
        assert np.array_equal(last, record.rungs.free_electron_fraction[-1])
        limit = data["free_electron_fraction_limit"]
        assert np.array_equal(limit, record.limit.free_electron_fraction.value)
    if kind == "escape":
        name = record.variants.name[record.reference]
        one = data["free_electron_fraction"].sel(variant=name)
        assert np.array_equal(one, record.variants.free_electron_fraction[record.reference])
    if kind == "table":
        assert np.array_equal(data["departure"], record.departure)
        assert data["n"].values.tolist() == record.kept.n.tolist()
    if kind == "budget":
        one = data["bound_free"].sel(target=record.targets[0])
        assert np.array_equal(one, record.bound_free[0])


@pytest.mark.parametrize("kind", ["history", "field", "fast", "sweep", "helium"])
def test_arrays_in_xarray_say_what_they_are(kind: str) -> None:
    record: Any = record_of(kind)[0]
    data = record.to_xarray()
    files = {one.name: (one.units, one.long_name) for one in HISTORY.variables}
    assert data.attrs["levelnet_version"] == levelnet.__version__
    for name in data.data_vars:
        if name in files:  # the file of the same history says the same
            assert (data[name].attrs["units"], data[name].attrs["long_name"]) == files[name]
        elif kind != "sweep":
            assert data[name].attrs["units"] and data[name].attrs["long_name"], name
    if isinstance(record, History):
        assert data.attrs["setup_digest"] == record.setup.digest
        assert parse_setup(data.attrs["setup"], "setup") == record.setup
        for one in record.species:
            end = one.name.lower().replace(" ", "_")
            assert np.array_equal(data[f"population_{end}"], one.population)
            assert np.array_equal(data[f"log_departure_{end}"], one.log_departure, equal_nan=True)
            assert np.array_equal(data[f"n_{end}"], one.levels.n)
            assert np.array_equal(data[f"l_{end}"], one.levels.l)
        assert ("spin_he_i" in data.coords) == (kind == "helium")
    if kind == "field":
        assert np.array_equal(data["log_distortion"], record.field.log_distortion)
        alone = record.field.to_xarray()
        assert alone["log_distortion"].attrs == data["log_distortion"].attrs


@pytest.mark.parametrize("kind", KINDS)
def test_plot_draws_the_first_figure_unless_told(kind: str) -> None:
    record = record_of(kind)[0]
    names = list(makers_of(record))
    figure: Any = levelnet.plot(record)
    drawn = figure._repr_svg_()
    assert drawn.lstrip().startswith("<?xml") and "<svg" in drawn
    assert levelnet.plot(record, names[-1]).axes
    with pytest.raises(InputError, match=f'figure "other": of this result there are {names[0]}'):
        levelnet.plot(record, "other")


def test_plot_refuses_what_is_no_result() -> None:
    with pytest.raises(InputError, match="nothing is drawn of a SimpleNamespace"):
        levelnet.plot(SimpleNamespace())


def test_everything_that_takes_long_tells_its_progress() -> None:
    for name in ("solve", "weigh", "distill", "level_study", "escape_study"):
        assert "progress" in inspect.signature(getattr(levelnet, name)).parameters, name
    said: list[tuple[str, float]] = []
    levelnet.solve(small_setup(4), progress=lambda stage, fraction: said.append((stage, fraction)))
    assert said and all(stage and 0.0 <= fraction <= 1.0 for stage, fraction in said)


@lru_cache(maxsize=3)
def run_example(name: str) -> dict[str, Any]:
    """Run an example as it stands; give its names."""
    return runpy.run_path(str(EXAMPLES / f"{name}.py"))


def test_examples_are_all_run_here_and_marked_invented() -> None:
    names = {path.stem for path in EXAMPLES.glob("*.py")} - {"__init__"}
    assert names == {"how_many_levels", "table_and_history", "which_lines"}
    for name in names:
        text = (EXAMPLES / f"{name}.py").read_text(encoding="utf-8")
        assert "INVENTED" in text and text.startswith("# %%")


def test_example_of_levels(capsys: pytest.CaptureFixture[str]) -> None:
    made = run_example("how_many_levels")
    assert "for 0.1 % in x_e at 200 < z < 1600: " in capsys.readouterr().out
    assert made["study"].outcome.ok and made["stages"] and made["figure"].axes


@pytest.mark.slow
def test_example_of_a_table_and_its_histories(capsys: pytest.CaptureFixture[str]) -> None:
    made = run_example("table_and_history")
    assert "z_* = 10" in capsys.readouterr().out
    assert made["fast"].outcome.ok
    assert made["table"].certificate.largest_rate_error < 1e-5


@pytest.mark.slow
def test_example_of_lines(capsys: pytest.CaptureFixture[str]) -> None:
    made = run_example("which_lines")
    assert "Sobolev errs by at most" in capsys.readouterr().out
    assert made["study"].outcome.ok
