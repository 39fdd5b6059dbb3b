"""Helium of a table as parts of exported source code: what fills the blanks of its templates."""

from __future__ import annotations

import textwrap
from collections.abc import Callable, Iterable, Iterator

import numpy as np

from ..arrays import FloatArray
from ..history.helium import COLDEST_K, EBB, FADING, GONE, PULL
from ..kernels.effective import Atom
from ..kernels.effective_helium import HeliumLines
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
from .helium_escape import LineTable
from .helium_text import DECIMALS, stage_names
from .plasma import packed
from .stage import StageTable
from .table import EffectiveTable

_ESCAPE_RULES = {
    True: "tabulated, hydrogen absorbs inside the lines",
    False: "each alone, P = (1 - exp(-tau))/tau (Sobolev)",
}
_FEEDBACK_RULES = {
    True: ", of which hydrogen absorbs a part on the way",
    False: ", which nothing absorbs on the way",
}
_ION_RULES = {
    True: "by the levels of He II, and where it is below e^-50 of it in Saha equilibrium",
    False: "pulled to Saha equilibrium with He II at 1e9 expansion rates",
}
# Nodes of ln(n_HI/H) in one data statement.
_ROWS = 30


def helium_c(table: EffectiveTable, name: str) -> dict[str, str]:
    """Blanks of the C source and header that hold helium; empty texts if it has no levels."""
    if table.helium is None:
        return {"helium_header": "", "helium_source": ""}
    blanks = _shared(table, name, number, in_braces, 0)
    blanks["line_names"] = _on_lines(blanks["line_names"], "     ")
    stages = [_stage_c(*one, name) for one in _stages(table)]
    blanks["stages"] = "".join(fill("stage.h", one) for one in stages)
    header = fill("helium.h", blanks)
    blanks["stages"] = "".join(fill("stage.c", one) for one in stages)
    blanks["second"] = fill("no_second.c" if table.helium_ion is None else "second.c", blanks)
    lines = table.helium_lines
    assert lines is not None
    if lines.absorbs:
        blanks["escape_values"] = wrapped(_escape_texts(lines, number), "    ")
    blanks["gains"] = fill("gains.c" if lines.absorbs else "no_gains.c", blanks)
    return {"helium_header": header + "\n", "helium_source": fill("helium.c", blanks)}


def helium_fortran(table: EffectiveTable, name: str) -> dict[str, str]:
    """Blanks of the Fortran module that hold helium; empty texts if it has no levels."""
    lines = table.helium_lines
    if table.helium is None or lines is None:
        return {"helium_data": "", "helium_code": ""}
    blanks = _shared(table, name, fortran_number, _in_brackets, 1)
    blanks["line_names"] = _on_lines(blanks["line_names"], "  !   ")
    stages = [_stage_fortran(*one, name) for one in _stages(table)]
    blanks["stages"] = "".join(fill("stage_data.f90", one) for one in stages)
    data = fill("helium_data.f90", blanks)
    blanks["stages"] = "".join(fill("stage_code.f90", one) for one in stages)
    blanks["second"] = fill("no_second.f90" if table.helium_ion is None else "second.f90", blanks)
    blanks["gains"] = fill("gains.f90" if lines.absorbs else "no_gains.f90", blanks)
    blanks["absorb"] = fill("absorb.f90", blanks) if lines.absorbs else ""
    if lines.absorbs:
        blanks["escape_data"] = "\n".join(_escape_statements(lines))
        data += fill("gains_data.f90", blanks)
    return {"helium_data": data.rstrip(), "helium_code": fill("helium_code.f90", blanks)}


def _stages(table: EffectiveTable) -> list[tuple[str, StageTable, Atom, list[str]]]:
    """Ion, table, the same packed, and names of its kept levels."""
    stage, ion = table.helium, table.helium_ion
    assert stage is not None
    first, second, _, _ = packed(table)
    found = [("he1", stage, first, stage_names(stage, 1))]
    if ion is not None:
        found.append(("he2", ion, second, stage_names(ion, 2)))
    return found


def _stage_words(ion: str, stage: StageTable, names: list[str], prefix: str) -> dict[str, str]:
    """Names, sizes and ranges of one ion."""
    pairs = zip(stage.lower.tolist(), stage.upper.tolist(), strict=True)
    texts = {
        "level_names": ", ".join(names),
        "pair_names": ", ".join(f"{names[i]}-{names[j]}" for i, j in pairs),
    }
    counts = stage.departure.shape
    return {
        "prefix": prefix,
        "PREFIX": prefix.upper(),
        "ion": ion,
        "ION": ion.upper(),
        "species": {"he1": "He I", "he2": "He II"}[ion],
        "n_kept": str(len(names)),
        "n_pairs": str(len(stage.lower)),
        "cells_x": str(counts[0]),
        "cells_y": str(counts[1]),
        "terms": str(counts[-1]),
        "low_k": f"{np.exp(stage.log_low):g}",
        "high_k": f"{np.exp(stage.log_high):g}",
        "ratio_low": f"{np.exp(stage.ratio_low):g}",
        "ratio_high": f"{np.exp(stage.ratio_high):g}",
        **texts,
    }


def _stage_numbers(atom: Atom) -> dict[str, FloatArray]:
    """Short arrays of one ion, by the names of their blanks."""
    barrier, rise, ratio = atom.pair
    weight, energy, offset, ionization = atom.level
    return {
        "barrier_k": barrier,
        "rise_k": rise,
        "log_weight_ratio": ratio,
        "log_weight": weight,
        "energy_k": energy,
        "saha_offset": offset,
        "ionization_k": ionization,
    }


def _stage_c(
    ion: str, stage: StageTable, atom: Atom, names: list[str], prefix: str
) -> dict[str, str]:
    blanks = _stage_words(ion, stage, names, prefix)
    for key in ("level_names", "pair_names"):
        blanks[key] = _on_lines(blanks[key], "     ")
    for key, end in (("x_low", 0), ("x_high", 1), ("y_low", 2), ("y_high", 3)):
        blanks[key] = number(atom.span[end])
    for key, values in _stage_numbers(atom).items():
        blanks[key] = in_braces(map(number, values))
    for key in ("lower", "upper"):
        blanks[key] = in_braces(map(str, getattr(stage, key).tolist()))
    for key in ("equilibrium", "exchange", "departure"):
        blanks[key] = wrapped(map(number, coefficient_values(getattr(stage, key)).ravel()), "    ")
    return blanks


def _stage_fortran(
    ion: str, stage: StageTable, atom: Atom, names: list[str], prefix: str
) -> dict[str, str]:
    blanks = _stage_words(ion, stage, names, prefix)
    for key in ("level_names", "pair_names"):
        blanks[key] = _on_lines(blanks[key], "  !   ")
    for key, values in (("span", atom.span), ("pair", atom.pair), ("level", atom.level)):
        blanks[key] = _in_brackets(map(fortran_number, values.ravel()))
    for key in ("lower", "upper"):
        blanks[key] = _in_brackets(str(k + 1) for k in getattr(stage, key).tolist())
    blanks["top"] = str(stage.departure.shape[-1] - 1)
    blanks["data"] = "\n".join(series_statements(stage, f"{ion}_"))
    return blanks


def _on_lines(names: str, start: str) -> str:
    """Many names in a comment take several lines; `start` begins all but the first."""
    return f"\n{start}".join(textwrap.wrap(names, 55))


def _in_brackets(items: Iterable[str]) -> str:
    """Items of a constant array of Fortran, on lines of their own."""
    return wrapped(items, "    ", ", &")


def _shared(
    table: EffectiveTable,
    name: str,
    show: Callable[[float], str],
    join: Callable[[Iterable[str]], str],
    first: int,
) -> dict[str, str]:
    """Blanks that both languages fill in the same way; positions are counted from `first`."""
    stage, lines = table.helium, table.helium_lines
    assert stage is not None and lines is not None
    stages = [stage] if table.helium_ion is None else [stage, table.helium_ion]
    lit_by = [k + first if k >= 0 else first - 1 for k in lines.lit_by.tolist()]
    said = {
        "prefix": name,
        "PREFIX": name.upper(),
        "n_lines": str(len(lines.names)),
        "line_names": ", ".join(lines.names),
        "decay_name": stage_names(stage, 1)[lines.decay],
        "escape_rule": _ESCAPE_RULES[bool(lines.absorbs)],
        "feedback_rule": _FEEDBACK_RULES[bool(lines.absorbs)],
        "ion_rule": _ION_RULES[table.helium_ion is not None],
        "most_kept": str(max(len(one.n) for one in stages)),
        "most_pairs": str(max(len(one.lower) for one in stages)),
        "coldest_k": f"{COLDEST_K:g}",
        "absorbs": str(lines.absorbs),
        "decay": str(lines.decay + first),
        "line_upper": join(str(k + first) for k in lines.upper.tolist()),
        "lit_by": join(map(str, lit_by)),
    }
    if table.helium_ion is not None:
        said["ion_line_upper"] = str(int(packed(table)[1].line_upper[0]) + first)
    numbers = {key: show(one) for key, one in _numbers(table, lines).items()}
    return said | numbers | _lines(lines, packed(table)[2], show, join)


def _numbers(table: EffectiveTable, lines: LineTable) -> dict[str, float]:
    """Single numbers, by the names of their blanks."""
    _, second, _, saha = packed(table)
    numbers = {
        "decay_rate": lines.decay_rate_per_s,
        "saha_double": float(saha[2, 0]),
        "reach_double": float(saha[2, 1]),
        "pull": PULL,
        "gone": GONE,
        "fading": FADING,
        "coldest": COLDEST_K,
        "ebb": EBB,
    }
    if table.helium_ion is None:
        return numbers
    rate, depth, energy = second.line[:, 0].tolist()
    return numbers | {
        "ion_decay_rate": float(second.constants[0]),
        "ion_line_a": rate,
        "ion_line_depth": depth,
        "ion_line_energy_k": energy,
    }


def _lines(
    lines: LineTable,
    constants: HeliumLines,
    show: Callable[[float], str],
    join: Callable[[Iterable[str]], str],
) -> dict[str, str]:
    """Constants of the lines of He I, and of the grid of their escape."""
    rate, depth, energy, _, continuum = constants.line
    arrays = {
        "line_a": rate,
        "line_depth": depth,
        "line_energy_k": energy,
        "line_continuum": continuum,
        "delay": np.where(lines.lit_by >= 0, lines.delay, 0.0),
        "escape_low": lines.axis[:, 0],
        "escape_step": lines.axis[:, 1],
    }
    counts = {f"escape_{k}": str(lines.escape.shape[k]) for k in (1, 2, 3)}
    return {key: join(map(show, values)) for key, values in arrays.items()} | counts


def _escape_statements(lines: LineTable) -> Iterator[str]:
    """Data of the escape in Fortran, statements of fewer than 255 lines each."""
    values = np.round(lines.escape, DECIMALS) + 0.0
    for k, line in enumerate(values, 1):
        for i, column in enumerate(line, 1):
            for j in range(0, len(column), _ROWS):
                part = column[j : j + _ROWS]
                place = f":, {j + 1}:{j + len(part)}, {i}, {k}"
                yield data_statement(f"escape_gain({place})", part.ravel())


def _escape_texts(lines: LineTable, show: Callable[[float], str]) -> Iterator[str]:
    """Coefficients of the escape, axis by axis."""
    return map(show, (np.round(lines.escape, DECIMALS) + 0.0).ravel())
