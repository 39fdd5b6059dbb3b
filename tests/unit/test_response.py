"""The response of an experiment against closed forms and general routines; its file."""

from __future__ import annotations

import hashlib
import math
from importlib.resources import files
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.integrate import quad

from levelnet.errors import InputError
from levelnet.studies.response import FIRST_LINE, Response, read_response
from tests.tolerances import ROUND_OFF

NAMES = ("one", "two")
REDSHIFT = (100.0, 300.0, 900.0, 1500.0)
KERNELS = ((0.0, 1.0), (2.0, -1.0), (1.0, 0.5), (0.0, 3.0))
COVARIANCE = ((4.0, 1.0), (1.0, 9.0))
RESPONSE = Response(NAMES, REDSHIFT, KERNELS, COVARIANCE)
TEXT = f"""{FIRST_LINE}
# any comment

redshift,one,two
100, 0, 1
300, 2, -1
900, 1, 0.5
1500, 0, 3
covariance,one,two
one, 4, 1
two, 1, 9
"""


def cubic(y: np.ndarray | float) -> Any:
    """A change that a cubic spline holds exactly."""
    return 1e-3 * (1.0 + 0.3 * (y - 6.0) - 0.2 * (y - 6.0) ** 2 + 0.1 * (y - 6.0) ** 3)


@pytest.mark.parametrize("count", [5, 200])
@pytest.mark.parametrize("descending", [True, False])
def test_change_against_quadrature(count: int, descending: bool) -> None:
    # Coarse outputs and fine ones, whose redshifts lie between those of the kernels.
    z = np.expm1(np.linspace(math.log(51.0), math.log(1801.0), count))
    z = z[::-1] if descending else z
    found = RESPONSE.change(z, cubic(np.log1p(z)))
    y = np.log1p(REDSHIFT)
    for k, value in enumerate(found):
        kernel = [row[k] for row in KERNELS]
        parts = (
            quad(lambda x, k=kernel: cubic(x) * np.interp(x, y, k), *ends)[0]
            for ends in pairwise(y)
        )
        assert value == pytest.approx(sum(parts), rel=1e-12)


def test_sigma_is_the_quadratic_form() -> None:
    z = np.array([1500.0, 1000.0, 500.0, 100.0])
    # A constant change: the integral of K alone, trapezia in ln(1 + z).
    change = np.trapezoid(np.array(KERNELS), np.log1p(REDSHIFT), axis=0) * 1e-3
    found = RESPONSE.sigma(z, np.full(4, 1e-3))
    # The inverse of a matrix of two: closed form.
    a, b, c = 4.0, 1.0, 9.0
    square = (c * change[0] ** 2 - 2.0 * b * change[0] * change[1] + a * change[1] ** 2) / (
        a * c - b * b
    )
    assert found == pytest.approx(math.sqrt(square), rel=10 * ROUND_OFF)
    assert RESPONSE.sigma(z, np.zeros(4)) == 0.0
    assert RESPONSE.sigma(z, np.full(4, -2e-3)) == pytest.approx(2.0 * found, rel=ROUND_OFF)


def test_sigma_is_finite_up_to_the_bounds() -> None:
    z = np.array([1500.0, 1000.0, 500.0, 100.0])
    # Correlation 1 - 2e-10: its smallest eigenvalue is twice the bound. Kernels and spreads as
    # far apart as is allowed.
    close = 1.0 - 2e-10
    for kernel, variance in ((1e50, 1e-100), (1e-300, 1e100)):
        rows = [[variance, close * variance], [close * variance, variance]]
        far = Response(NAMES, REDSHIFT, [[kernel, -kernel]] * 4, rows)
        found = far.sigma(z, np.full(4, 2.0))
        # Along the eigenvector (1, -1): closed form.
        change = 2.0 * kernel * np.log1p(REDSHIFT)[[0, -1]] @ [-1.0, 1.0]
        assert found == pytest.approx(change * math.sqrt(2.0 / 2e-10 / variance), rel=1e-5)


def test_units_do_not_matter() -> None:
    # The second observable in units 1e9 times as large.
    scaled = Response(
        NAMES,
        REDSHIFT,
        [[a, 1e-9 * b] for a, b in KERNELS],
        [[4.0, 1e-9], [1e-9, 9e-18]],
    )
    z = np.array([1500.0, 1000.0, 500.0, 100.0])
    delta = 1e-3 * np.array([1.0, -2.0, 3.0, 1.0])
    assert scaled.sigma(z, delta) == pytest.approx(RESPONSE.sigma(z, delta), rel=1e-12)


@pytest.mark.parametrize("ends", [(101.0, 1600.0), (50.0, 1499.0)])
def test_redshifts_must_cover_the_kernels(ends: tuple[float, float]) -> None:
    z = np.linspace(*ends, 30)
    with pytest.raises(InputError, match="kernels run from redshift 100 to 1500, but x_e is known"):
        RESPONSE.change(z, 0.0 * z)


def test_file(tmp_path: Path) -> None:
    path = tmp_path / "kernels.csv"
    path.write_text(TEXT)
    assert read_response(path) == RESPONSE
    digest = hashlib.sha256(TEXT.encode()).hexdigest()
    assert read_response(path, digest.upper()) == RESPONSE
    with pytest.raises(InputError, match=f"SHA-256 is {digest}, but {'0' * 64} was asked for"):
        read_response(path, "0" * 64)


WRONG_FILES = {
    "empty": ("", 'the first line must be "# levelnet response"'),
    "foreign": ("z,k\n1,2\n", "the first line must be"),
    "no header": (f"{FIRST_LINE}\n1,2\n", 'line 2: the header "redshift,NAME,..." is needed'),
    "no text": (TEXT.replace("any", "caf\xe9"), "not plain text"),
    "word": (TEXT.replace("300, 2", "300, two"), "line 6: 3 finite numbers with commas"),
    "infinite": (TEXT.replace("300, 2", "300, inf"), "line 6: 3 finite numbers"),
    "short row": (TEXT.replace("300, 2,", "300,"), "line 6: 3 finite numbers"),
    "long row": (TEXT.replace("one, 4,", "one, 4, 4,"), "line 10: 2 finite numbers"),
    "no covariance": (
        TEXT.split("covariance", maxsplit=1)[0],
        'a block with the header "covariance,NAME',
    ),
    "covariance first": (
        f"{FIRST_LINE}\ncovariance,one\none,1\n",
        'line 2: one block "redshift,NAME,..." is needed, then one block "covariance,NAME,..."',
    ),
    "two blocks": (TEXT + "redshift,one,two\n", 'line 12: one block "redshift'),
    "other names": (TEXT.replace("covariance,one", "covariance,uno"), "line 9: one block"),
    "row names": (
        TEXT.replace("two, 1", "due, 1"),
        "rows of the covariance must be named one, two",
    ),
    "missing row": (TEXT.replace("two, 1, 9\n", ""), "rows of the covariance must be named"),
    "descending": (TEXT.replace("900,", "200,"), "ascend, but 200 in row 3 follows 300"),
    "one row": (
        f"{FIRST_LINE}\nredshift,a\n1,1\ncovariance,a\na,1\n",
        "1 redshifts, allowed are 2 to 5000",
    ),
    "no rows": (f"{FIRST_LINE}\nredshift,a\ncovariance,a\na,1\n", "0 redshifts, allowed"),
    "negative redshift": (TEXT.replace("100,", "-100,"), "redshift runs from -100 to 1500"),
    "no names": (f"{FIRST_LINE}\nredshift\n1\n2\ncovariance\n", "names = (): "),
    "bad name": (TEXT.replace("two", "t w o"), 'name "t w o" may hold letters, digits and _ only'),
    "same name": (TEXT.replace("two", "one"), '"one" is named twice'),
    "asymmetric": (TEXT.replace("two, 1, 9", "two, 2, 9"), "not symmetric in row 1, column 2"),
    "negative variance": (TEXT.replace("two, 1, 9", "two, 1, -9"), "variance -9 in row 2"),
    "indefinite": (
        TEXT.replace("one, 4, 1", "one, 4, 7").replace("two, 1, 9", "two, 7, 9"),
        "not positive definite",
    ),
    "large kernel": (TEXT.replace("300, 2", "300, 2e51"), "kernel 2e+51 in row 2, column 1: allow"),
    "large variance": (TEXT.replace("one, 4", "one, 4e100"), "variance 4e+100 in row 1: allowed"),
    "small variance": (TEXT.replace("two, 1, 9", "two, 1, 9e-101"), "allowed are 1e-100 to 1e+100"),
    "close to singular": (
        TEXT.replace("one, 4, 1", "one, 4, 5.9999999999").replace(
            "two, 1, 9", "two, 5.9999999999, 9"
        ),
        "eigenvalue of its correlation matrix is 1.7e-11, at least 1e-10 is needed",
    ),
    "singular": (
        TEXT.replace("one, 4, 1", "one, 4, 6").replace("two, 1, 9", "two, 6, 9"),
        "not positive definite",
    ),
}


@pytest.mark.parametrize("name", sorted(WRONG_FILES))
def test_wrong_files(name: str, tmp_path: Path) -> None:
    text, complaint = WRONG_FILES[name]
    path = tmp_path / "kernels.csv"
    path.write_bytes(text.encode("latin-1"))
    with pytest.raises(InputError) as caught:
        read_response(path)
    assert str(caught.value).startswith(f"{path}: ")
    assert complaint in str(caught.value)
    assert "\n" not in str(caught.value)


def test_files_that_cannot_be_read(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    for path in (tmp_path / "none.csv", tmp_path, "a\0b"):
        with pytest.raises(InputError, match="cannot be read: "):
            read_response(path)
    monkeypatch.setattr("levelnet.studies.response._MAX_BYTES", 10)
    (tmp_path / "large.csv").write_text(TEXT)
    with pytest.raises(InputError, match="over 10 bytes"):
        read_response(tmp_path / "large.csv")


@pytest.mark.parametrize(
    ("change", "complaint"),
    [
        ({"kernels": KERNELS[:3]}, "kernels has 3 rows, 4 are needed"),
        ({"kernels": (*KERNELS[:3], (1.0,))}, "kernels, row 4: 1 numbers, 2 are needed"),
        ({"covariance": ((1.0, 0.0),)}, "covariance has 1 rows, 2 are needed"),
        ({"kernels": (*KERNELS[:3], (1.0, math.nan))}, "should be a finite number"),
        ({"redshift": (1.0, 2.0, 3.0, 10_001.0)}, "10000 or below"),
        ({"redshift": tuple(range(6000))}, "6000 redshifts, allowed are 2 to 5000"),
        ({"names": tuple(f"o{k}" for k in range(101))}, "101 observables, allowed are 1 to 100"),
    ],
)
def test_wrong_records(change: dict[str, Any], complaint: str) -> None:
    values = {"names": NAMES, "redshift": REDSHIFT, "kernels": KERNELS, "covariance": COVARIANCE}
    with pytest.raises(InputError, match=complaint):
        Response(**values | change)


def test_response_of_the_demo_follows_its_rule() -> None:
    with files("levelnet.cli").joinpath("demo-response.csv").open() as stream:
        path = Path(stream.name)
    demo = read_response(path)
    z = np.array(demo.redshift)
    even = np.expm1(np.linspace(math.log(81.0), math.log(1401.0), 120))
    np.testing.assert_allclose(z, np.round(even, 1), atol=1e-9)
    early, late = np.log((1.0 + z) / 1091.0) / 0.25, np.log((1.0 + z) / 151.0) / 0.6
    expected = np.stack(
        [np.cos(0.5 * np.pi * early) ** 2, np.sin(np.pi * early), np.cos(0.5 * np.pi * late) ** 2]
    )
    expected[:2, np.abs(early) > 1.0] = expected[2, np.abs(late) > 1.0] = 0.0
    np.testing.assert_allclose(np.array(demo.kernels).T, expected, atol=5.1e-7)
    spread = np.array([1e-3, 1e-3, 4e-3])
    correlation = np.array(demo.covariance) / np.outer(spread, spread)
    np.testing.assert_allclose(
        correlation, [[1.0, 0.3, 0.0], [0.3, 1.0, 0.1], [0.0, 0.1, 1.0]], rtol=1e-12
    )
