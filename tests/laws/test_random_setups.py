"""A thousand setups over the whole space of keys: each converges or says in a line why not.

Two hundred of them are valid, so that the test takes minutes; eight hundred are broken in one key.

What must hold needs no outside source: fractions of nuclei and populations are none below 0 and sum
to 1, temperatures are positive, photons and atoms are conserved.
"""

from __future__ import annotations

import time
import warnings

import numpy as np
import pytest
import tomli_w

import levelnet
from levelnet.errors import InputError, Outcome, SolveError
from levelnet.history.result import History
from levelnet.history.setup import parse_setup
from tests.random_setups import broken_setup, whole_setup

WHOLE, BROKEN, SEED = 200, 800, 20260
# Of one setup, on a machine that does other things too.
LONGEST_S = 60.0
FRACTIONS = (
    "ionized_hydrogen_fraction",
    "neutral_hydrogen_fraction",
    "neutral_helium_fraction",
    "singly_ionized_helium_fraction",
    "doubly_ionized_helium_fraction",
)


def check(history: History) -> None:
    """Hold one history against what must be so whatever was asked."""
    arrays = {name: getattr(history, name) for name in FRACTIONS}
    for name, values in arrays.items():
        assert np.all((values >= 0.0) & (values <= 1.0 + 1e-14)), name
    hydrogen = arrays["ionized_hydrogen_fraction"] + arrays["neutral_hydrogen_fraction"]
    np.testing.assert_allclose(hydrogen, 1.0, rtol=0, atol=1e-13)
    helium = sum(arrays[name] for name in FRACTIONS[2:])
    np.testing.assert_allclose(helium, 1.0, rtol=0, atol=1e-13)
    assert np.all(history.matter_temperature_k > 0.0)
    assert np.all(history.free_electron_fraction > 0.0)
    for one in history.species:
        population = history.populations(one.name)
        assert np.all(np.isfinite(population) & (population >= 0.0)), one.name
    how = history.diagnostics
    assert how.conservation_error < 1e-10
    if history.field is not None:
        assert how.photon_number_error < 1e-10
        assert how.atom_number_error < 1e-6


@pytest.mark.slow
@pytest.mark.parametrize("part", range(10))
def test_whole_setups_converge_or_name_their_failure(part: int) -> None:
    rng = np.random.default_rng([SEED, part])
    outcomes: dict[str, int] = {}
    for k in range(WHOLE // 10):
        text = tomli_w.dumps(whole_setup(rng))
        begin = time.process_time()
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore", levelnet.AccuracyWarning)
                history = levelnet.solve(parse_setup(text))
        except (InputError, SolveError) as failure:
            said = str(failure)
            assert said and "\n" not in said, (part, k, text)
            outcomes[said] = outcomes.get(said, 0) + 1
        except Exception as failure:
            raise AssertionError(f"setup {part}.{k}: {failure!r}\n{text}") from failure
        else:
            assert isinstance(history.outcome, Outcome)
            try:
                check(history)
            except AssertionError as failure:
                raise AssertionError(f"setup {part}.{k}: {failure}\n{text}") from failure
            outcomes[history.outcome.name] = outcomes.get(history.outcome.name, 0) + 1
        assert time.process_time() - begin < LONGEST_S, (part, k, text)
    # Most of them work, or nothing would have been tested.
    assert outcomes.get("CONVERGED", 0) > 0.7 * WHOLE / 10, outcomes


@pytest.mark.slow
def test_broken_setups_are_refused_by_the_name_of_the_key() -> None:
    rng = np.random.default_rng([SEED, 99])
    for k in range(BROKEN):
        tables, key = broken_setup(rng)
        text = tomli_w.dumps(tables)
        with pytest.raises(InputError) as caught:
            parse_setup(text)
        assert key in str(caught.value), (k, text, str(caught.value))
