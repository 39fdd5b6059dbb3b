"""Names of targets: every way to write them, every way to get them wrong."""

from __future__ import annotations

import math

import pytest

from levelnet.errors import InputError
from levelnet.quantities import ALIASES, OBSERVABLES, known_targets
from levelnet.studies.targets import Target, parse_target


@pytest.mark.parametrize(
    ("text", "name", "kind", "unit"),
    [
        ("x_e(900)", "x_e(900)", "x_e", "1"),
        (" x_e( 900.0 ) ", "x_e(900)", "x_e", "1"),
        ("x_e(9e2)", "x_e(900)", "x_e", "1"),
        ("x_e(1100.25)", "x_e(1100.25)", "x_e", "1"),
        ("x_e(-0.0)", "x_e(0)", "x_e", "1"),
        ("T_m(200)", "T_m(200)", "T_m", "K"),
        ("tau(1100)", "optical_depth(1100)", "optical_depth", "1"),
        ("optical_depth(1100.0)", "optical_depth(1100)", "optical_depth", "1"),
        ("z_*", "last_scattering_redshift", "observable", "1"),
        ("r_s", "sound_horizon_mpc", "observable", "Mpc"),
        ("k_D", "damping_per_mpc", "observable", "Mpc^-1"),
        ("z_drag", "drag_redshift", "observable", "1"),
        ("r_drag", "drag_horizon_mpc", "observable", "Mpc"),
        ("line(3d-2p)", "line(3d-2p)", "line", "1"),
        ("line( 2p - 3d )", "line(3d-2p)", "line", "1"),
        ("line(1s-2s)", "line(2s-1s)", "line", "1"),
        ("line(5p-1s)", "line(5p-1s)", "line", "1"),
        ("line(30i-29k)", "line(30i-29k)", "line", "1"),
    ],
)
def test_names(text: str, name: str, kind: str, unit: str) -> None:
    target = parse_target(text)
    assert (target.name, target.kind, target.unit) == (name, kind, unit)
    assert parse_target(target.name) == target or math.isnan(target.redshift)


@pytest.mark.parametrize("name", OBSERVABLES)
def test_every_observable_is_a_target(name: str) -> None:
    target = parse_target(name)
    assert (target.name, target.kind, target.unit) == (name, "observable", OBSERVABLES[name].unit)
    assert math.isnan(target.redshift)
    assert name in known_targets()


def test_arguments() -> None:
    assert parse_target("tau(1301.5)").redshift == 1301.5
    assert parse_target("line(2p-3d)")[-2:] == ((3, 2), (2, 1))
    assert parse_target("line(2s-1s)")[-2:] == ((2, 0), (1, 0))
    assert parse_target("x_e(0)")[-2:] == Target("", "", "")[-2:]
    assert all(alias in known_targets() for alias in ALIASES)


@pytest.mark.parametrize(
    ("text", "complaint"),
    [
        ("foo", 'target "foo" is not known; known are x_e(Z), T_m(Z), optical_depth(Z)'),
        ("", 'target "" is not known'),
        ("x_e(900", 'target "x_e(900" is not known'),
        ("line(3d-2p)x", "is not known"),
        ("x_e", "a redshift from 0 to 10000 is needed, as in x_e(900)"),
        ("tau()", "a redshift from 0 to 10000 is needed, as in tau(900)"),
        ("x_e(abc)", "a redshift from 0 to 10000 is needed"),
        ("x_e(-1)", "a redshift from 0 to 10000 is needed"),
        ("x_e(nan)", "a redshift from 0 to 10000 is needed"),
        ("T_m(10001)", "a redshift from 0 to 10000 is needed"),
        ("z_*(3)", "last_scattering_redshift takes no argument"),
        ("drag_redshift()", "drag_redshift takes no argument"),
        ("line", "two levels are needed, as in line(3d-2p)"),
        ("line(3d)", "two levels are needed"),
        ("line(3j-2p)", "two levels are needed"),
        ("line(2d-1s)", "there is no level 2d; n is 1 to 1000 and l below n"),
        ("line(1001p-1s)", "there is no level 1001p"),
        ("line(0s-1s)", "there is no level 0s"),
        ("line(3d-3p)", "no line: n must differ, and l by one"),
        ("line(3s-2s)", "no line: n must differ, and l by one"),
        ("line(3s-1s)", "no line"),
        ("line(4f-2p)", "no line"),
    ],
)
def test_wrong_targets(text: str, complaint: str) -> None:
    with pytest.raises(InputError) as caught:
        parse_target(text)
    assert complaint in str(caught.value)
    assert "\n" not in str(caught.value)
