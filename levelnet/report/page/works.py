"""What a result rests on: publications, each with the use that was made of it.

Every entry stands, with the same authors, year, journal, volume and page, in the docstring or note
of the code that uses it; none is from anywhere else. Titles, first names and most DOIs are stated
in none of these, so that they stand in no entry either.
"""

from __future__ import annotations

from collections.abc import Iterator
from functools import cache
from typing import NamedTuple

from ...distilled.table import EffectiveTable
from ...history.setup import Setup
from ...studies.escape_records import EscapeStudy
from ...studies.level_records import LevelStudy
from ...studies.weighing import Weighing
from ...tables import TableSource, list_tables


class Work(NamedTuple):
    """A publication.

    Attributes
    ----------
    authors : str
        Surnames; "et al." where the source names no more.
    year : int or None
        Of publication; None where unknown.
    place : str
        Journal, volume and first page; or title and publisher of a book.
    use : str
        What it was used for.
    doi : str
        Only where the catalogue of atomic tables states one.
    """

    authors: str
    year: int | None
    place: str
    use: str
    doi: str = ""

    @property
    def text(self) -> str:
        """One line, as in the docstrings."""
        doi = f", doi:{self.doi}" if self.doi else ""
        year = "" if self.year is None else f" {self.year}"
        return f"{self.authors}{year}, {self.place}{doi}"


def works_of(record: object, setup: Setup | None) -> tuple[Work, ...]:
    """Publications that a result rests on.

    Parameters
    ----------
    record : object
        A result; its kind decides on methods.
    setup : Setup or None
        What was asked; decides on the physics.

    Returns
    -------
    tuple of Work
        Each publication once for each use, methods before physics before data.
    """
    found = [*_methods(record)]
    if setup is not None:
        field = setup.lines.hydrogen == "transfer" or isinstance(record, EscapeStudy)
        found += [*_hydrogen(setup), *_lines(setup, field), *_cosmology(setup)]
        if setup.helium_recombines:
            found += _helium(setup)
    return tuple(dict.fromkeys([*found, *_data(setup)]))


def tables_read(setup: Setup | None) -> tuple[TableSource, ...]:
    """Atomic tables that a result was computed from; others in the package serve tests alone."""
    if setup is None or not setup.helium_recombines:
        return ()
    return _helium_tables()


@cache
def _helium_tables() -> tuple[TableSource, ...]:
    return tuple(one for one in list_tables() if one.name in _HELIUM_TABLES)


def _methods(record: object) -> Iterator[Work]:
    reduction = "elimination of the interior levels"
    yield Work("Ali-Haimoud & Hirata", 2010, "Phys. Rev. D 82, 063521", reduction)
    yield Work("Burgin", 2009, "Bull. Lebedev Phys. Inst. 36, 110", reduction)
    yield Work(
        "Hairer & Wanner",
        1996,
        "Solving Ordinary Differential Equations II",
        "integration of the stiff equations",
    )
    if isinstance(record, LevelStudy):
        use = "convergence with n_max"
        yield Work("Grin & Hirata", 2010, "Phys. Rev. D 81, 083005", use)
        yield Work("Chluba, Vasil & Dursi", 2010, "Mon. Not. R. Astron. Soc. 407, 599", use)
        yield Work("Kramers", 1923, "Phil. Mag. 46, 836", "law by which truncation is carried on")
    if isinstance(record, EscapeStudy):
        use = "corrections to the escape of Lyman-alpha"
        yield Work("Rubino-Martin, Chluba & Sunyaev", 2008, "Astron. Astrophys. 485, 377", use)
        yield Work("Chluba & Thomas", 2011, "Mon. Not. R. Astron. Soc. 412, 748", use)
    if isinstance(record, Weighing):
        yield Work("Cacuci", 1981, "J. Math. Phys. 22, 2794", "adjoint sensitivities")
    if not isinstance(record, EffectiveTable):
        yield Work(
            "Hu & Sugiyama", 1996, "Astrophys. J. 471, 542", "optical depth, visibility, damping"
        )
    if isinstance(record, LevelStudy | EscapeStudy):
        yield Work(
            "Eisenstein & Hu", 1998, "Astrophys. J. 496, 605", "sound horizon at the drag epoch"
        )
        yield Work(
            "Kaiser", 1983, "Mon. Not. R. Astron. Soc. 202, 1169", "polarization in the damping"
        )


def _hydrogen(setup: Setup) -> Iterator[Work]:
    lines = "dipole matrix elements of hydrogen"
    yield Work("Gordon", 1929, "Ann. Phys. 394, 1031", lines)
    yield Work("Infeld & Hull", 1951, "Rev. Mod. Phys. 23, 21", lines)
    yield Work("Burgess", 1965, "Mem. R. Astron. Soc. 69, 1", "photoionization of hydrogen")
    yield Work("Milne", 1924, "Phil. Mag. 47, 209", "recombination from photoionization")
    yield Work("Saha", 1920, "Phil. Mag. 40, 472", "ionization equilibrium")
    if setup.hydrogen.energies == "measured":
        yield Work(
            "Bethe & Salpeter",
            1957,
            "Quantum Mechanics of One- and Two-Electron Atoms",
            "fine structure in the level energies",
        )
    if setup.hydrogen.two_photon_rate_per_s > 0.0:
        use = "two-photon decay of 2s"
        yield Work("Breit & Teller", 1940, "Astrophys. J. 91, 215", use)
        yield Work("Klarsfeld", 1969, "Phys. Lett. A 30, 382", use)


def _lines(setup: Setup, field: bool) -> Iterator[Work]:
    """Publications behind the escape of line photons; `field`: resolved in frequency."""
    name = setup.lines.hydrogen
    if name in {"sobolev", "sobolev_feedback"} or field:
        use = "escape from an expanding medium"
        yield Work("Sobolev", 1960, "Moving Envelopes of Stars, Harvard University Press", use)
        yield Work("Rybicki & dell'Antonio", 1994, "Astrophys. J. 427, 603", use)
    choice = setup.lines.transfer if field else None
    if name == "sobolev_feedback" or (choice is not None and choice.feedback):
        yield Work(
            "Chluba & Sunyaev",
            2007,
            "Astron. Astrophys. 475, 109",
            "feedback among the Lyman lines",
        )
    if setup.lines.two_photon != "spontaneous":
        yield Work(
            "Chluba & Sunyaev", 2006, "Astron. Astrophys. 446, 39", "stimulated two-photon decay"
        )
    if setup.lines.two_photon == "distorted":
        yield Work("Kholupenko & Ivanchik", 2006, "Astron. Lett. 32, 795", "absorption by 1s -> 2s")
    if choice is None:
        return
    if choice.excited_two_photon:
        use = "two-photon decay of ns and nd"
        yield Work("Goeppert-Mayer", 1931, "Ann. Phys. 401, 273", use)
        yield Work("Chluba & Sunyaev", 2008, "Astron. Astrophys. 480, 629", use)
    if choice.excited_two_photon or choice.raman:
        use = "two-photon processes and Raman scattering in recombination"
        yield Work("Hirata", 2008, "Phys. Rev. D 78, 023001", use)
    if choice.scattering:
        use = "diffusion and recoil in Lyman-alpha"
        yield Work("Hirata & Forbes", 2009, "Phys. Rev. D 80, 023001", use)
        yield Work("Chluba & Sunyaev", 2009, "Astron. Astrophys. 503, 345", use)


def _cosmology(setup: Setup) -> Iterator[Work]:
    universe = setup.cosmology
    yield Work("Weymann", 1965, "Phys. Fluids 8, 2112", "Compton coupling of matter and radiation")
    yield Work("Peebles", 1968, "Astrophys. J. 153, 1", "Compton coupling of matter and radiation")
    if universe.dark_energy_w0 != -1.0 or universe.dark_energy_wa != 0.0:
        use = "equation of state of dark energy"
        yield Work("Chevallier & Polarski", 2001, "Int. J. Mod. Phys. D 10, 213", use)
        yield Work("Linder", 2003, "Phys. Rev. Lett. 90, 091301", use)
    if universe.neutrino_masses_ev:
        yield Work(
            "Komatsu et al.",
            2011,
            "Astrophys. J. Suppl. Ser. 192, 18",
            "density of massive neutrinos",
        )
    if setup.physics.fine_structure_change or setup.physics.electron_mass_change:
        use = "changed constants in recombination"
        yield Work("Kaplinghat, Scherrer & Turner", 1999, "Phys. Rev. D 60, 023516", use)
        yield Work("Hannestad", 1999, "Phys. Rev. D 60, 023515", use)
        yield Work("Ichikawa et al.", 2006, "Phys. Rev. D 74, 023515", use)


def _helium(setup: Setup) -> Iterator[Work]:
    lines = "matrix elements of He I"
    yield Work("Bates & Damgaard", 1949, "Phil. Trans. R. Soc. A 242, 101", lines)
    yield Work("Seaton", 1983, "Rep. Prog. Phys. 46, 167", "quantum-defect theory of He I")
    yield Work("Lach & Pachucki", 2001, "Phys. Rev. A 64, 042510", "the line 2 3P1 -> 1 1S")
    yield Work("Drake", 1971, "Phys. Rev. A 3, 908", "the decay of 2 3S")
    if setup.lines.helium == "continuum":
        use = "absorption by hydrogen in lines of He I"
        yield Work("Switzer & Hirata", 2008, "Phys. Rev. D 77, 083006", use)
        use = "coherent scattering in lines of He I"
        yield Work("Hirata & Switzer", 2008, "Phys. Rev. D 77, 083007", use)


def _data(setup: Setup | None) -> Iterator[Work]:
    """Constants and atomic tables."""
    yield Work(
        "Mohr, Newell, Taylor & Tiesinga",
        2025,
        "Rev. Mod. Phys. 97, 025002",
        "physical constants, CODATA 2022",
    )
    for one in tables_read(setup):
        if not one.authors.startswith("see "):  # row by row, in the table itself
            yield Work(one.authors, one.year, one.journal, one.quantity, one.doi)


_HELIUM_TABLES = {
    f"helium/{name}"
    for name in (
        "energy_levels",
        "fine_structure",
        "photoionization_fits",
        "quantum_defects",
        "transition_rates",
        "two_photon_distribution",
    )
}
