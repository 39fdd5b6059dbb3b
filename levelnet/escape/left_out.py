"""What a choice of lines leaves out of the transfer of their photons, by published sizes in x_e."""

from __future__ import annotations

from .helium_continuum import helium_treatment
from .lines import Lines
from .two_photon import STIMULATED_NOTE

_OFF = {
    "feedback": "feedback from the lines above: +0.22 % near z = 1050 on isolated lines (Chluba & "
    "Sunyaev 2007, Astron. Astrophys. 475, 109)",
    "excited_two_photon": "two-photon decay of ns and nd: up to -1.6 % near z = 1190 (Chluba & "
    "Sunyaev 2010, Astron. Astrophys. 512, A53)",
    "raman": "Raman scattering from 2s: +0.9 % near z = 920 (Hirata 2008, Phys. Rev. D 78, 023001)",
    "scattering": "diffusion with recoil in Lyman-alpha: -0.45 to -0.6 % near z = 900 (Hirata & "
    "Forbes 2009, Phys. Rev. D 80, 023001; Chluba & Sunyaev 2009, Astron. Astrophys. 503, 345)",
}
_SPONTANEOUS = (
    "two_photon = spontaneous: 2s-1s decay stimulated by the blackbody and absorption of the line "
    "photons by 1s -> 2s are both left out, a per cent in x_e each and of opposite sign "
    "(Kholupenko & Ivanchik 2006, Astron. Lett. 32, 795)"
)
_NOT_FED = (
    "feedback from 584 to 591 A, +0.12 % of x_e near z = 2300 (Kholupenko, Ivanchik & Varshalovich "
    "2010)"
)


def left_out(lines: Lines) -> tuple[str, ...]:
    """One statement for each process that a setup's lines could have and do not.

    Parameters
    ----------
    lines : Lines
        The choice.
    """
    notes = [STIMULATED_NOTE] if lines.two_photon == "stimulated" else []
    choice = lines.transfer
    if choice is None:
        return tuple(notes)
    if lines.two_photon == "spontaneous":
        notes.append(f"warning: {_SPONTANEOUS}")
    for name, size in _OFF.items():
        if not getattr(choice, name):
            notes.append(f"warning: lines.transfer.{name} = false leaves out {size}")
    if choice.feedback and lines.lyman_lines == 1:
        notes.append("lines.lyman_lines = 1: no line above Lyman-alpha is open to feed it")
    if choice.excited_two_photon:
        notes.append(
            "two-photon decay of levels above lines.transfer.highest_two_photon_n = "
            f"{choice.highest_two_photon_n} is left out: 5e-4 of x_e at 3, 1.2e-4 at 4, 2e-5 at 6"
        )
    return tuple(notes)


def helium_left_out(lines: Lines) -> tuple[str, ...]:
    """What the treatment of the lines of He I assumes and leaves out, one statement each.

    Parameters
    ----------
    lines : Lines
        The choice, where helium has levels.
    """
    chosen = helium_treatment(lines)
    notes = [f"helium lines assume: {text}" for text in chosen.assumes]
    notes += [f"helium lines hold for: {text}" for text in chosen.holds_for]
    if chosen.leaves_out:
        notes.append(f"helium lines: {chosen.leaves_out}")
    if not lines.helium_fed:
        notes.append(f"helium lines leave out: {_NOT_FED}")
    return tuple(notes)
