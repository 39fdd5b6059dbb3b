"""The chapter of a weighing: which rates the answer hangs on, and the error they leave in it."""

from __future__ import annotations

from ...studies.budget_record import ErrorBudget
from ...studies.groups import by_level, top_transitions
from ...studies.weighing import Weighing
from ..weights import PROCESSES, file_names, weighing_makers
from .content import Block, Chapter, Facts, Origin, Picture, Section, Table
from .drawing import picture
from .helium_parts import helium_ranking_said, weighing_tables
from .wording import (
    SPOKEN,
    asked_section,
    largest_said,
    number,
    one_line,
    origin_section,
    short_name,
    trust_section,
    unit_text,
)

_TOP = 10
_SMALLEST = 1e-3  # part of the whole error below which a group is not listed


def weighing_chapter(weighing: Weighing, origin: Origin, prefix: str) -> Chapter:
    """Everything a page says of a weighing.

    Parameters
    ----------
    weighing : Weighing
        Any, with or without a budget.
    origin : Origin
        Its file.
    prefix : str
        Of every name in the chapter.
    """
    asked = (
        ("weighed", ", ".join(weighing.targets)),
        ("rates", f"{len(weighing.upper)} dipole transitions, {len(weighing.levels)} levels"),
    )
    notes = (
        "numbers are d ln J / d ln R for each target J and rate R, all other rates held: first "
        "derivatives, good for small changes",
        *weighing.notes,
    )
    return Chapter(
        name=prefix,
        title=one_line(weighing.setup.title),
        what="Weighing: derivatives by the logarithm of every rate",
        file=origin.name,
        ok=weighing.outcome.ok,
        outcome=weighing.outcome.value,
        answers=tuple(_answer(weighing, target) for target in weighing.targets),
        sections=(
            asked_section(prefix, weighing.setup, asked),
            Section(f"{prefix}-found", "What came out", _found(weighing)),
            Section(f"{prefix}-figures", "Figures", _pictures(weighing, prefix)),
            trust_section(prefix, _budget(weighing), notes),
            origin_section(prefix, origin),
        ),
    )


def _value(weighing: Weighing, target: str) -> str:
    at = weighing.index(target)
    return number(float(weighing.value[at]), ".7g", unit_text(weighing.units[at]))


def _answer(weighing: Weighing, target: str) -> str:
    weights = weighing.processes(target)
    first = max(weights, key=lambda name: abs(weights[name]))
    text = f"{short_name(target)} = {_value(weighing, target)}"
    if weighing.budget is not None:
        sigma = float(weighing.budget.sigma[weighing.budget.targets.index(target)])
        text += f", with {100.0 * sigma:.2g} % (1 sigma) left by uncertain rates"
    return f"{text}; it hangs most on {first} (d ln J / d ln R = {weights[first]:+.3g})."


def _found(weighing: Weighing) -> tuple[Block, ...]:
    targets = weighing.targets
    heads = [short_name(target) for target in targets]
    values = Facts(tuple((target, _value(weighing, target)) for target in targets))
    columns = [weighing.processes(target) for target in targets]
    processes = tuple((name, *(f"{one[name]:+.4g}" for one in columns)) for name in columns[0])
    parameters = tuple(
        (name, *(f"{weighing.parameter[weighing.index(one), k]:+.4g}" for one in targets))
        for k, name in enumerate(weighing.parameters)
    )
    blocks: list[Block] = [
        values,
        Table("By a common factor on each process", ("process", *heads), processes),
    ]
    if parameters:
        caption = "By each parameter of the cosmology"
        blocks.append(Table(caption, ("parameter", *heads), parameters))
    ranked = (_ranked(weighing, target) for target in targets)
    return (*blocks, *ranked, *weighing_tables(weighing))


def _ranked(weighing: Weighing, target: str) -> Table:
    """Largest transitions and cross sections of one target side by side."""
    lines = [(one.name, one.weight) for one in top_transitions(weighing, target, _TOP)]
    levels = by_level(weighing, target)
    order = sorted(range(len(levels.names)), key=lambda k: -abs(levels.bound_free[k]))[:_TOP]
    sections = [(levels.names[k], float(levels.bound_free[k])) for k in order]
    count = min(_TOP, max(len(lines), len(sections)))
    rows = tuple((str(k + 1), *_cells(lines, k), *_cells(sections, k)) for k in range(count))
    head = ("rank", "transition", "weight", "cross section of", "weight of it")
    return Table(f"The largest for {target}", head, rows)


def _cells(ranked: list[tuple[str, float]], k: int) -> tuple[str, str]:
    return (ranked[k][0], f"{ranked[k][1]:+.4g}") if k < len(ranked) else ("", "")


def _pictures(weighing: Weighing, prefix: str) -> tuple[Picture, ...]:
    said = {"error-band": _band_said(weighing.budget)}
    for target, name in zip(weighing.targets, file_names(weighing.targets), strict=True):
        best = top_transitions(weighing, target, 1)
        largest = f" The largest is that of {best[0].name}, {best[0].weight:+.3g}." if best else ""
        said[f"map-{name}"] = (
            f"Where the weights of {target} lie",
            "Derivatives by cross sections and by transitions out of each level over n and l, and "
            f"by transitions between pairs of shells, as maps with both signs.{largest}",
        )
        said[f"ranking-{name}"] = (
            f"Ranking for {target}",
            "Bars of the largest derivatives: processes and parameters, dipole transitions, cross "
            "sections and, where there is a budget, contributions to the error. "
            f"{_ranking_said(weighing, target)}",
        )
        if weighing.helium is not None:
            said[f"helium-{name}"] = (
                f"Rates of helium for {target}",
                "Bars of the largest derivatives by rates of helium: lines to the ground state "
                "with the continuum and He II, groups of He I, dipole transitions and cross "
                f"sections of terms. {helium_ranking_said(weighing, target)}",
            )
    return tuple(
        picture(make, f"{prefix}-{key.replace('.', '-').replace('_', '-')}", *said[key])
        for key, make in weighing_makers(weighing).items()
    )


def _ranking_said(weighing: Weighing, target: str) -> str:
    """The largest of each panel in numbers."""
    levels = by_level(weighing, target)
    sections = zip(levels.names, levels.bound_free.tolist(), strict=True)
    lines = top_transitions(weighing, target, SPOKEN)
    at, own = weighing.index(target), weighing.processes(target)
    parameters = zip(weighing.parameters, weighing.parameter[at].tolist(), strict=True)
    parts = [
        largest_said("processes", ((text, own[name]) for name, text in PROCESSES.items())),
        largest_said("parameters", parameters),
        largest_said("transitions", ((one.name, one.weight) for one in lines)),
        largest_said("cross sections", sections),
    ]
    budget = weighing.budget
    if budget is not None and target in budget.targets:
        ranked = ((one.group, one.contribution) for one in budget.ranked(target))
        parts.append(largest_said("contributions", ranked))
    return " ".join(one for one in parts if one)


def _band_said(budget: ErrorBudget | None) -> tuple[str, str]:
    if budget is None or not len(budget.band().redshift):
        return "", ""
    band = budget.band()
    worst = int(band.sigma.argmax())
    return (
        "Error of x_e(z)",
        "Relative 1-sigma error of x_e against redshift, and the groups of rates it comes from. "
        f"It is largest at z = {band.redshift[worst]:.0f}, {100.0 * band.sigma[worst]:.2g} %.",
    )


def _budget(weighing: Weighing) -> tuple[Block, ...]:
    budget = weighing.budget
    if budget is None:
        return ()
    targets = weighing.targets
    sigma = {one: float(budget.sigma[budget.targets.index(one)]) for one in targets}
    ranked = {one: {part.group: part for part in budget.ranked(one)} for one in targets}
    listed = [
        group
        for group in ranked[targets[0]]
        if any(abs(ranked[one][group].contribution) > _SMALLEST * sigma[one] for one in targets)
    ]
    rows = [("all", *(f"{100.0 * sigma[one]:.3g} %" for one in targets))]
    rows += [
        (group, *(f"{100.0 * ranked[one][group].contribution:+.3g} %" for one in targets))
        for group in listed
    ]
    sources = tuple((group, ranked[targets[0]][group].source) for group in listed)
    caption = "Error budget: change of each target where the rates of a group are 1 sigma higher"
    return (
        Table(caption, ("group", *(short_name(one) for one in targets)), tuple(rows)),
        Table("Where the uncertainties come from", ("group", "source"), sources, numeric=False),
    )
