"""What a user asks of a history: errors allowed on observables and ranges, and a response."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Literal

import numpy as np
from pydantic import BeforeValidator, Field

from ..arrays import FloatArray
from ..errors import InputError
from ..records import TUPLES, build, checked_record, from_mapping
from ..texts import MOST_TOML, parse_toml, read_text
from .response import Response, read_response
from .targets import parse_target

Error = Annotated[float, Field(gt=0.0, le=1.0)]
Redshift = Annotated[float, Field(ge=0.0, le=10_000.0)]
_MOST_RANGES = 100


def _few_ranges(value: object) -> object:
    if isinstance(value, list | tuple) and len(value) > _MOST_RANGES:
        raise ValueError(f"{len(value)} ranges, at most {_MOST_RANGES} are allowed")
    return tuple(value) if isinstance(value, list) else value


@checked_record
class Range:
    """Largest relative error allowed over a range of redshift.

    Parameters
    ----------
    quantity : str
        "x_e" or "T_m".
    redshift : tuple of float, 0 to 10000 (dimensionless)
        Lower and upper end.
    relative : float, above 0 to 1 (dimensionless)
        Error allowed.
    """

    quantity: Literal["x_e", "T_m"]
    redshift: Annotated[tuple[Redshift, Redshift], TUPLES]
    relative: Error

    def __post_init__(self) -> None:
        """Check that the range ascends."""
        if not self.redshift[0] < self.redshift[1]:
            raise ValueError(f"redshift = [{self.redshift[0]:g}, {self.redshift[1]:g}] must ascend")

    @property
    def name(self) -> str:
        """Name in tables: "x_e(200 to 1600)"."""
        return f"{self.quantity}({self.redshift[0]:g} to {self.redshift[1]:g})"


@checked_record
class ResponseLimit:
    """Largest change that an experiment may see.

    Parameters
    ----------
    limit_sigma : float, above 0 to 100 (dimensionless)
        In standard deviations of the experiment.
    rows : Response
        Its kernels and covariance. A requirement file may name a `file` instead, which is read at
        once, so that every result carries its response.
    """

    limit_sigma: Annotated[float, Field(gt=0.0, le=100.0)]
    rows: Annotated[Response, from_mapping(Response)]


@checked_record
class Requirement:
    """What is asked of a history; at least one of the three parts.

    Parameters
    ----------
    title : str
        Any text.
    observables : dict of str to float, above 0 to 1 (dimensionless)
        Relative error allowed on each target, by its canonical name; aliases become that.
    ranges : tuple of Range
        Errors allowed over ranges.
    response : ResponseLimit or None
        What an experiment may see.

    Raises
    ------
    InputError
        If an observable is unknown or asked twice, a limit is out of range, or nothing is asked.
    """

    title: str = ""
    observables: dict[str, Error] = dataclasses.field(default_factory=dict)
    ranges: Annotated[
        tuple[Annotated[Range, from_mapping(Range)], ...], BeforeValidator(_few_ranges)
    ] = ()
    response: Annotated[ResponseLimit, from_mapping(ResponseLimit)] | None = None

    def __post_init__(self) -> None:
        """Check the observables and give them their canonical names."""
        named: dict[str, float] = {}
        for text, limit in self.observables.items():
            target = parse_target(text)
            if target.kind == "line":
                raise ValueError(f"observables: {target.name}: a line has no place here")
            if target.name in named:
                raise ValueError(f"observables: {target.name} is asked twice")
            named[target.name] = limit
        object.__setattr__(self, "observables", named)
        if not named and not self.ranges and self.response is None:
            raise ValueError("nothing is asked: [observables], [[ranges]] or [response] is needed")

    @property
    def targets(self) -> tuple[str, ...]:
        """Canonical names of the observables."""
        return tuple(self.observables)

    def to_toml(self) -> str:
        """Write TOML text, the response within; :func:`parse_requirement` gives it back equal."""
        import tomli_w

        values = dataclasses.asdict(self)
        kept = {key: value for key, value in values.items() if value not in (None, {}, (), "")}
        return tomli_w.dumps(kept)


@dataclass(frozen=True, slots=True)
class Finding:
    """One demand of a requirement, and whether it is met.

    Attributes
    ----------
    name : str
        Canonical name of a target, "x_e(200 to 1600)", or "response".
    error, limit : float, in `unit`
        What is there, never negative, and what is allowed.
    unit : str
        "relative" or "sigma".
    passed : bool
        error <= limit; False where the error is not known (NaN).
    """

    name: str
    error: float
    limit: float
    unit: str
    passed: bool


def check(
    requirement: Requirement,
    redshift: FloatArray,
    delta_ln_x_e: FloatArray,
    delta_ln_t_m: FloatArray,
    observable_error: Mapping[str, float],
) -> tuple[Finding, ...]:
    """Hold the errors of a history against a requirement.

    Parameters
    ----------
    requirement : Requirement
        What is asked.
    redshift : ndarray, shape (n,), dimensionless
        Two or more, in either order; they must cover all that is asked.
    delta_ln_x_e, delta_ln_t_m : ndarray, shape (n,), dimensionless
        Errors of ln x_e and ln T_m there, with their signs.
    observable_error : mapping of str to float, dimensionless
        Relative errors by canonical name. "x_e(Z)" and "T_m(Z)" that are not in it are read off a
        cubic spline of the two arrays.

    Returns
    -------
    tuple of Finding
        Observables, ranges, response, in the order of the requirement.

    Raises
    ------
    InputError
        If the redshifts do not cover what is asked, or an error is missing.
    """
    order = np.argsort(redshift)
    z = np.asarray(redshift, dtype=float)[order]
    deltas = {"x_e": delta_ln_x_e[order], "T_m": delta_ln_t_m[order]}
    found = [
        _finding(name, _observable_error(name, z, deltas, observable_error), limit, "relative")
        for name, limit in requirement.observables.items()
    ]
    for one in requirement.ranges:
        error = _largest(one, z, deltas[one.quantity])
        found.append(_finding(one.name, error, one.relative, "relative"))
    if requirement.response is not None:
        sigma = requirement.response.rows.sigma(z, deltas["x_e"])
        found.append(_finding("response", sigma, requirement.response.limit_sigma, "sigma"))
    return tuple(found)


def _finding(name: str, error: float, limit: float, unit: str) -> Finding:
    return Finding(name, error, limit, unit, error <= limit)


def _observable_error(
    name: str, z: FloatArray, deltas: Mapping[str, FloatArray], known: Mapping[str, float]
) -> float:
    if name in known:
        return abs(float(known[name]))
    target = parse_target(name)
    if target.kind not in deltas:
        raise InputError(f"requirement: the error of {name} is needed and was not computed")
    return abs(float(_between(name, z, deltas[target.kind], np.array([target.redshift]))[0]))


def _largest(asked: Range, z: FloatArray, delta: FloatArray) -> float:
    """Largest error at the redshifts inside, and at both ends of the range."""
    low, high = asked.redshift
    ends = _between(asked.name, z, delta, np.array([low, high]))
    inside = delta[(z >= low) & (z <= high)]
    return float(np.max(np.abs(np.concatenate([ends, inside]))))


def _between(name: str, z: FloatArray, delta: FloatArray, at: FloatArray) -> FloatArray:
    from scipy.interpolate import CubicSpline

    if at[0] < z[0] or at[-1] > z[-1]:
        raise InputError(
            f"requirement: {name} lies outside the redshifts of the study, {z[0]:g} to {z[-1]:g}"
        )
    return np.asarray(CubicSpline(np.log1p(z), delta)(np.log1p(at)))


def parse_requirement(
    text: str, where: str = "requirement", folder: str | Path | None = "."
) -> Requirement:
    """Read a requirement from TOML text; a response file is looked for in `folder`.

    Where `folder` is None the text must hold the response itself: no other file is opened.

    Raises
    ------
    InputError
        If the text is not TOML, a key is unknown or a value wrong; all complaints with their paths.
    """
    values = parse_toml(text, where)
    try:
        if folder is not None and isinstance(values.get("response"), dict):
            values["response"] = _with_rows(values["response"], Path(folder))
        return build(Requirement, values)
    except InputError as error:
        raise InputError(f"{where}: {error}") from None


def _with_rows(response: dict[str, Any], folder: Path) -> dict[str, Any]:
    """Put the rows of a response file in the place of its name."""
    file, sha256 = response.pop("file", None), response.pop("sha256", None)
    if file is None and sha256 is None and "rows" in response:
        return response
    if file is None:
        raise InputError("response.file: missing")
    if not isinstance(file, str) or not isinstance(sha256, (str, type(None))):
        raise InputError("response: file, and sha256 where it is given, must be text")
    if "rows" in response:
        raise InputError("response: file and rows: give one of them, not both")
    return response | {"rows": dataclasses.asdict(read_response(folder / file, sha256))}


def load_requirement(path: str | Path) -> Requirement:
    """Read a requirement file.

    Parameters
    ----------
    path : str or Path
        A TOML file. A response file named in it is relative to its folder.

    Returns
    -------
    Requirement
        What is asked, the response within.

    Raises
    ------
    InputError
        If a file cannot be read or any key is unknown, missing, of the wrong type or out of range.
    """
    text = read_text(path, MOST_TOML)
    return parse_requirement(text, str(path), Path(path).parent)
