"""What a run says about the recombination of helium beyond its fractions and populations."""

from __future__ import annotations

from dataclasses import dataclass

from ..arrays import FloatArray, frozen_array


@dataclass(frozen=True, slots=True, eq=False)
class HeliumFigures:
    """Recombination of He II to He I: how, through which lines, and how exactly.

    Rates and figures are NaN where helium is held as it is (T_r below 1400 K).

    Attributes
    ----------
    channels : tuple of str
        Terms that talk to the ground state, and it: "2 1S-1 1S" (two photons), "2 3P-1 1S", ...
    net_rate_per_s : ndarray, shape (n_redshift, n_channels), s^-1
        Net transitions to the ground state per hydrogen nucleus.
    lines : tuple of str
        Lines to the ground state; "2 3P1-1 1S" and "2 3P2-1 1S" leave from the same term.
    optical_depth, escape_probability : ndarray, shape (n_redshift, n_lines), dimensionless
        As the line treatment says; NaN where it does not.
    handover_departure, handover_ion_departure : float, dimensionless
        Relative lags of x_HeI and of x_HeII/x_HeIII behind Saha equilibrium where the integration
        starts.
    nodes : int
        Reductions of He I and He II.
    interpolation_error : float, dimensionless
        Largest error off the nodes of the ln of any reduced rate.
    conservation_error : float, dimensionless
        Largest relative imbalance of the populations at the output redshifts.
    closure_error : float, dimensionless
        Largest miss in any sum of fractions of hydrogen and of helium nuclei, and, over x_e, in the
        charge.
    """

    channels: tuple[str, ...]
    net_rate_per_s: FloatArray
    lines: tuple[str, ...]
    optical_depth: FloatArray
    escape_probability: FloatArray
    handover_departure: float
    handover_ion_departure: float
    nodes: int
    interpolation_error: float
    conservation_error: float
    closure_error: float

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        rows = len(self.net_rate_per_s)
        frozen_array(self, "net_rate_per_s", (rows, len(self.channels)))
        for name in ("optical_depth", "escape_probability"):
            frozen_array(self, name, (rows, len(self.lines)))
