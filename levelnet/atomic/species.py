"""The parts of a setup that choose the atoms: how many levels, which energies, which rates."""

from typing import Annotated, Literal

from pydantic import Field

from ..records import checked_record


@checked_record
class Hydrogen:
    """How hydrogen is built.

    Parameters
    ----------
    n_max : int, 2 to 1000 (dimensionless)
        Highest principal quantum number; every (n, l) up to it is a level of its own unless
        `resolve_l_to` says otherwise. What fits is decided by memory, which is estimated before any
        work; a larger n_max is refused with the memory it would need.
    two_photon_rate_per_s : float, s^-1, not negative
        Total 2s-1s two-photon decay rate; 0 switches the channel off. The default is the computed
        non-relativistic 8.22487 s^-1 times the leading relativistic correction (-3.5e-5); published
        values run from 8.2206 to 8.2290, so carry 5e-4.
    energies : "measured" or "nonrelativistic"
        Level energies: fine-structure centroids with the measured ionization energy 13.598434 eV,
        or
        -chi/n^2 with chi = 13.59829 eV. The choice is worth about 1.5e-4 in x_e.
    resolve_l_to : int, 2 to n_max, optional (dimensionless)
        Highest n with levels resolved in l. Each n above it is one whole shell: its levels are
        populated by statistical weight, its rates are exact averages over l. Not set: n_max.
    collisions : bool
        Collisional transitions; only False so far.
    """

    n_max: Annotated[int, Field(ge=2, le=100_000)]
    two_photon_rate_per_s: Annotated[float, Field(ge=0.0, le=1e6)] = 8.2246
    energies: Literal["measured", "nonrelativistic"] = "measured"
    resolve_l_to: Annotated[int, Field(ge=2, le=100_000)] | None = None
    collisions: Literal[False] = False

    def __post_init__(self) -> None:
        """Check the rules about several fields."""
        if self.highest_resolved > self.n_max:
            raise ValueError(
                f"resolve_l_to = {self.resolve_l_to}: allowed are 2 to n_max = {self.n_max}"
            )

    @property
    def highest_resolved(self) -> int:
        """Highest n with levels resolved in l."""
        return self.n_max if self.resolve_l_to is None else self.resolve_l_to


@checked_record
class Helium:
    """How helium is built: for now neutral and inert (``n_max = 0``).

    Inert helium only weighs: in n_H, in the helium-to-hydrogen ratio and in the heat capacity.
    """

    n_max: Annotated[int, Field(ge=0, le=0)] = 0
