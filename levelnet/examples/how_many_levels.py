# %% [markdown]
"""How many levels does an answer need? Cosmology and the Tarnholt Array are INVENTED.

A ladder of short atoms is carried to infinitely many levels, with error bars, and the study says
which n_max is enough. The ladder here is short, to be quick: real ones go to n_max = 100 and more.
"""

# %% A setup: the universe, and what comes out
import levelnet

setup = levelnet.Setup(
    title="INVENTED: a universe for the Tarnholt Array",
    cosmology=levelnet.Cosmology(
        hubble_km_s_mpc=68.0, baryon_density_h2=0.0224, matter_density_h2=0.142
    ),
    hydrogen={"n_max": 16},
    grid={"redshift_start": 1600.0, "redshift_end": 200.0, "n_redshifts": 20},
)

# %% The ladder; any callable(stage, fraction) is told how far it is
stages = []
study = levelnet.level_study(
    setup, rungs=(6, 8, 11, 16), progress=lambda stage, fraction: stages.append(fraction)
)
print(study, f"after {len(stages)} messages")

# %% What is the limit, and how far off is each rung? (the last line of a cell is shown)
limit = study.limit.free_electron_fraction
print(f"x_e at z = {study.redshift[-1]:g}: {limit.value[-1]:.4e} of all levels")
print(f"error bar: {100.0 * limit.relative_error[-1]:.1f} %")
study

# %% Which n_max is enough?
from levelnet.studies.answers import level_answer
from levelnet.studies.verdict import verdict_text

found, _ = level_answer(study)
print(verdict_text(found, longest=int(study.rungs.n_max[-1])))

# %% The figure; savefig writes it
figure = levelnet.plot(study)
figure
