"""The part of a setup that chooses how photons of the resonance lines escape."""

from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BeforeValidator, Field, ValidationInfo

from ..records import checked_record, from_mapping

RAMAN_LEVELS = ((2, 0), (3, 0), (3, 2))
"""(n, l) of the levels with Raman scattering; higher ones have far smaller populations."""
TWO_PHOTON_N_MAX = 10
"""Highest n of ns and nd levels whose two-photon spectra are known."""
HIGHEST_FED = 7
"""Highest n 1P of He I whose line to 1 1S takes part in `helium_higher_lines` = "feedback": photons
of 8 1P reach 7 1P within 0.0026 in ln a; steps would have to be as short, so 8 1P and above are
closed."""
COARSEST_STEP = 0.002
"""Widest frequency step: a line and the next one up must stay many cells apart."""


def _line_count(value: int | str) -> int | str:
    if value == "all" or (isinstance(value, int) and value >= 1):
        return value
    raise ValueError('allowed: a whole number from 1, or "all"')


@checked_record
class Transfer:
    """What a radiation field resolved in frequency takes part in.

    Parameters
    ----------
    feedback : bool
        Photons that leave a higher Lyman line travel down to the lines below. False: lines above
        Lyman-alpha are isolated: each sees a blackbody, its photons are forgotten, and those of
        other processes pass it.
    excited_two_photon : bool
        Two-photon decay of ns and nd, n >= 3, and its inverse, outside the lines themselves.
    raman : bool
        Raman scattering from 2s, 3s and 3d, and its inverse, outside the lines themselves.
    scattering : bool
        Resonance scattering in the wings of Lyman-alpha: diffusion with recoil.
    frequency_step : float, 1e-5 to 0.002 (dimensionless), or None
        d ln nu of a cell of the grid; None: as the asked accuracy needs it.
    highest_two_photon_n : int, 3 to 10
        Highest n of the levels in `excited_two_photon`.
    """

    feedback: bool = True
    excited_two_photon: bool = True
    raman: bool = True
    scattering: bool = True
    frequency_step: Annotated[float, Field(ge=1e-5, le=COARSEST_STEP)] | None = None
    highest_two_photon_n: Annotated[int, Field(ge=3, le=TWO_PHOTON_N_MAX)] = 4


@checked_record
class HeliumContinuum:
    """How the lines of He I to its ground state fare among absorbing hydrogen atoms.

    Parameters
    ----------
    redistribution : "doppler", "complete" or "partial"
        Frequency of a scattered photon: within the Doppler core; over the whole profile; over the
        core and, by the incoherent part, the wings.
    feedback : bool
        Photons that leave a line travel down to the next line below.
    diffusion : bool
        Of "partial" alone: coherently scattered photons are shifted by Doppler widths, from the
        core into the wings. Off by default, so that the three redistributions are those that were
        published side by side; it lowers x_e by up to 0.3 per cent near z = 1830.
    """

    redistribution: Literal["doppler", "complete", "partial"] = "partial"
    feedback: bool = True
    diffusion: bool = False

    def __post_init__(self) -> None:
        """Check the rule about two fields."""
        if self.diffusion and self.redistribution != "partial":
            raise ValueError(
                f'diffusion = true: redistribution = "{self.redistribution}" shifts no photon; '
                'allowed with "partial"'
            )


def _continuum_default(value: object, info: ValidationInfo) -> object:
    if value is None and info.data.get("helium") == "continuum":
        return HeliumContinuum()
    return value


def _two_photon_default(value: object, info: ValidationInfo) -> object:
    if value is not None:
        return value
    return "distorted" if info.data.get("hydrogen") == "transfer" else "spontaneous"


def _transfer_default(value: object, info: ValidationInfo) -> object:
    if value is None and info.data.get("hydrogen") == "transfer":
        return Transfer()
    return value


_BY_TREATMENT: Any = None  # stands for a default that depends on `hydrogen`


@checked_record
class Lines:
    """How line photons escape.

    Parameters
    ----------
    hydrogen : "closed", "open", "sobolev", "sobolev_feedback" or "transfer"
        Treatment of the Lyman lines: no escape at all (two-photon only), optically thin, Sobolev,
        Sobolev with each line lit by the photons that left the next line above, or the radiation
        field from half of Lyman-alpha to the Lyman limit resolved in frequency.
    two_photon : "spontaneous", "stimulated" or "distorted"
        2s-1s decay without stimulation; stimulated by the blackbody; or that together with the
        absorption of the real field by 1s -> 2s ("transfer" only, and the default there).
        Stimulation alone overstates its effect (Kholupenko & Ivanchik 2006). The decays of 2 1S of
        He I and of 2s of He II follow; for them "distorted" is "stimulated".
    lyman_lines : int >= 1, or "all"
        How many Lyman lines, from Lyman-alpha up, exchange photons with the ground state; the
        others are closed: np -> 1s is left out of the network. The default 1 is the better
        approximation of the truth: a photon that escapes a high Lyman line is absorbed in the
        next line below, so isolated high lines add escape without end.
    transfer : Transfer, optional
        What the field takes part in; only with ``hydrogen = "transfer"``.
    helium : "sobolev", "sobolev_feedback" or "continuum", optional
        Treatment of the lines of He I to its ground state, where helium has levels: Sobolev, with
        feedback from line to line, or with absorption by hydrogen inside the lines. Not set:
        Sobolev.
    helium_higher_lines : "closed", "free" or "feedback", optional
        Lines n 1P -> 1 1S with n >= 3: left out; each on its own, which adds escape with every n
        and never converges; or each lit by the next line above. Not set: closed.
    helium_continuum : HeliumContinuum, optional
        Details of ``helium = "continuum"``, and only with it.
    """

    hydrogen: Literal["closed", "open", "sobolev", "sobolev_feedback", "transfer"] = "sobolev"
    two_photon: Annotated[
        Literal["spontaneous", "stimulated", "distorted"],
        BeforeValidator(_two_photon_default),
        Field(validate_default=True),
    ] = _BY_TREATMENT
    lyman_lines: Annotated[int | str, AfterValidator(_line_count)] = 1
    transfer: Annotated[
        Transfer | None,
        from_mapping(Transfer),
        BeforeValidator(_transfer_default),
        Field(validate_default=True),
    ] = None
    helium: Literal["sobolev", "sobolev_feedback", "continuum"] | None = None
    helium_higher_lines: Literal["closed", "free", "feedback"] | None = None
    helium_continuum: Annotated[
        HeliumContinuum | None,
        from_mapping(HeliumContinuum),
        BeforeValidator(_continuum_default),
        Field(validate_default=True),
    ] = None

    def __post_init__(self) -> None:
        """Check the rules about several fields."""
        if self.helium_continuum is not None and self.helium != "continuum":
            raise ValueError('helium_continuum: only with helium = "continuum"')
        if self.hydrogen == "transfer":
            return
        if self.two_photon == "distorted":
            raise ValueError(
                'two_photon = "distorted": the field it absorbs is known with '
                'hydrogen = "transfer" only'
            )
        if self.transfer is not None:
            raise ValueError('transfer: only with hydrogen = "transfer"')

    @property
    def helium_fed(self) -> bool:
        """Whether lines of He I are lit by what the lines above have sent."""
        choice = self.helium_continuum
        return self.helium == "sobolev_feedback" or (choice is not None and choice.feedback)

    @property
    def field_levels(self) -> tuple[tuple[int, int], ...]:
        """(n, l) of the levels that a resolved field talks to apart from the lines, in order."""
        if self.transfer is None:
            return ()
        found = {(2, 0)} if self.two_photon == "distorted" else set()
        if self.transfer.raman:
            found |= set(RAMAN_LEVELS)
        if self.transfer.excited_two_photon:
            top = self.transfer.highest_two_photon_n
            found |= {(n, l) for n in range(3, top + 1) for l in (0, 2)}
        return tuple(sorted(found))
