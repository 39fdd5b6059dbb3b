"""What treatments of the lines of He I leave out, with sizes published or held by slow tests."""

from __future__ import annotations

import pytest

from levelnet.escape.left_out import helium_left_out
from levelnet.escape.lines import Lines

FEEDBACK = "+0.12 % of x_e near z = 2300"  # Kholupenko, Ivanchik & Varshalovich 2010
DIFFUSION = "diffusion = true has that"


@pytest.mark.parametrize(
    ("lines", "said", "not_said"),
    [
        # README, lines of helium: 2 per cent too high at z = 1800 without the continuum.
        ({}, ("up to 2 per cent too high", FEEDBACK), (DIFFUSION,)),
        ({"helium": "sobolev_feedback"}, ("up to 2 per cent too high",), (FEEDBACK, DIFFUSION)),
        (
            {"helium": "continuum", "helium_continuum": {"redistribution": "doppler"}},
            ("by 1 to 1.3 and 1 to 3.8 per cent", "photons made in the wings"),
            (FEEDBACK, DIFFUSION),
        ),
        (
            {"helium": "continuum", "helium_continuum": {"feedback": False}},
            (FEEDBACK, DIFFUSION, "up to 0.28 per cent"),
            (),
        ),
        (
            {"helium": "continuum", "helium_continuum": {"diffusion": True}},
            (),
            (FEEDBACK, DIFFUSION),
        ),
    ],
)
def test_each_treatment_says_its_own(
    lines: dict[str, object], said: tuple[str, ...], not_said: tuple[str, ...]
) -> None:
    notes = " ".join(helium_left_out(Lines(**lines)))  # type: ignore[arg-type]
    assert all(one in notes for one in said)
    assert not any(one in notes for one in not_said)
