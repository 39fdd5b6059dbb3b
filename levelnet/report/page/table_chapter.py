"""The chapter of a table of effective rates and its certificate."""

from __future__ import annotations

import math
from functools import partial

import numpy as np

from ...distilled.about import level_names
from ...distilled.certificate import Certificate
from ...distilled.table import EffectiveTable
from ..rates import certificate_figure, rate_figure
from .content import Block, Chapter, Facts, Origin, Picture, Section, Table
from .drawing import picture
from .helium_parts import table_facts
from .wording import asked_section, one_line, origin_section, trust_section

_SAMPLES_K = (9000.0, 6000.0, 4000.0, 3000.0, 2000.0, 1000.0, 300.0, 100.0, 30.0)
_LEVELS = 3  # whose rates are listed
_UNMEASURED = "no certificate: the errors of this table were not measured"


def table_chapter(table: EffectiveTable, origin: Origin, prefix: str) -> Chapter:
    """Everything a page says of a table of effective rates.

    Parameters
    ----------
    table : EffectiveTable
        With or without a certificate.
    origin : Origin
        Its file.
    prefix : str
        Of every name in the chapter.
    """
    setup, proof = table.setup, table.certificate
    asked = (
        ("levels kept", ", ".join(level_names(table.kept))),
        ("tolerance", f"{table.tolerance:g} in the logarithm of each rate"),
    )
    notes = [
        "the table refuses temperatures outside its range; it never extrapolates",
        "errors are those of the table against the same network, not those of the physics left out",
    ]
    if proof is None:
        notes.insert(0, f"warning: {_UNMEASURED}")
    return Chapter(
        name=prefix,
        title=one_line(setup.title),
        what="Table of effective rates"
        + (" without a certificate" if proof is None else " with a certificate of its errors"),
        file=origin.name,
        ok=None,
        outcome=_UNMEASURED if proof is None else _measured(proof),
        answers=() if proof is None else (_answer(proof),),
        sections=(
            asked_section(prefix, setup, asked),
            Section(f"{prefix}-found", "What came out", _found(table)),
            Section(f"{prefix}-figures", "Figures", _pictures(table, prefix)),
            trust_section(prefix, () if proof is None else _errors(proof), tuple(notes)),
            origin_section(prefix, origin),
        ),
    )


def _measured(proof: Certificate) -> str:
    return (
        f"errors at {proof.n_points} random points off the nodes (seed {proof.seed}), and of whole "
        f"histories of {len(proof.cosmologies)} cosmologies"
    )


def _answer(proof: Certificate) -> str:
    worst = int(np.argmax(proof.largest_error))
    text = (
        f"Every rate is right to {proof.largest_error[worst]:.1e} (largest error: "
        f"{proof.rate_names[worst]})"
    )
    errors = proof.largest_history_error
    known = errors[np.isfinite(errors)]
    return text + (f", and x_e(z) to {known.max():.1e}." if len(known) else ".")


def _found(table: EffectiveTable) -> tuple[Block, ...]:
    low, high = table.radiation_range_k
    n_x, n_y = table.departure.shape[:2]
    facts = Facts(
        (
            ("radiation temperature", f"{low:g} to {high:g} K"),
            (
                "matter over radiation temperature",
                f"{math.exp(table.ratio_low):g} to {math.exp(table.ratio_high):g}",
            ),
            ("cells", f"{n_x} in ln T_r times {n_y} in ln(T_m/T_r)"),
            *table_facts(table),
        )
    )
    kelvin = np.array([t for t in _SAMPLES_K if low <= t <= high] or [high])
    rates = table.effective_rates(kelvin, kelvin)
    names = level_names(table.kept)[:_LEVELS]
    numbers = np.hstack(
        [rates.log_recombination[:, : len(names)], rates.log_photoionization[:, : len(names)]]
    ) / math.log(10.0)
    head = ("T_r = T_m (K)", *(f"A({one})" for one in names), *(f"B({one})" for one in names))
    rows = tuple(
        (f"{t:g}", *(f"{value:.4f}" for value in line))
        for t, line in zip(kelvin.tolist(), numbers, strict=True)
    )
    caption = (
        "Decadic logarithms of recombination A in cm^3 s^-1 and photoionization B in s^-1 where "
        "matter is as hot as radiation"
    )
    return facts, Table(caption, head, rows)


def _pictures(table: EffectiveTable, prefix: str) -> tuple[Picture, ...]:
    names = level_names(table.kept)
    low, high = table.radiation_range_k
    pictures = [
        picture(
            partial(rate_figure, table),
            f"{prefix}-rates",
            "Effective rates",
            "Effective recombination and exchange rates against the radiation temperature, "
            f"{low:g} to {high:g} K, for several ratios of matter to radiation temperature; "
            f"levels kept: {', '.join(names)}. The table above has values.",
        )
    ]
    proof = table.certificate
    if proof is not None:
        pictures.append(
            picture(
                partial(certificate_figure, proof, table.tolerance),
                f"{prefix}-certificate",
                "Measured errors",
                f"Errors of the rates at {proof.n_points} random points, and of x_e(z) against the "
                f"full network. The largest of a rate is {proof.largest_rate_error:.1e}, asked "
                f"were {table.tolerance:.0e}.",
            )
        )
    return tuple(pictures)


def _errors(proof: Certificate) -> tuple[Block, ...]:
    rates = tuple(
        (name, f"{largest:.2e}", f"{rms:.2e}")
        for name, largest, rms in zip(
            proof.rate_names, proof.largest_error, proof.rms_error, strict=True
        )
    )
    histories = tuple(
        (name, f"{error:.2e}" if math.isfinite(error) else "not known")
        for name, error in zip(proof.cosmologies, proof.largest_history_error, strict=True)
    )
    return (
        Table("Errors of the logarithms of the rates", ("rate", "largest", "rms"), rates),
        Table(
            "Largest relative error of x_e(z) against the full network",
            ("cosmology", "error"),
            histories,
        ),
    )
