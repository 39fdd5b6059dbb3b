"""What every export says of itself: source, atom, tolerance, certificate, licence."""

from __future__ import annotations

import json
import textwrap
from importlib import import_module

import numpy as np

from ..constants import CODATA_EDITION
from ..network.reduced import KeptLevels
from .certificate import Certificate, level_name
from .table import EffectiveTable

_WIDTH = 96
_CHANGES = {
    "in": "what follows holds these changes",
    "passed": "what follows starts from the measured constants, so pass these changes to have "
    "those of the setup",
}


def level_names(kept: KeptLevels) -> list[str]:
    """Names such as 2s and 2p, without blanks or commas."""
    pairs = zip(kept.n.tolist(), kept.l.tolist(), strict=True)
    return [level_name(n, l).replace(", ", "_") for n, l in pairs]


def pair_names(table: EffectiveTable) -> list[str]:
    """Names such as 2s-2p, lower level first."""
    names = level_names(table.kept)
    pairs = zip(table.lower.tolist(), table.upper.tolist(), strict=True)
    return [f"{names[i]}-{names[j]}" for i, j in pairs]


def about_lines(table: EffectiveTable, changes_are: str = "in") -> list[str]:
    """Return the head of an exported file as lines of ASCII of at most 96 characters.

    Nothing in them can end or open a comment of C, whatever the title of the setup is.

    Parameters
    ----------
    table : EffectiveTable
        What is exported.
    changes_are : "in" or "passed"
        Whether the numbers hold the changed constants of the setup, or those of the measured atom,
        to which a program passes changes.
    """
    setup = table.setup
    atom = setup.hydrogen
    top = atom.highest_resolved
    resolved = f" (whole shells above n = {top})" if top < atom.n_max else ""
    # By its name, since nothing down here may import the top of the package.
    version = import_module("levelnet").__version__
    species = "hydrogen" if table.helium is None else "hydrogen and helium"
    said = [
        f"Effective rates of {species}, made by levelnet {version}; do not edit.",
        "",
        f"title:       {json.dumps(setup.title)}",
        f"setup:       digest {setup.digest}; hydrogen n_max = {atom.n_max}{resolved}, "
        f"{atom.energies} energies, Lyman lines {setup.lines.hydrogen} "
        f"({setup.lines.lyman_lines}), two-photon decay {setup.lines.two_photon}",
        f"constants:   {CODATA_EDITION}; changes in the setup: fine structure "
        f"{setup.physics.fine_structure_change:g}, electron mass "
        f"{setup.physics.electron_mass_change:g}; {_CHANGES[changes_are]}",
        *_helium(table),
        *(f"overridden:  {json.dumps(f'{one.text} ({one.source})')}" for one in setup.rates.table),
        f"tolerance:   {table.tolerance:g} in the natural logarithm of each quantity",
        *certificate_lines(table.certificate),
        "method:      interior levels eliminated in the quasi-steady state (Ali-Haimoud & Hirata "
        "2010, Phys. Rev. D 82, 063521; Burgin 2009, Bull. Lebedev Phys. Inst. 36, 110)",
        "licence:     BSD-3-Clause, like levelnet, copyright 2026 The levelnet developers: use, "
        "change and pass on, keep this head; no warranty of any kind",
    ]
    lines = [
        part
        for line in said
        for part in (textwrap.wrap(line, _WIDTH, subsequent_indent=" " * 13) or [""])
    ]
    return [_harmless(line) for line in lines]


def _helium(table: EffectiveTable) -> list[str]:
    """What was distilled of helium."""
    if table.helium is None:
        return []
    lines = table.setup.lines
    choice = lines.helium_continuum
    said = f"helium:      n_max = {table.setup.helium.n_max}, lines {lines.helium or 'sobolev'}"
    if choice is not None:
        said += (
            f" (redistribution {choice.redistribution}, feedback {str(choice.feedback).lower()}, "
            f"diffusion {str(choice.diffusion).lower()})"
        )
    ion = "Saha equilibrium" if table.helium_ion is None else "a network"
    return [f"{said}, He II in {ion}; with the measured constants alone"]


def _harmless(text: str) -> str:
    plain = text.encode("ascii", "replace").decode()
    for sign, instead in (("/*", "/ *"), ("*/", "* /"), ("??", "? ?"), ("\\", "/")):
        plain = plain.replace(sign, instead)
    return plain


def certificate_lines(certificate: Certificate | None) -> list[str]:
    """Figures of a certificate, one line each."""
    if certificate is None:
        return ["certificate: none; errors were not measured"]
    rates = ", ".join(
        f"{name} {largest:.1e} ({rms:.1e})"
        for name, largest, rms in zip(
            certificate.rate_names, certificate.largest_error, certificate.rms_error, strict=True
        )
    )
    lines = [
        f"certificate: largest (rms) error of the logarithms at {certificate.n_points} random "
        f"points: {rates}"
    ]
    for name, errors in zip(certificate.cosmologies, certificate.history_error, strict=True):
        known = np.abs(errors[~np.isnan(errors)])
        figure = f"{known.max():.1e}" if len(known) else "not known"
        lines.append(
            f"certificate: largest relative error of x_e against the full network: {figure} "
            f"(cosmology: {name})"
        )
    return lines
