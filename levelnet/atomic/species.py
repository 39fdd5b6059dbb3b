"""The parts of a setup that choose the atoms: how many levels, which energies, which rates."""

from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BeforeValidator, Field, ValidationInfo

from ..records import checked_record

HIGHEST_N = 1000
"""Highest n of hydrogen up to which its rates are tested."""
HELIUM_N_MAX = 100
"""Highest n of helium up to which its levels and rates are tested."""
# s^-1; sources in :class:`Helium`.
INTERCOMBINATION_PER_S, TWO_PHOTON_PER_S = 177.6, 51.02


def _hydrogen_size(value: int) -> int:
    if value <= HIGHEST_N:
        return value
    # n^3/3 line strengths are needed whatever is resolved; no figure beyond what is worth saying.
    size_gb = 8e-9 * min(value, 10**9) ** 3 / 3.0
    size = f"{size_gb:.3g} GB" if size_gb < 1000.0 else f"{1e-3 * size_gb:.3g} TB"
    raise ValueError(
        f"allowed are 2 to {HIGHEST_N}, up to which rates are tested (line strengths alone would "
        f"take over {size} of memory)"
    )


def _helium_size(value: int) -> int:
    if value == 0 or 2 <= value <= HELIUM_N_MAX:
        return value
    raise ValueError(f"allowed: 0 (inert) or 2 to {HELIUM_N_MAX}")


@checked_record
class Hydrogen:
    """How hydrogen is built.

    Parameters
    ----------
    n_max : int, 2 to 1000 (dimensionless)
        Highest principal quantum number; every (n, l) up to it is a level of its own unless
        `resolve_l_to` says otherwise. What fits is decided by memory, which is estimated before any
        work; a larger n_max is refused with the memory that its line strengths would need.
    two_photon_rate_per_s : float, s^-1, not negative
        Total 2s-1s two-photon decay rate; 0 switches the channel off. The default is the computed
        non-relativistic 8.22487 s^-1 times the leading relativistic correction (-3.5e-5); published
        values run from 8.2206 to 8.2290, so carry 5e-4.
    energies : "measured" or "nonrelativistic"
        Level energies: fine-structure centroids with the measured ionization energy 13.598434 eV,
        or
        -chi/n^2 with chi = 13.59829 eV. The choice is worth about 1.5e-4 in x_e. It holds for He II
        too (54.417765 eV), where it is worth 4e-5; levels of He I are measured or follow from
        measured ones.
    resolve_l_to : int, 2 to n_max, optional (dimensionless)
        Highest n with levels resolved in l. Each n above it is one whole shell: its levels are
        populated by statistical weight, its rates are exact averages over l. Not set: n_max.
    collisions : bool
        Collisional transitions; only False so far.
    """

    n_max: Annotated[int, Field(ge=2), AfterValidator(_hydrogen_size)]
    two_photon_rate_per_s: Annotated[float, Field(ge=0.0, le=1e6)] = 8.2246
    energies: Literal["measured", "nonrelativistic"] = "measured"
    resolve_l_to: Annotated[int, Field(ge=2, le=HIGHEST_N)] | None = None
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


def _where_it_acts(default: float | str) -> BeforeValidator:
    """Default of a choice about helium's levels: not set where there are none."""

    def fill(value: object, info: ValidationInfo) -> object:
        if value is None and info.data.get("n_max"):
            return default
        return value

    return BeforeValidator(fill)


_BY_SIZE: Any = None  # stands for a default that depends on `n_max`


@checked_record
class Helium:
    """How helium is built.

    With ``n_max = 0`` it is neutral and inert: it only weighs, in n_H, in the helium-to-hydrogen
    ratio and in the heat capacity, and the other keys may not be set.

    Parameters
    ----------
    n_max : int, 0 or 2 to 100 (dimensionless)
        Highest principal quantum number of He I, singlets and triplets with every l, and of He II.
    intercombination_rate_per_s : float, s^-1, not negative
        Rate of 2 3P1 -> 1 1S; 0 switches the line off. The default 177.6 (Lach & Pachucki 2001;
        from memory) stands beside older values from 176.4 to 233.
    two_photon_rate_per_s : float, s^-1, not negative
        Total two-photon decay rate of 2 1S; 0 switches the channel off. The default is 51.02
        (Derevianko & Johnson 1997).
    helium_ion : "network" or "saha"
        Recombination of He III: by the levels of He II, or in Saha equilibrium at T_m, which is up
        to 1e-3 of x_e lower near redshift 6000.
    """

    n_max: Annotated[int, AfterValidator(_helium_size)] = 0
    intercombination_rate_per_s: Annotated[
        Annotated[float, Field(ge=0.0, le=1e6)] | None,
        _where_it_acts(INTERCOMBINATION_PER_S),
        Field(validate_default=True),
    ] = _BY_SIZE
    two_photon_rate_per_s: Annotated[
        Annotated[float, Field(ge=0.0, le=1e6)] | None,
        _where_it_acts(TWO_PHOTON_PER_S),
        Field(validate_default=True),
    ] = _BY_SIZE
    helium_ion: Annotated[
        Literal["saha", "network"] | None,
        _where_it_acts("network"),
        Field(validate_default=True),
    ] = _BY_SIZE

    def __post_init__(self) -> None:
        """Refuse choices about levels that are not there."""
        for name in ("intercombination_rate_per_s", "two_photon_rate_per_s", "helium_ion"):
            if self.n_max == 0 and getattr(self, name) is not None:
                raise ValueError(f"{name}: helium is inert with n_max = 0; allowed from n_max = 2")
