"""Records of a history from a table, and of its derivatives."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..arrays import FloatArray, frozen_array
from ..errors import Outcome
from ..history.result import RadiationField
from ..history.samples import sample_rows
from ..markup import html_table
from .observables import Observables

if TYPE_CHECKING:
    import xarray


@dataclass(frozen=True, slots=True, eq=False)
class Sensitivities:
    """Derivatives of a history by its parameters; the last axis of each array is the parameter.

    Attributes
    ----------
    parameters : tuple of str
        The six of the cosmology (per unit of each), "fine_structure_change" and
        "electron_mass_change" (per unit relative change), then "ln recombination_2s", ...: per unit
        of the ln of a factor on the rate of that name, see :func:`rate_names`. Of the cosmology,
        what is not varied is held; dark energy closes the budget; a tabulated expansion does not
        move. With levels of helium there are no changes of constants among them.
    free_electron_fraction : ndarray, shape (n_redshift, n_parameters)
        Of x_e at fixed redshift.
    matter_temperature_k : ndarray, shape (n_redshift, n_parameters), K per unit
        Of T_m.
    last_scattering_redshift, sound_horizon_mpc, damping_per_mpc : ndarray, shape (n_parameters,)
        Of z_*, r_s and k_D.
    neutral_helium_fraction, singly_ionized_helium_fraction, doubly_ionized_helium_fraction : \
ndarray, shape (n_redshift, n_parameters), or None
        Of x_HeI, x_HeII and x_HeIII; None: helium is neutral and inert.

    Notes
    -----
    Of hydrogen alone they solve the variational equation. With levels of helium they are central
    differences of histories along the same steps, with lines that remember as they then would.
    Errors were measured with `relative` 1e-6 (1e-7), as parts of the largest derivative over
    redshift: those of x_e and T_m 4e-6 (8e-7), of z_*, r_s and k_D 4e-7 (2e-7), of the fractions of
    helium by the cosmology 2e-5. Those of the fractions by the rates of hydrogen, below 1e-6, err
    by up to 1e-8, those by H_0, below 1e-12, by 1e-4 of the largest (x_HeIII: 2e-2). The
    differences themselves err by 3e-7 in all but these.
    """

    parameters: tuple[str, ...]
    free_electron_fraction: FloatArray
    matter_temperature_k: FloatArray
    last_scattering_redshift: FloatArray
    sound_horizon_mpc: FloatArray
    damping_per_mpc: FloatArray
    neutral_helium_fraction: FloatArray | None = None
    singly_ionized_helium_fraction: FloatArray | None = None
    doubly_ionized_helium_fraction: FloatArray | None = None

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        n = len(self.parameters)
        for name in ("free_electron_fraction", "matter_temperature_k"):
            frozen_array(self, name, (len(self.free_electron_fraction), n))
        for name in FastHelium.__slots__:
            if getattr(self, name) is not None:
                frozen_array(self, name, (len(self.free_electron_fraction), n))
        for name in ("last_scattering_redshift", "sound_horizon_mpc", "damping_per_mpc"):
            frozen_array(self, name, (n,))


@dataclass(frozen=True, slots=True, eq=False)
class FastHelium:
    """Fractions of the helium nuclei, each to full relative precision; shape (n_redshift,).

    Attributes
    ----------
    neutral_helium_fraction, singly_ionized_helium_fraction, doubly_ionized_helium_fraction : \
ndarray, dimensionless
        x_HeI, x_HeII and x_HeIII; their sum is 1.
    """

    neutral_helium_fraction: FloatArray
    singly_ionized_helium_fraction: FloatArray
    doubly_ionized_helium_fraction: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        shape = self.neutral_helium_fraction.shape
        for name in self.__slots__:
            frozen_array(self, name, shape)


@dataclass(frozen=True, slots=True, eq=False)
class FastHistory:
    """A history from a table; arrays of shape (n_redshift,) over descending redshift.

    Attributes
    ----------
    outcome : Outcome
        How it ended.
    redshift : ndarray, dimensionless
        As asked, descending.
    free_electron_fraction : ndarray, dimensionless
        n_e / n_H.
    ionized_hydrogen_fraction, neutral_hydrogen_fraction : ndarray, dimensionless
        n_HII and n_HI over n_H.
    matter_temperature_k, radiation_temperature_k : ndarray, K
        T_m and T_r.
    start_redshift : float, dimensionless
        Where Saha equilibrium was left.
    n_steps, n_rejected : int
        Accepted and rejected steps.
    observables : Observables or None
        z_*, r_s and k_D, where derivatives or they were asked for.
    sensitivities : Sensitivities or None
        Derivatives, where asked for.
    field : RadiationField or None
        The radiation field, where the line treatment resolves it.
    frequency_error : float, dimensionless
        Largest relative change of x_e on a frequency grid twice as coarse; 0 without a field.
    notes : tuple of str
        What the atoms and the line treatments assume and leave out, with published sizes, and how
        the field was counted; limits are judged by :func:`levelnet.solve` alone.
    helium : FastHelium or None
        Fractions of helium, where the table has it; None: neutral and inert. The record itself
        gives them by the same names: 1, 0 and 0 where helium is inert or there is none.
    """

    outcome: Outcome
    redshift: FloatArray
    free_electron_fraction: FloatArray
    ionized_hydrogen_fraction: FloatArray
    neutral_hydrogen_fraction: FloatArray
    matter_temperature_k: FloatArray
    radiation_temperature_k: FloatArray
    start_redshift: float
    n_steps: int
    n_rejected: int
    observables: Observables | None = None
    sensitivities: Sensitivities | None = None
    field: RadiationField | None = None
    frequency_error: float = 0.0
    notes: tuple[str, ...] = ()
    helium: FastHelium | None = None

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        for name in (
            "redshift",
            "free_electron_fraction",
            "ionized_hydrogen_fraction",
            "neutral_hydrogen_fraction",
            "matter_temperature_k",
            "radiation_temperature_k",
        ):
            frozen_array(self, name, (len(self.redshift),))

    @property
    def neutral_helium_fraction(self) -> FloatArray:
        """x_HeI, shape (n_redshift,), dimensionless."""
        if self.helium is None:
            return np.ones(len(self.redshift))
        return self.helium.neutral_helium_fraction

    @property
    def singly_ionized_helium_fraction(self) -> FloatArray:
        """x_HeII, shape (n_redshift,), dimensionless."""
        if self.helium is None:
            return np.zeros(len(self.redshift))
        return self.helium.singly_ionized_helium_fraction

    @property
    def doubly_ionized_helium_fraction(self) -> FloatArray:
        """x_HeIII, shape (n_redshift,), dimensionless."""
        if self.helium is None:
            return np.zeros(len(self.redshift))
        return self.helium.doubly_ionized_helium_fraction

    def to_xarray(self) -> xarray.Dataset:
        """The arrays over redshift as an xarray Dataset (needs the xarray extra).

        Returns
        -------
        xarray.Dataset
            Each array says `units` and `long_name`; the whole says outcome, notes and the version
            of levelnet. The setup is that of the table, which this record does not hold.
        """
        import xarray

        from ..history.labelled import made_by, over_redshift

        names = (
            "redshift",
            "free_electron_fraction",
            "ionized_hydrogen_fraction",
            "neutral_hydrogen_fraction",
            "matter_temperature_k",
            "radiation_temperature_k",
        )
        arrays = over_redshift(self, names)
        if self.helium is not None:
            arrays |= over_redshift(self.helium, FastHelium.__slots__)
        said = {"outcome": self.outcome.value, "notes": "\n".join(self.notes)}
        return xarray.Dataset(arrays, attrs=said | made_by())

    def __repr__(self) -> str:
        """One line: the range, the size, the outcome."""
        return (
            f"<FastHistory z = {self.redshift[0]:g} to {self.redshift[-1]:g}, "
            f"{len(self.redshift)} redshifts, {'hydrogen' if self.helium is None else 'H and He'}: "
            f"{self.outcome.value}>"
        )

    def _repr_html_(self) -> str:
        """Show a small table in a notebook."""
        rows = (
            (
                f"{self.redshift[k]:.1f}",
                f"{self.free_electron_fraction[k]:.6g}",
                f"{self.matter_temperature_k[k]:.6g}",
            )
            for k in sample_rows(self.redshift, "hydrogen" if self.helium is None else "both")
        )
        caption = f"History from effective rates: {self.outcome.value}"
        return html_table(caption, ("z", "x_e", "T_m (K)"), rows)


def fractions(log_odds: FloatArray) -> tuple[FloatArray, FloatArray]:
    """x_HII and x_HI (dimensionless) from u, each to full relative precision."""
    small = np.exp(-np.abs(log_odds))
    large = 1.0 / (1.0 + small)
    small *= large
    hot = log_odds > 0.0
    return np.where(hot, large, small), np.where(hot, small, large)
