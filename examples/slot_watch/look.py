# %% [markdown]
# # The slot watch, looked at by hand
#
# The study beside this file, run from Python: 28 days of an invented geostationary satellite with a
# leaking thruster. Editors and notebook programs that know cells (`# %%`) run them one by one; as a
# whole it runs with `python examples/slot_watch/look.py`. What the last line of a cell says is
# shown in a notebook.

# %%
from pathlib import Path

import matplotlib.pyplot as plt

import nipc
from nipc.report import figures

here = Path(globals().get("__file__", "look.ipynb")).parent  # a notebook is at home in its folder
study = nipc.load_study(here / "study.toml")
study

# %% [markdown]
# What it will take, before anything is run.

# %%
nipc.plan(study)

# %% [markdown]
# The run. Runs that are kept from before are not made again, so that a second start takes seconds.

# %%
result = nipc.run(study, n_jobs=2)
result

# %% [markdown]
# All numbers are in one labelled data set: `result.dataset` (`xarray`), with units and intervals.
# When is the satellite most likely out of its slot, and can that be trusted?

# %%
data = result.dataset.sel(quantity="longitude")
inside = data["inside_probability"]
worst = inside.idxmin("time").item()
low, high = (float(data[f"inside_probability_{end}"].sel(time=worst)) for end in ("low", "high"))
print(f"least likely inside on day {worst:g}: {float(inside.min()):.3f} ({low:.3f} to {high:.3f})")
print(f"trusted to day {data['trust_horizon'].item():g} of {study.clock.end:g}")

# %% [markdown]
# Figures are functions from the data set to matplotlib's axes, so that they can stand together.

# %%
figure, axes = plt.subplots(2, 2, figsize=(13, 8), layout="constrained")
figures.bands(result.dataset, "longitude", ax=axes[0, 0])
figures.confinement(result.dataset, "longitude", ax=axes[0, 1])
figures.driver_shares(result.dataset, "longitude", ax=axes[1, 0])
figures.density(result.dataset, "radius", "longitude", ax=axes[1, 1])
figure.savefig(result.folder / "look.png", dpi=120)

# %% [markdown]
# What would a thruster do that leaks half as much? The expansions answer, nothing is run.

# %%
half = nipc.whatif(study, {"tangential": 0.5})
both = (float(d["std"].sel(quantity="longitude").isel(time=-1)) for d in (result.dataset, half))
print("standard deviation of longitude at the end: {:.3f} deg, then {:.3f} deg".format(*both))
