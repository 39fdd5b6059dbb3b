"""Threads, cache folders and shared inputs of the tests.

The environment is set while pytest loads this file, before numpy and numba are first imported.
"""

from __future__ import annotations

import atexit
import hashlib
import os
import shutil
import sys
import tempfile
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pytest
from hypothesis import settings

if TYPE_CHECKING:
    from levelnet.background.cosmology import Cosmology

ROOT = Path(__file__).resolve().parents[1]


def _pin_threads() -> None:
    # One thread gives the same sums on every machine, and small matrices are no faster with more.
    if "numpy" in sys.modules:
        raise RuntimeError("numpy was imported before the tests could set the number of threads")
    for name in ("OPENBLAS", "OMP", "MKL", "VECLIB_MAXIMUM", "NUMEXPR"):
        os.environ[f"{name}_NUM_THREADS"] = "1"


def _let_relative_be_relative() -> None:
    # Unless told otherwise pytest.approx lets an absolute difference of 1e-12 pass, whatever `rel`
    # says: more than most numbers in cgs units are.
    plain = pytest.approx

    def approx(expected: Any, rel: Any = None, abs: Any = None, nan_ok: bool = False) -> Any:
        import numpy as np

        if rel is not None and abs is None and _is_never_zero(np.asarray(expected)):
            abs = 0.0
        return plain(expected, rel=rel, abs=abs, nan_ok=nan_ok)

    pytest.approx = approx


def _is_never_zero(expected: Any) -> bool:
    return expected.dtype.kind in "fi" and bool((expected != 0).all())


def _choose_numba_cache() -> None:
    # numba notices a change in the caller's own file only. A folder named by the text of all kernel
    # files makes sure that no old code is run.
    digest = hashlib.sha256()
    for path in sorted((ROOT / "levelnet" / "kernels").glob("*.py")):
        digest.update(path.name.encode() + b"\0" + path.read_bytes())
    folder = ROOT / ".pytest_cache" / f"numba-{digest.hexdigest()[:16]}"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        (folder / "writable").touch()
    except OSError:
        folder = Path(_temporary_folder("numba"))
    os.environ["NUMBA_CACHE_DIR"] = str(folder)


def _temporary_folder(name: str) -> str:
    folder = tempfile.mkdtemp(prefix=f"levelnet-tests-{name}-")
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    return folder


_pin_threads()
_let_relative_be_relative()
_choose_numba_cache()
# The disk cache starts empty, so that every run of the tests builds it.
os.environ["LEVELNET_CACHE"] = _temporary_folder("cache")
os.environ["MPLBACKEND"] = "Agg"

# The same examples in every run; no deadline, since a first call compiles.
settings.register_profile("levelnet", derandomize=True, deadline=None)
settings.load_profile("levelnet")


@pytest.fixture(scope="session")
def fiducial_cosmology() -> Cosmology:
    """Make an invented flat universe with round parameters."""
    from levelnet.background.cosmology import Cosmology

    return Cosmology(
        hubble_km_s_mpc=68.0,
        baryon_density_h2=0.0224,
        matter_density_h2=0.142,
        cmb_temperature_k=2.7255,
        helium_mass_fraction=0.245,
        effective_neutrinos=3.046,
    )
