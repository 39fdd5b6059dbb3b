# %% [markdown]
"""Is Sobolev's treatment of the Lyman lines good enough? Cosmology and instrument are INVENTED.

Every treatment is held against the radiation field resolved in frequency. Atom and frequency grid
are coarse here, to be quick.
"""

# %% A setup
import levelnet

setup = levelnet.Setup(
    title="INVENTED: lines for the Tarnholt Array",
    cosmology=levelnet.Cosmology(
        hubble_km_s_mpc=68.0, baryon_density_h2=0.0224, matter_density_h2=0.142
    ),
    hydrogen={"n_max": 4},
    grid={"redshift_start": 1600.0, "redshift_end": 600.0, "n_redshifts": 20},
    lines={"hydrogen": "transfer", "lyman_lines": 3, "transfer": {"frequency_step": 1e-3}},
    accuracy={"relative": 1e-4},
)

# %% Every treatment, and every switch of the field
study = levelnet.escape_study(setup)
print(study)
study

# %% What is enough for one per cent?
from levelnet.studies.escape_notes import verdict_texts
from levelnet.studies.escape_verdict import escape_verdict

found = escape_verdict(study, within=1e-2, low=600.0, high=1600.0)
print("\n".join(verdict_texts(study, found)))

# %% What is behind it; what the study holds is also an xarray Dataset (study.to_xarray())
levelnet.plot(study)

# %%
levelnet.plot(study, "switches")
