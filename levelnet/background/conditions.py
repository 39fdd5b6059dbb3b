"""Everything a rate may depend on at one redshift."""

from typing import NamedTuple


class Conditions(NamedTuple):
    """Local conditions of the plasma.

    Attributes
    ----------
    radiation_temperature_k, matter_temperature_k : float, K
        Temperatures.
    hydrogen_density_cm3 : float, cm^-3
        All hydrogen nuclei.
    hubble_rate_per_s : float, s^-1
        Expansion rate.
    electron_fraction, ionized_fraction, ground_fraction : float, dimensionless
        n_e, n_HII and hydrogen atoms in 1s, per hydrogen nucleus.
    """

    radiation_temperature_k: float
    matter_temperature_k: float
    hydrogen_density_cm3: float
    hubble_rate_per_s: float
    electron_fraction: float
    ionized_fraction: float
    ground_fraction: float
