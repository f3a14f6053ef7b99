# ---
# jupyter:
#   jupytext:
#     formats: py:percent,ipynb
#     text_representation:
#       extension: .py
#       format_name: percent
#   kernelspec:
#     display_name: Python 3
#     language: python
#     name: python3
# ---

# %% [markdown]
# # A first fit
#
# From an installed weakmix to a global fit with one measurement of your own, in the invented world *Tidewater*: its
# truth is known, so we can see whether the fit finds it.
#
# ## What can be computed
#
# The catalogue knows quantities and the parameters they rest on.

# %%
from observables import catalogue

node = catalogue["mixing_frequency_Bd"]
print(node.title, "in", node.unit)
print("made from", catalogue.ingredients("mixing_frequency_Bd"))
print("rests on ", catalogue.parameters_of("mixing_frequency_Bd"))

# %% [markdown]
# ## What was measured
#
# An inputs file says what was measured. `tidewater` comes with the package.

# %%
from likelihoods import load_inputs

inputs = load_inputs("tidewater")
print(inputs.title, "-", len(inputs.entries), "entries in the groups", sorted(inputs.groups))
for entry in inputs.entries[:5]:
    print(f"{entry.id:32} {entry.quantity:28} {entry.value:.5g} +{entry.plus:.2g} -{entry.minus:.2g} {entry.unit}")

# %% [markdown]
# ## Fit
#
# A problem compiles the two into one function of batches of points, and fits.

# %%
from fitcore import Problem

problem = Problem.load("tidewater")
before = problem.fit()
assert before.valid, before.message
print(f"chi-square {before.chi2:.1f} for {before.degrees_of_freedom} degrees of freedom, p = {before.p_value:.2f}")

truth = {
    "wolfenstein_lambda": 0.2310,
    "wolfenstein_A": 0.790,
    "wolfenstein_rhobar": 0.200,
    "wolfenstein_etabar": 0.300,
}
for name, true_value in truth.items():
    low, high = before.parameters[name].interval_95
    print(f"{name:20} [{low:.4f}, {high:.4f}] holds {true_value}: {low <= true_value <= high}")

# %% [markdown]
# Intervals are chi-square differences of 1.000 (68.27 %) and 3.841 (95.0 %), one quantity at a time.
#
# ## A measurement of your own
#
# Suppose you measured the angle gamma, in degrees, to 0.9 degrees. Three lines include the set, a table adds yours.

# %%
import tempfile
from pathlib import Path

folder = Path(tempfile.mkdtemp())
mine = folder / "mine.toml"
mine.write_text("""
title = "Tidewater with our gamma"
include = ["tidewater"]

[[measurement]]
id = "our-gamma"
quantity = "angle_gamma"
value = 56.0
error = 0.9
unit = "deg"
groups = ["tree-phase", "tree"]
source = "invented: our own analysis"
""")
after = Problem.load(mine).fit()
assert after.valid, after.message

for name in truth:
    old, new = before.parameters[name], after.parameters[name]
    print(f"{name:20} {old.value:.4f} +- {old.error:.4f}  ->  {new.value:.4f} +- {new.error:.4f}")

# %%
# A measurement can only add information: no uncertainty of the apex grows by more than rounding.
for name in ("wolfenstein_rhobar", "wolfenstein_etabar"):
    assert after.parameters[name].error <= before.parameters[name].error * 1.02

# %% [markdown]
# ## Look at it
#
# Measured against fitted: every row on its own scale, sorted by pull.

# %%
pulls = sorted(after.measurements, key=lambda row: -abs(row.pull))
for row in pulls[:6]:
    print(f"{row.id:32} pull {row.pull:+.1f}")

# %% [markdown]
# The same from a terminal: `weakmix fit mine.toml --out mine`, which also draws the figures and writes a run folder
# from which the fit can be repeated.
