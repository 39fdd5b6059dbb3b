"""How far a line treatment can be trusted: its figures per line and redshift."""

from __future__ import annotations

from dataclasses import dataclass

from ..arrays import FloatArray, frozen_array


@dataclass(frozen=True, slots=True, eq=False)
class LineFigures:
    """Validity figures of the line-escape treatment; every array (n_redshift, n_lines).

    All are dimensionless. Widths and places are frequency differences over the frequency of the
    line. What a treatment of one's own leaves open is NaN.

    Attributes
    ----------
    names : tuple of str
        The lines: "2p-1s" (Lyman-alpha), "3p-1s", ...
    optical_depth : ndarray
        Sobolev optical depth.
    escape_probability : ndarray
        Chance that a photon of the line escapes, as the treatment has it; in a field resolved in
        frequency that of its one cell, as if alone (Sobolev).
    share : ndarray
        Part of the net flow to the ground state; with 2s-1s, and whatever other level the treatment
        sends down, the shares sum to 1.
    flow_response : ndarray
        d ln(net flow to the ground state)/d ln(escape of the line) at fixed conditions: the share
        times the chance that an atom kept back would be ionized again. What an error of the line
        does to the net flow.
    damping_parameter : ndarray
        Voigt parameter: total decay rate over 4 pi times the Doppler width.
    thick_width_scattering : ndarray
        Width in which the line is optically thick to scattering (the same number is the time to
        redshift across it in Hubble times). Wings scatter coherently and neither make nor destroy
        photons, so values above 1 do not by themselves spoil a treatment.
    thick_width_absorption : ndarray
        The same for true absorption: scattering times `absorption_chance`. Complete redistribution
        asks it to be far below 1.
    absorption_chance : ndarray
        Chance that an atom which has taken a line photon goes anywhere but back to the ground
        state: that the photon is truly absorbed rather than scattered.
    absorption_edge : ndarray
        Where the Lorentz wing, from far away, has reached depth 1 of true absorption. Below the
        Doppler width the wing does not matter.
    source_slope : ndarray
        d ln/d ln a of the source function of the line over the blackbody at T_r, stimulated
        emission left out; a field that only redshifts keeps that ratio.
    source_change : ndarray
        thick_width_absorption times abs(source_slope): by how much the source function changes
        while photons cross the thick region. A steady treatment is off by that order.
    recoil_gain : ndarray
        Relative gain of escape by recoil in wings that scatter, to first order; small where true
        absorption comes first.
    log_blue_side, log_red_side : ndarray
        ln u on either side of the line, u the photon occupation over that of the blackbody at T_r.
    unseen_feedback : ndarray
        What the next open line above sends down and the treatment leaves out, over what drives the
        net flow of this line; 0 where the treatment feeds the line.

    Notes
    -----
    In a field resolved in frequency a line is one cell, and its share what crosses it: where
    two-photon wings take over, shares of a line and of the s and d levels that share its wings
    depend on the step one by one (not x_e, nor their sum).
    """

    names: tuple[str, ...]
    optical_depth: FloatArray
    escape_probability: FloatArray
    share: FloatArray
    flow_response: FloatArray
    damping_parameter: FloatArray
    thick_width_scattering: FloatArray
    thick_width_absorption: FloatArray
    absorption_chance: FloatArray
    absorption_edge: FloatArray
    source_slope: FloatArray
    source_change: FloatArray
    recoil_gain: FloatArray
    log_blue_side: FloatArray
    log_red_side: FloatArray
    unseen_feedback: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        shape = (len(self.optical_depth), len(self.names))
        for name in self.__slots__[1:]:
            frozen_array(self, name, shape)
