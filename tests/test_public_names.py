"""The names that others rely on, and that importing them stays cheap."""

from __future__ import annotations

import inspect
import subprocess
import sys

import pytest

import levelnet

# Checks outside the project call these. A name may be added; none may vanish or change its meaning.
PUBLIC = {
    "AccuracyWarning",
    "Cases",
    "Cosmology",
    "EffectiveRates",
    "EffectiveTable",
    "Ensemble",
    "EscapeStudy",
    "FastHistory",
    "History",
    "InputError",
    "LevelStudy",
    "LevelnetError",
    "LocalRates",
    "Outcome",
    "Setup",
    "SolveError",
    "Sweep",
    "Weighing",
    "distill",
    "effective_rates",
    "einstein_a",
    "ensemble",
    "escape_probability",
    "escape_study",
    "from_astropy",
    "history_from_table",
    "level_study",
    "load_setup",
    "load_sweep",
    "lyman_resonances",
    "photoionization_cross_section",
    "photoionization_rate",
    "plot",
    "raman_spectrum_per_s_hz",
    "rate_of_change",
    "read",
    "recombination_coefficient",
    "second_order_matrix_element",
    "solve",
    "sweep",
    "two_photon_profile",
    "two_photon_rate",
    "two_photon_spectrum_per_s_hz",
    "vary",
    "weigh",
    "with_expansion",
    "write",
}

# Names and order of the arguments, and the defaults that decide digits.
SIGNATURES = {
    "einstein_a": {"n": ..., "l": ..., "n_lower": ..., "l_lower": ..., "charge": 1},
    "photoionization_cross_section": {"n": ..., "l": ..., "electron_energy": ..., "charge": 1},
    "recombination_coefficient": {
        "n": ...,
        "l": ...,
        "matter_temperature_k": ...,
        "radiation_temperature_k": None,
        "charge": 1,
    },
    "two_photon_rate": {},
    "two_photon_profile": {"y": ...},
    "two_photon_spectrum_per_s_hz": {
        "n": ...,
        "l": ...,
        "photon_energy_ev": ...,
        "lowest_intermediate": 2,
    },
    "raman_spectrum_per_s_hz": {"n": ..., "l": ..., "photon_energy_ev": ...},
    "second_order_matrix_element": {"n": ..., "l": ..., "photon_energy_ev": ...},
    "lyman_resonances": {"n": ..., "l": ..., "n_intermediate": ...},
    "effective_rates": {
        "setup": ...,
        "radiation_temperature_k": ...,
        "matter_temperature_k": ...,
        "kept": None,
        "atom": "H I",
    },
    "distill": {"setup": ...},
    "history_from_table": {"table": ..., "cosmology": ...},
    "escape_study": {"setup": ...},
    "level_study": {"setup": ..., "rungs": None},
    "load_setup": {"path": ...},
    "load_sweep": {"path": ..., "setup": None},
    "plot": {"result": ..., "name": ""},
    "solve": {"setup": ...},
    "sweep": {"cases": ...},
    "vary": {"setup": ..., "combine": None, "together": None},
    "weigh": {"setup": ..., "targets": ...},
    "write": {"result": ..., "path": ...},
    "read": {"path": ...},
}

HEAVY = ("h5py", "matplotlib", "sympy", "numba", "scipy", "pydantic", "astropy", "xarray", "rich")


def python(code: str) -> str:
    """Run `code` in a fresh interpreter; give what it prints."""
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=False, timeout=60
    )
    assert done.returncode == 0, done.stderr
    return done.stdout.strip()


def test_public_names_are_frozen() -> None:
    assert set(levelnet.__all__) - {"__version__"} == PUBLIC
    assert len(levelnet.__all__) == len(set(levelnet.__all__))


@pytest.mark.parametrize("name", sorted(PUBLIC))
def test_public_name_is_there(name: str) -> None:
    assert getattr(levelnet, name) is not None
    assert name in dir(levelnet)


def test_unknown_name_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match="no_such_name"):
        _ = levelnet.no_such_name


@pytest.mark.parametrize("name", sorted(SIGNATURES))
def test_arguments_keep_their_names(name: str) -> None:
    expected = SIGNATURES[name]
    parameters = inspect.signature(getattr(levelnet, name)).parameters
    assert list(parameters)[: len(expected)] == list(expected)
    for argument, default in expected.items():
        if default is ...:
            assert parameters[argument].default is inspect.Parameter.empty, argument
        else:
            assert parameters[argument].default == default, argument
    for argument in list(parameters)[len(expected) :]:
        assert parameters[argument].default is not inspect.Parameter.empty, argument


def test_cosmology_keeps_its_fields() -> None:
    parameters = inspect.signature(levelnet.Cosmology).parameters
    assert list(parameters)[:6] == [
        "hubble_km_s_mpc",
        "baryon_density_h2",
        "matter_density_h2",
        "cmb_temperature_k",
        "helium_mass_fraction",
        "effective_neutrinos",
    ]
    assert parameters["cmb_temperature_k"].default == 2.7255
    assert parameters["effective_neutrinos"].default == 3.046


def test_import_loads_nothing_heavy() -> None:
    loaded = python("import sys, levelnet; print(' '.join(sys.modules))").split()
    assert [name for name in HEAVY if name in loaded] == []


def test_atomic_functions_do_not_load_files_or_figures() -> None:
    code = (
        "import sys, levelnet; levelnet.einstein_a(2, 1, 1, 0);"
        " levelnet.photoionization_cross_section(1, 0, 0.0);"
        " print(' '.join(sys.modules))"
    )
    loaded = set(python(code).split())
    assert loaded.isdisjoint({"h5py", "matplotlib", "pydantic", "rich"})


def test_import_takes_no_time() -> None:
    # Less than importing numpy alone, in the same interpreter state, twice over: a bound that
    # holds on any machine.
    code = (
        "import time, sys; a = time.perf_counter(); import numpy; b = time.perf_counter();"
        " import levelnet; c = time.perf_counter(); print((c - b) / (b - a))"
    )
    assert min(float(python(code)) for _ in range(3)) < 2.0
