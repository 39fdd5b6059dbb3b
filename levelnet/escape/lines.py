"""The part of a setup that chooses how photons of the resonance lines escape."""

from typing import Annotated, Literal

from pydantic import AfterValidator

from ..records import checked_record


def _line_count(value: int | str) -> int | str:
    if value == "all" or (isinstance(value, int) and value >= 1):
        return value
    raise ValueError('allowed: a whole number from 1, or "all"')


@checked_record
class Lines:
    """How line photons escape.

    Parameters
    ----------
    hydrogen : "closed", "open", "sobolev" or "sobolev_feedback"
        Treatment of the Lyman lines: no escape at all (two-photon only), optically thin, Sobolev,
        or Sobolev with each line lit by the photons that left the next line above.
    two_photon : "spontaneous" or "stimulated"
        2s-1s decay without or with stimulation by the blackbody. Stimulation alone, without the
        absorption of line photons by 1s -> 2s, overstates its effect (Kholupenko & Ivanchik 2006).
    lyman_lines : int >= 1, or "all"
        How many Lyman lines, from Lyman-alpha up, exchange photons with the ground state; the
        others are closed: np -> 1s is left out of the network. The default 1 is the better
        approximation of the truth: a photon that escapes a high Lyman line is absorbed in the
        next line below, so isolated high lines add escape without end.
    """

    hydrogen: Literal["closed", "open", "sobolev", "sobolev_feedback"] = "sobolev"
    two_photon: Literal["spontaneous", "stimulated"] = "spontaneous"
    lyman_lines: Annotated[int | str, AfterValidator(_line_count)] = 1
