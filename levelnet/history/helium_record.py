"""What a run says about the recombination of helium beyond its fractions and populations."""

from __future__ import annotations

from dataclasses import dataclass

from ..arrays import FloatArray, frozen_array


@dataclass(frozen=True, slots=True, eq=False)
class HeliumLineFigures:
    """Validity figures of the lines of He I; every array (n_redshift, n_lines), dimensionless.

    Widths are frequency differences over the frequency of the line; the same number is the time to
    redshift across them in Hubble times. NaN where helium is held as it is (T_r below 1400 K).

    Attributes
    ----------
    names : tuple of str
        Lines to the ground state; "2 3P1-1 1S" and "2 3P2-1 1S" leave from the same term.
    optical_depth, escape_probability : ndarray
        Sobolev depth; escape as the treatment has it.
    share : ndarray
        Part of the net flow to the ground state; with the two photons of 2 1S they sum to 1.
    flow_response : ndarray
        d ln(net flow to the ground state)/d ln(escape of the line) at fixed conditions.
    damping_parameter : ndarray
        Voigt parameter of the natural width.
    incoherent_fraction : ndarray
        Chance that an atom which has taken a line photon goes to another level than the ground
        state: that the photon is lost rather than scattered.
    thick_width_scattering, thick_width_absorption : ndarray
        Width that is thick to scattering, and to incoherent absorption; one Doppler width either
        side of the centre at least.
    continuum_depth : ndarray
        Depth of the H I continuum per ln nu, n_HI sigma c/H, at the line.
    continuum_in_core, continuum_in_line : ndarray
        That times the Doppler width, and times `thick_width_absorption`: absorption by hydrogen
        while a photon crosses the line. Sobolev's treatment asks the second to be far below 1.
    escape_change : ndarray
        Escape with the continuum, partial redistribution and diffusion, at the same conditions,
        over that of the treatment, less 1.
    log_blue_side, log_red_side : ndarray
        ln u on either side of the line, u the photon occupation over that of the blackbody at T_r.
    unseen_feedback : ndarray
        What the next line above sends down, less what hydrogen takes of it, and the treatment
        leaves out, over what drives the net flow of this line; 0 where it is fed.
    escape_error, feedback_error : ndarray
        Relative change of x_e that `escape_change`, and `unseen_feedback`, of this line has made
        down to this redshift: a linear estimate (:mod:`levelnet.history.helium_limits`).
    """

    names: tuple[str, ...]
    optical_depth: FloatArray
    escape_probability: FloatArray
    share: FloatArray
    flow_response: FloatArray
    damping_parameter: FloatArray
    incoherent_fraction: FloatArray
    thick_width_scattering: FloatArray
    thick_width_absorption: FloatArray
    continuum_depth: FloatArray
    continuum_in_core: FloatArray
    continuum_in_line: FloatArray
    escape_change: FloatArray
    log_blue_side: FloatArray
    log_red_side: FloatArray
    unseen_feedback: FloatArray
    escape_error: FloatArray
    feedback_error: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        shape = (len(self.optical_depth), len(self.names))
        for name in self.__slots__[1:]:
            frozen_array(self, name, shape)


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
    settling_hubble : ndarray, shape (n_redshift,), dimensionless
        Rate at which a deviation of ln[(x_HeII + x_HeIII)/x_HeI] dies out, over H, all else held.
    lines : HeliumLineFigures
        Lines to the ground state and how far their treatment can be trusted.
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
    settling_hubble: FloatArray
    lines: HeliumLineFigures
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
        frozen_array(self, "settling_hubble", (rows,))
