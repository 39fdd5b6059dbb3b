"""What a run will take, estimated before it starts."""

from __future__ import annotations

import math
from dataclasses import dataclass

from ..atomic.physics import scales
from ..errors import InputError
from ..network.assembly import COLD_K
from ..network.tabulation import node_count
from .setup import Setup

# Measured on one core of a 2 GHz-class x86-64 server: sustained rate of the factorization for large
# blocks, and the overhead per block and per evaluation. Good to a factor of two or three.
_FLOP_PER_S = 4.0e10
_SECONDS_PER_BLOCK = 6e-5
_SECONDS_PER_EVALUATION = 2.5e-4
_SECONDS_PER_BORDER_LINE = 1e-8
_EVALUATIONS = 4000
# Of a resolved field: one cell in one step, and so much again for each level that acts in it.
# Measured with 3 to 17 levels: 2.1e-8 to 1.4e-7, within a third of this.
_SECONDS_PER_CELL = 7e-9
_WITH_COARSER = 1.25  # with the run on a grid twice as coarse that tells the error
_FIELD_START = 1900.0  # about where a field is first resolved, 1 + z
_RESERVE_BYTES = 3e8
# Arrays over shells and resolved levels alive at once: strengths, rates, response, work space.
_BORDERS = 6.0
# Of helium: bytes per n^2 of its cross sections and of what is made of them at one T_r, seconds of
# its cross sections, of one reduction of He I (per n^3), and of its levels in each evaluation, with
# hydrogen inside the lines and without. Measured likewise, n = 10 to 60.
_HELIUM_BYTES = 8e3
_HELIUM_ATOM_S, _HELIUM_NODE_S, _HELIUM_PER_CUBE_S = 1.5, 1e-3, 1.6e-7
_HELIUM_EVALUATION_S, _CONTINUUM_EVALUATION_S = 2.5e-4, 7e-4
_HELIUM_RANGE_K = 1400.0, 27_600.0


@dataclass(frozen=True, slots=True)
class Cost:
    """Estimated cost of one run.

    Attributes
    ----------
    memory_bytes : float
        Largest memory in use.
    seconds : float, s
        Time on one core, to a factor of two or three.
    """

    memory_bytes: float
    seconds: float


def estimate(
    setup: Setup,
    populations: int | None = None,
    reduced: bool = False,
    coldest_k: float | None = None,
) -> Cost:
    """Estimate memory and time of a run from its sizes.

    `populations` is the number of redshifts at which every level is solved for, all outputs by
    default; `reduced` says that the reduced network is there already; `coldest_k` is the lowest
    T_r of a reduction, that of the last output by default.

    Cubes of n_max^3/3 numbers (line strengths, couplings, and triangles of half as many; below the
    coldest T_r of the symmetric form three and a half instead of the last two), the cross sections,
    and the populations at every output redshift. With whole shells, the strengths of every line are
    needed still, to be averaged; the cubes of what is resolved, and the border, come on top.
    Overrides of rates take a copy of the strengths. Helium, where it recombines, adds its own: He I
    with two ladders, He II like hydrogen; its tables are made even where hydrogen is reduced at
    each evaluation.
    """
    n, top = setup.hydrogen.n_max, setup.hydrogen.highest_resolved
    n_out = len(setup.grid.redshifts or ()) or setup.grid.n_redshifts
    border = (n - top) * top**2 / 2.0
    copies = 2.0 if setup.rates.network else 1.0
    low = setup.cosmology.cmb_temperature_k * (1.0 + setup.grid.redshift_end)
    coldest_k = coldest_reduction_k(setup) if coldest_k is None else coldest_k
    factored = 3.5 if coldest_k < COLD_K else 1.5
    cubes = 8.0 * (copies * n**3 + (factored + (top < n)) * top**3) / 3.0
    cubes += _BORDERS * 8.0 * border
    # Of He I and He II: both spins, and half as many.
    helium = 1.5 * setup.helium.n_max**2 * setup.helium_recombines
    solved = n_out if populations is None else populations
    levels = 5 * 8.0 * solved * (top**2 / 2.0 + n - top + helium)
    more_bytes, more_s = _of_helium(setup, solved, reduced)
    memory = cubes + 400.0 * n**2 + levels + more_bytes + _RESERVE_BYTES
    tabulated = setup.accuracy.interpolate and not reduced
    nodes = node_count(low, 6000.0, table_tolerance(setup)) + 7 if tabulated else 0
    node = node_seconds(setup)
    evaluation = _SECONDS_PER_EVALUATION if setup.accuracy.interpolate else 5.0 * node
    seconds = (nodes + solved) * node + _EVALUATIONS * evaluation + 1e-8 * n**3
    return Cost(memory, seconds + more_s + _field_seconds(setup))


def coldest_reduction_k(setup: Setup) -> float:
    """Lowest T_r at which a history reduces its network, for the measured constants, in K."""
    last = float(setup.cosmology.radiation_temperature_k(setup.grid.redshift_end))
    return lattice_below_k(last / scales(setup.physics).energy)


def lattice_below_k(temperature_k: float) -> float:
    """Round down to the lattice that runs of one atom share, whatever their universe, in K."""
    return float(2.0 ** (math.floor(4.0 * math.log2(temperature_k)) / 4.0))


def _of_helium(setup: Setup, solved: int, reduced: bool) -> tuple[float, float]:
    """Bytes and seconds that helium adds, populations apart; nothing where it is inert."""
    if not setup.helium_recombines:
        return 0.0, 0.0
    n = float(setup.helium.n_max)
    # Strengths, rates and factors of two spins, and of He II.
    memory = 8.0 * 4.0 * 3.0 * n**3 / 3.0 + _HELIUM_BYTES * n**2
    nodes = 0 if reduced else node_count(*_HELIUM_RANGE_K, table_tolerance(setup)) + 7
    node = _HELIUM_NODE_S + _HELIUM_PER_CUBE_S * n**3
    if setup.helium.helium_ion == "network":
        node += 7.0 / 12.0 * n**4 / _FLOP_PER_S + _SECONDS_PER_BLOCK * n
    absorbs = setup.lines.helium == "continuum"
    evaluation = _CONTINUUM_EVALUATION_S if absorbs else _HELIUM_EVALUATION_S
    return memory, _HELIUM_ATOM_S + (nodes + solved) * node + _EVALUATIONS * evaluation


def node_seconds(setup: Setup) -> float:
    """Estimate the time of one reduction, or of the populations at one redshift, in s."""
    n, top = setup.hydrogen.n_max, setup.hydrogen.highest_resolved
    node = 7.0 / 12.0 * top**4 / _FLOP_PER_S + 3.0 * top**3 / 1e9 + _SECONDS_PER_BLOCK * top
    return node + _border_seconds(top, n - top)


def _field_seconds(setup: Setup) -> float:
    """Time of a resolved field: every cell at every step of time, both as wide in the logarithm."""
    if setup.lines.transfer is None:
        return 0.0
    cells = math.log(8.0 / 3.0) / setup.frequency_step
    steps = math.log(_FIELD_START / (1.0 + setup.grid.redshift_end)) / setup.frequency_step
    levels = len(setup.lines.field_levels)
    return _WITH_COARSER * march_seconds(cells, levels, max(steps, 0.0))


def march_seconds(n_cells: float, n_levels: int, n_steps: float) -> float:
    """Estimate the time of one march of a resolved field, in s; `n_levels` act in its cells."""
    return _SECONDS_PER_CELL * (1 + n_levels) * n_cells * n_steps


def _border_seconds(top: int, n_shells: int) -> float:
    """Time of the border at one T_r: assembly, one right side for each shell, the corner."""
    flop = 2.0 * n_shells * top**3 + n_shells**2 * top**2 + n_shells**3 / 3.0
    return flop / _FLOP_PER_S + n_shells * top**2 / 2.0 * _SECONDS_PER_BORDER_LINE


def table_tolerance(setup: Setup) -> float:
    """Error allowed in the ln of any reduced rate: a hundredth of what the history may have."""
    return max(0.01 * setup.accuracy.relative, 1e-11)


def check_memory(
    setup: Setup,
    copies: int = 1,
    more_bytes: float = 0.0,
    populations: int | None = None,
    coldest_k: float | None = None,
) -> Cost:
    """Estimate the cost; InputError with the figure if it cannot fit.

    With `copies` worker processes, each of which holds an atom of its own, all must fit at once;
    `more_bytes` is what else the caller will hold, `populations` and `coldest_k` as for
    :func:`estimate`.
    """
    if copies < 1:
        raise InputError(f"workers = {copies}: at least 1 is needed")
    cost = estimate(setup, populations, coldest_k=coldest_k)
    cost = Cost(cost.memory_bytes + more_bytes, cost.seconds)
    check_fits(setup, copies * cost.memory_bytes, copies)
    return cost


def check_fits(setup: Setup, needed_bytes: float, workers: int = 1) -> None:
    """Raise InputError, with the figure, if so much memory is not there.

    Parameters
    ----------
    setup : Setup
        That of the largest atom.
    needed_bytes : float, bytes
        What all worker processes take together.
    workers : int
        How many these are.
    """
    available = available_memory_bytes()
    by = f" by {workers} workers" if workers > 1 else ""
    if needed_bytes > available:
        asked = f"hydrogen.n_max = {setup.hydrogen.n_max}"
        if setup.helium_recombines:
            asked += f", helium.n_max = {setup.helium.n_max}"
        raise InputError(
            f"{asked}: about {_readable(needed_bytes)} of memory needed{by}, "
            f"{_readable(available)} available"
        )


def available_memory_bytes() -> float:
    """Memory this process may still take, by the system and by the limits of a container."""
    limits = [_from_proc()]
    for folder, limit, used in (
        ("/sys/fs/cgroup", "memory.max", "memory.current"),
        ("/sys/fs/cgroup/memory", "memory.limit_in_bytes", "memory.usage_in_bytes"),
    ):
        try:
            limits.append(_number(f"{folder}/{limit}") - _number(f"{folder}/{used}"))
        except (OSError, ValueError):  # no such limit, or "max"
            continue
    return min(limits)


def _from_proc() -> float:
    """Memory available by the kernel's own estimate; infinite where it does not say."""
    try:
        with open("/proc/meminfo", encoding="ascii") as file:
            for line in file:
                if line.startswith("MemAvailable:"):
                    return float(line.split()[1]) * 1024.0
    except OSError:
        pass
    return math.inf


def _number(path: str) -> float:
    with open(path, encoding="ascii") as file:
        return float(file.read())


def _readable(size: float) -> str:
    """Size in the unit that keeps one to three digits before the point."""
    for unit in ("bytes", "kB", "MB", "GB"):
        if size < 1000.0:
            return f"{size:.3g} {unit}"
        size /= 1000.0
    return f"{size:.3g} TB"
