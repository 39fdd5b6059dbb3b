"""Figures of a table: they show the table's numbers, and the same bytes each time."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest

from levelnet.errors import InputError
from levelnet.report.rates import certificate_figure, rate_figure, save_table_figures
from tests.small_tables import small_table
from tests.unit.test_store_table import invented_certificate


def test_curves_are_the_rates_of_the_table() -> None:
    table = small_table()
    figure = rate_figure(table)
    for level in (0, 1):
        axes = figure.axes[level]
        labels = [line.get_label() for line in axes.lines]
        assert labels == [f"$T_m/T_r$ = {r:g}" for r in (0.01, 0.1, 0.5, 1.0, 2.0, 4.0)]
        for line, ratio in zip(axes.lines, (0.01, 0.1, 0.5, 1.0, 2.0, 4.0), strict=True):
            kelvin, values = line.get_data()
            assert np.all(kelvin * ratio <= np.maximum(8000.0, kelvin))
            rates = table.effective_rates(kelvin, kelvin * ratio)
            assert values == pytest.approx(rates.recombination[:, level], rel=1e-12)
    kelvin, values = figure.axes[2].lines[0].get_data()
    logs = table.effective_rates(kelvin, kelvin).log_photoionization[:, 0]
    assert np.log(values) == pytest.approx(logs + table.saha.ionization_k[0] / kelvin, abs=1e-9)


def test_errors_are_those_of_the_certificate() -> None:
    proof = invented_certificate(small_table())
    left, right = certificate_figure(proof, 1e-8).axes
    assert list(left.lines[0].get_xdata()) == list(proof.largest_error)
    assert [text.get_text() for text in left.get_yticklabels()] == list(proof.rate_names)
    assert list(right.lines[0].get_ydata()) == list(np.abs(proof.history_error[0]))
    assert right.lines[1].get_label() == "far cosmology 1 (no history)"


def test_files_are_whole_and_the_same_each_time(tmp_path: Path) -> None:
    table = dataclasses.replace(small_table(), certificate=invented_certificate(small_table()))
    paths = save_table_figures(table, tmp_path / "a")
    assert [path.name for path in paths] == [
        "rates.svg",
        "rates.pdf",
        "certificate.svg",
        "certificate.pdf",
    ]
    again = save_table_figures(table, tmp_path / "b")
    for one, other in zip(paths, again, strict=True):
        assert one.read_bytes() == other.read_bytes()
    with pytest.raises(InputError, match="exists already"):
        save_table_figures(table, tmp_path / "a")
