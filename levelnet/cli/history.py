"""``levelnet history``: an ionization history from a table of effective rates."""

from __future__ import annotations

import argparse
import dataclasses
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import InputError, RangeError
from .console import Console
from .output import print_result
from .paths import check_target
from .solve import cache_pieces
from .table_output import distilled_summary, distilled_values

if TYPE_CHECKING:
    from ..distilled.fast import FastHistory
    from ..distilled.table import EffectiveTable
    from ..history.setup import Setup

NAME = "history"
SUMMARY = "make a history from a table of effective rates"
DESCRIPTION = (
    "Compute the ionization history of one cosmology from a table that `levelnet distill` wrote, "
    "in a few milliseconds once the code is compiled. What is not given is that of the table's "
    "setup."
)
EXAMPLE = "levelnet history table.h5 --hubble-km-s-mpc 70 --output history.csv"

# Parameters of a cosmology that are options, with what they are.
_PARAMETERS = {
    "hubble_km_s_mpc": "Hubble constant, km/s/Mpc",
    "baryon_density_h2": "Omega h^2 of baryons",
    "matter_density_h2": "Omega h^2 of baryons and dark matter",
    "cmb_temperature_k": "radiation temperature today, K",
    "helium_mass_fraction": "helium by mass",
    "effective_neutrinos": "effective number of neutrino species",
}
_CHANGES = {
    "fine_structure_change": "relative change of the fine-structure constant",
    "electron_mass_change": "relative change of the electron mass",
}


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of this command."""
    parser.add_argument("table", metavar="TABLE", type=Path, help="table file (HDF5)")
    parser.add_argument(
        "-o",
        "--output",
        metavar="FILE",
        help="write the history to FILE, as HDF5 if it ends in .h5, else as CSV; - prints CSV",
    )
    parser.add_argument(
        "--setup",
        metavar="SETUP",
        type=Path,
        help="setup file (TOML) with cosmology, lines, grid and accuracy, for the table's atom",
    )
    for name, text in {**_PARAMETERS, **_CHANGES}.items():
        parser.add_argument(f"--{name.replace('_', '-')}", metavar="X", type=float, help=text)
    parser.add_argument(
        "--redshifts",
        metavar="Z",
        type=float,
        nargs="+",
        help="output redshifts (default: 2000 over the range of the setup's grid)",
    )
    parser.add_argument(
        "--no-cache",
        action="store_true",
        help="neither read nor fill the cache, where a radiation field resolved in frequency keeps "
        "what takes long",
    )
    parser.add_argument("--force", action="store_true", help="overwrite the output file")


def run(options: argparse.Namespace, console: Console) -> int:
    """Make the history, write it, print the summary."""
    _check_places(options)

    from ..store import read_table

    table = read_table(options.table)
    setup = chosen_setup(table, options)
    pieces = None if options.no_cache else cache_pieces(console)
    history = _history(table, setup, options, pieces)
    written = _write(history, setup, options)
    if options.output == "-":
        return 0
    print_result(
        options.json,
        lambda: distilled_values(history, setup),
        lambda: f"{setup.title or '(no title)'}\n{distilled_summary(history)}",
        written=written,
    )
    return 0


def _check_places(options: argparse.Namespace) -> None:
    if options.output == "-" and options.json:
        raise InputError("--output -: --json prints to stdout too; give one of them")
    given = [name for name in (*_PARAMETERS, *_CHANGES) if getattr(options, name) is not None]
    if options.setup is not None and given:
        raise InputError(
            f"--setup: brings its own {given[0]}; give either a setup or --{_dashed(given[0])}"
        )
    if options.output not in {None, "-"}:
        for source in (options.table, options.setup):
            if source is not None:
                check_target(Path(options.output), options.force, source)


def _dashed(name: str) -> str:
    return name.replace("_", "-")


def chosen_setup(table: EffectiveTable, options: argparse.Namespace) -> Setup:
    """The setup of a history: that of the file given, or the table's with the parameters given."""
    from ..history.setup import load_setup

    setup: Setup
    if options.setup is not None:
        setup = load_setup(options.setup)
        for name in ("n_max", "energies", "highest_resolved"):
            asked, there = getattr(setup.hydrogen, name), getattr(table.setup.hydrogen, name)
            if asked != there:
                shown = "resolve_l_to" if name == "highest_resolved" else name
                raise InputError(
                    f"{options.setup}: hydrogen.{shown} = {asked}, but the table {options.table} "
                    f"was distilled with {there}"
                )
        _check_helium(setup, table, options)
        _check_overrides(setup, table, options)
        return setup
    cosmology: dict[str, Any] = _given(options, _PARAMETERS)
    if "helium_mass_fraction" in cosmology:
        cosmology["helium_nucleon_fraction"] = None
    changes = _given(options, _CHANGES)
    setup = table.setup
    replaced: Setup = dataclasses.replace(
        setup,
        cosmology=dataclasses.replace(setup.cosmology, **cosmology),
        physics=dataclasses.replace(setup.physics, **changes),
    )
    return replaced


def _check_helium(setup: Setup, table: EffectiveTable, options: argparse.Namespace) -> None:
    """Refuse another helium than that of the table; a universe without any it always knows."""
    if setup.cosmology.helium_ratio() == 0.0:
        return
    for name in (
        "n_max",
        "intercombination_rate_per_s",
        "two_photon_rate_per_s",
        "helium_ion",
    ):
        asked, there = getattr(setup.helium, name), getattr(table.setup.helium, name)
        if asked != there:
            raise InputError(
                f"{options.setup}: helium.{name} = {asked}, but the table {options.table} was "
                f"distilled with {there}"
            )


def _check_overrides(setup: Setup, table: EffectiveTable, options: argparse.Namespace) -> None:
    """Refuse overrides of rates other than those distilled; the two-photon rate is free."""
    from ..distilled.kept import check_overrides

    asked, there = ({one.key for one in of.rates.network} for of in (setup, table.setup))
    if asked != there:
        raise InputError(
            f"{options.setup}: rates: the table {options.table} was distilled with other overrides "
            "of lines or cross sections; distil this setup"
        )
    check_overrides(setup)


def _given(options: argparse.Namespace, names: dict[str, str]) -> dict[str, float]:
    values = {name: getattr(options, name) for name in names}
    return {name: value for name, value in values.items() if value is not None}


def _history(
    table: EffectiveTable, setup: Setup, options: argparse.Namespace, pieces: Any
) -> FastHistory:
    from ..distilled.history import history_from_table

    redshifts: Any = options.redshifts
    if redshifts is None and options.setup is not None:
        from ..history.integrate import output_redshifts

        redshifts = output_redshifts(setup)
    try:
        return history_from_table(
            table,
            setup.cosmology,
            redshifts=redshifts,
            lines=setup.lines,
            two_photon_rate_per_s=setup.two_photon_rate_per_s,
            relative=setup.accuracy.relative,
            observables=True,
            fine_structure_change=setup.physics.fine_structure_change,
            electron_mass_change=setup.physics.electron_mass_change,
            pieces=pieces,
        )
    except RangeError as error:
        raise RangeError(f"{options.table}: {error}") from None


def _write(history: FastHistory, setup: Setup, options: argparse.Namespace) -> list[Path]:
    if options.output is None:
        return []
    from ..store import write_distilled, write_distilled_csv

    if options.output == "-":
        write_distilled_csv(history, setup, sys.stdout)
        return []
    target = Path(options.output)
    if target.suffix == ".h5":
        write_distilled(history, setup, target, options.force)
    else:
        write_distilled_csv(history, setup, target, options.force)
    return [target]
