# %% [markdown]
# # A stressed loss, cell by cell
#
# Runs top to bottom as a script, or cell by cell in an editor that knows `# %%`. It makes its own data: an invented bank.

# %%
from pathlib import Path

import stresskit as sk
from stresskit.demo.bank import write_demo

folder = Path("harbour-example")
write_demo(folder, loans=1500, seed=11)

# %% [markdown]
# ## Read and check
# The account must close: rows in = rows used + rows left out, with a reason for each.

# %%
study = sk.load_study(folder / "study.yaml")
data = sk.prepare(study)
print(data.loans.reconciliation)
print(data.alignment.head())

# %% [markdown]
# ## Fit
# Macro coefficients rest on the number of periods, so their errors are clustered by period.

# %%
fits = sk.fit(study, data)
print(fits["default"].summary())

# %% [markdown]
# ## Project
# Every loan, every scenario, every month to contract maturity.

# %%
result = sk.project(study, data, fits)
book = result.summary.query("by == ''").set_index("scenario")
print(book[["pd_12m", "pd_lifetime", "lgd", "el_12m", "el_lifetime"]])

# %% [markdown]
# ## One more scenario
# What if unemployment rises four points within a year and is back two years later?

# %%
more = sk.what_if(study, "unemployment_rate + 4 over 4 quarters then back over 8 quarters")
data = sk.prepare(more)
result = sk.project(more, data, fits)
print(result.summary.query("by == ''").set_index("scenario")["el_lifetime"])

# %% [markdown]
# ## Keep it
# A folder with report, workbook, tables and the record that lets it be repeated.

# %%
sk.write_run(result, fits, folder / "run")
for caution in result.cautions[:3]:
    print("-", caution)
