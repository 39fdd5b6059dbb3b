# %% [markdown]
"""From thousands of levels to a millisecond. Cosmology and the Tarnholt Array are INVENTED.

The atom of a setup is distilled once to a table of effective rates with a certificate of its error;
from then on each history takes milliseconds. The atom here is small, to be quick.
"""

# %% The atom
import levelnet

universe = levelnet.Cosmology(
    hubble_km_s_mpc=68.0, baryon_density_h2=0.0224, matter_density_h2=0.142
)
setup = levelnet.Setup(
    title="INVENTED: an atom for the Tarnholt Array", cosmology=universe, hydrogen={"n_max": 6}
)

# %% The table, and what it is good for
table = levelnet.distill(setup, tolerance=1e-6)
assert table.certificate is not None
print(f"rates are right to {table.certificate.largest_rate_error:.1e}")
print(f"x_e(z) is right to {table.certificate.largest_history_error.max():.1e}")
table

# %% A history from it, with derivatives by the cosmology
fast = levelnet.history_from_table(table, universe, sensitivities=True)
assert fast.observables is not None and fast.sensitivities is not None
print(f"z_* = {fast.observables.last_scattering_redshift:.2f}")
place = fast.sensitivities.parameters.index("baryon_density_h2")
slope = fast.sensitivities.last_scattering_redshift[place]
print(f"d z_* / d(omega_b) = {slope:.0f}")
fast

# %% Many cosmologies
import dataclasses

universes = [
    dataclasses.replace(universe, baryon_density_h2=density) for density in (0.022, 0.0224, 0.0228)
]
for one in universes:
    made = levelnet.history_from_table(table, one)
    print(f"{one.baryon_density_h2:g}: x_e = {made.free_electron_fraction[-1]:.4e} at the end")

# %% The figures; savefig writes them
levelnet.plot(fast)

# %%
levelnet.plot(table, "certificate")
