"""A table of effective rates as source code or plain text for other languages.

Each export is text alone, made here without touching a disk; :mod:`levelnet.store` writes it.
"""

from __future__ import annotations

import re
import textwrap
from collections.abc import Callable

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..background.matter import compton_rate_per_s
from ..errors import InputError
from ..history.atom import open_lyman_lines, resonance_lines
from ..history.setup import Setup
from .about import about_lines, level_names, pair_names
from .code_text import (
    coefficient_values,
    data_statement,
    fill,
    fortran_number,
    in_braces,
    number,
    series_statements,
    wrapped,
)
from .effective import NEVER
from .grid_text import grid_text
from .helium_code import helium_c, helium_fortran
from .helium_text import helium_endings, helium_texts
from .kept import check_without_field
from .series import COLLISIONS_K
from .stimulation import stimulation_c, stimulation_fortran, stimulation_polynomials
from .table import EffectiveTable

LANGUAGES = ("c99", "fortran", "csv")
ENDINGS = {"c99": (".h", ".c"), "fortran": (".f90",), "csv": (".csv",)}
"""Endings of the files of each export, those of helium as text left out."""

# A name in Fortran has at most 63 characters (ISO 1539-1:2018, 6.2.2); "_module" is added.
_LONGEST_PREFIX = 40


def exported_texts(table: EffectiveTable, language: str, name: str) -> dict[str, str]:
    """Return the files of one export.

    Parameters
    ----------
    table : EffectiveTable
        What to export.
    language : "c99", "fortran" or "csv"
        C99 source and header, a Fortran module, or a plain table of logarithms; helium, if the
        table has its levels, is in the same code, or in tables of its own.
    name : str
        Name of the files without ending. In code it is the prefix of all global names: at most 40
        letters, digits and underscores, the first a letter.

    Returns
    -------
    dict of str to str
        Text by name of file, ASCII. The same table gives the same text.

    Raises
    ------
    InputError
        If the language is not known or the name cannot be one in it; for csv also if the table has
        levels of helium and changed constants.
    """
    if language not in LANGUAGES:
        raise InputError(f'export = "{language}": allowed are {", ".join(LANGUAGES)}')
    if language == "csv":
        _check_measured_helium(table.setup)
        texts = {".csv": grid_text(table)} | helium_texts(table)
        return {f"{name}{end}": text for end, text in texts.items()}
    check_without_field(table.setup.lines)
    if not re.fullmatch(r"[A-Za-z][A-Za-z0-9_]*", name) or len(name) > _LONGEST_PREFIX:
        raise InputError(
            f'name = "{name}": names in the code start with it, so at most {_LONGEST_PREFIX} '
            "letters, digits and underscores are allowed, the first a letter"
        )
    # In code, changed constants are an argument; the table itself is the measured atom.
    measured = table.with_constants()
    blanks = _blanks_c(measured, name) if language == "c99" else _blanks_fortran(measured, name)
    start = " * " if language == "c99" else "! "
    blanks["about"] = "\n".join(f"{start}{line}".rstrip() for line in about_lines(table, "passed"))
    for key in ("level_names", "pair_names", "line_names"):
        # Many names take several lines, each a comment of its own.
        blanks[key] = f"\n{start}    ".join(textwrap.wrap(blanks[key], 55))
    return {f"{name}{end}": fill(f"source{end}", blanks) for end in ENDINGS[language]}


def _check_measured_helium(setup: Setup) -> None:
    """Text would mix atoms: escape from the lines of helium is tabulated for measured constants."""
    changes = setup.physics.fine_structure_change, setup.physics.electron_mass_change
    if setup.helium_recombines and any(changes):
        raise InputError(
            f'export = "csv": with changed constants ([physics] {changes[0]:g}, {changes[1]:g}) '
            "helium has no text, because its lines hold the measured ones; allowed are 0, 0 "
            "(with_constants() gives that table), or c99 and fortran, whose helium is measured"
        )


def endings(language: str, setup: Setup) -> tuple[str, ...]:
    """Endings of the files of one export of a table of this setup; InputError if it is refused."""
    if language != "csv":
        return ENDINGS[language]
    _check_measured_helium(setup)
    return (*ENDINGS[language], *helium_endings(setup))


def _shared(table: EffectiveTable, name: str, show: Callable[[float], str]) -> dict[str, str]:
    """Blanks that both languages fill in the same way."""
    kept = table.kept
    lines = resonance_lines(kept, open_lyman_lines(table.setup))
    treatment = table.setup.lines
    return {
        "prefix": name,
        "PREFIX": name.upper(),
        "n_kept": str(len(kept)),
        "n_pairs": str(len(table.lower)),
        "n_lines": str(len(lines.names)),
        "cells_x": str(table.departure.shape[0]),
        "cells_y": str(table.departure.shape[1]),
        "level_names": ", ".join(level_names(kept)),
        "pair_names": ", ".join(pair_names(table)),
        "line_names": ", ".join((*lines.names, "2s-1s (two photons)")),
        "low_k": f"{np.exp(table.log_low):g}",
        "high_k": f"{np.exp(table.log_high):g}",
        "ratio_low": f"{np.exp(table.ratio_low):g}",
        "ratio_high": f"{np.exp(table.ratio_high):g}",
        "hottest_k": f"{COLLISIONS_K:g}",
        "x_low": show(table.log_low),
        "x_high": show(table.log_high),
        "y_low": show(table.ratio_low),
        "y_high": show(table.ratio_high),
        "hottest": show(COLLISIONS_K),
        "never": show(NEVER + 1.0),
        "two_photon_rate": show(table.setup.two_photon_rate_per_s),
        # Its helium and electron part is 1/2 at these arguments.
        "compton": show(2.0 * float(compton_rate_per_s(1.0, 1.0, 0.0))),
        "mass_ratio": show(const.ELECTRON_PROTON_MASS_RATIO),
        "line_rule": LINE_RULES[treatment.hydrogen],
        "two_photon_rule": TWO_PHOTON_RULES[treatment.two_photon],
    }


LINE_RULES = {
    "sobolev": "each alone, P = (1 - exp(-tau))/tau (Sobolev)",
    "open": "optically thin, every photon escapes",
    "closed": "closed, no photon escapes",
}
TWO_PHOTON_RULES = {
    "spontaneous": "spontaneous decay and its inverse",
    "stimulated": "decay stimulated by the blackbody, and its inverse",
}


def _vectors(table: EffectiveTable) -> dict[str, FloatArray]:
    """Short arrays of numbers, by the name of their blank."""
    kept = table.kept
    saha = table.saha
    lines = resonance_lines(kept, open_lyman_lines(table.setup))
    return {
        "weight": kept.statistical_weight / 2.0,
        "energy_k": kept.energy_ev / const.BOLTZMANN_EV_K,
        "ionization_k": saha.ionization_k,
        "saha_offset": saha.offset,
        "barrier_k": table.barrier_k,
        "rise_k": table.rise_k,
        "log_weight_ratio": table.log_weight_ratio,
        "line_a": lines.einstein_a_per_s,
        "line_energy_k": lines.energy_ev / const.BOLTZMANN_EV_K,
        "line_wavelength_cm": lines.wavelength_cm,
        "line_weight_ratio": lines.weight_ratio,
    }


def _positions(table: EffectiveTable, first: int) -> dict[str, list[str]]:
    """Positions of levels, counted from `first`, by the name of their blank."""
    lines = resonance_lines(table.kept, open_lyman_lines(table.setup))
    arrays = {"lower": table.lower, "upper": table.upper, "line_upper": lines.upper}
    return {name: [str(k + first) for k in array.tolist()] for name, array in arrays.items()}


def _stimulation(table: EffectiveTable) -> FloatArray:
    """Polynomials of stimulated 2s-1s decay, shape (n_x, 12); none, (0, 12), if not stimulated."""
    if table.setup.lines.two_photon != "stimulated":
        return np.empty((0, 12))
    ends = table.log_low, table.log_high
    gap_ev = float(table.kept.energy_ev[0])
    return coefficient_values(stimulation_polynomials(*ends, table.departure.shape[0], gap_ev))


def _blanks_c(table: EffectiveTable, name: str) -> dict[str, str]:
    blanks = _shared(table, name, number)
    blanks["terms"] = str(table.departure.shape[-1])
    for key, values in _vectors(table).items():
        blanks[key] = in_braces(map(number, values))
    for key, texts in _positions(table, 0).items():
        blanks[key] = in_braces(texts)
    for key in ("equilibrium", "exchange", "departure"):
        values = coefficient_values(getattr(table, key)).ravel()
        blanks[key] = wrapped(map(number, values), "    ")
    blanks["escape"] = {
        "sobolev": "    return depth > 1e-8 ? -expm1(-depth) / depth : 1.0 - 0.5 * depth;",
        "open": "    (void)depth;\n    return 1.0;",
        "closed": "    (void)depth;\n    return 0.0;",
    }[table.setup.lines.hydrogen]
    terms = _stimulation(table)
    blanks |= helium_c(table, name)
    return blanks | stimulation_c(wrapped(map(number, terms.ravel()), "    "))


def _blanks_fortran(table: EffectiveTable, name: str) -> dict[str, str]:
    blanks = _shared(table, name, fortran_number)
    blanks["top"] = str(table.departure.shape[-1] - 1)
    for key, values in _vectors(table).items():
        blanks[key] = wrapped(map(fortran_number, values), "    ", ", &")
    for key, texts in _positions(table, 1).items():
        blanks[key] = wrapped(texts, "    ", ", &")
    blanks["data"] = "\n".join(series_statements(table, ""))
    blanks["escape"] = {
        "sobolev": (
            "    escape_probability = 1.0_dp - 0.5_dp * depth\n"
            "    if (depth > 1.0e-8_dp) escape_probability = -exp_less_one(-depth) / depth"
        ),
        "open": "    escape_probability = 1.0_dp + 0.0_dp * depth",
        "closed": "    escape_probability = 0.0_dp * depth",
    }[table.setup.lines.hydrogen]
    terms = _stimulation(table)
    statements = [
        data_statement(f"stimulation_terms(:, {k + 1})", one) for k, one in enumerate(terms)
    ]
    blanks |= helium_fortran(table, name)
    return blanks | stimulation_fortran("\n".join(statements))
