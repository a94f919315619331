"""Write docs/scenario-library.md from the files in scenarios/, resolved against the demo's macro history.

Run from anywhere: ``python docs/make_library.py``. tests/docs compares the committed page with what this gives.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import Frequency, format_period, parse_period
from stresskit.core.values import MacroHistory, ScenarioPath
from stresskit.demo.bank import demo_economy, shipped_scenarios
from stresskit.scenario.checks import path_findings
from stresskit.scenario.resolve import resolve
from stresskit.spec.load import Loaded, load_scenario
from stresskit.spec.scenario import ScenarioSpec, TableMapping
from stresskit.spec.study import Macro

PAGE = Path(__file__).with_name("scenario-library.md")
#: What the demo declares, and what library files state besides it.
DECLARED = {"unemployment_rate": "percent", "house_price_index": "index", "policy_rate": "percent"}
FURTHER = {
    "inflation_rate": "percent",
    "credit_spread": "percent",
    **{f"unemployment_rate_{r}": "percent" for r in ("north", "coast", "valley")},
    **{f"house_price_index_{r}": "index" for r in ("north", "coast", "valley")},
}
#: The order of the page: the demo's own three, then from mild to severe, then those for a special question.
ORDER = (
    "baseline", "deep_recession", "rates_up", "early_recovery", "low_rates_long", "mild_recession", "slow_grind",
    "v_shape", "double_dip", "stagflation", "credit_squeeze", "funding_shock", "house_price_fall", "regional_downturn",
)  # fmt: skip
#: What stood before the scenarios begin, where the baseline does not state a variable (the files' comments say so).
BEFORE = {"inflation_rate": 2.0, "credit_spread": 1.8}
AS_OF, MONTHS, SHOWN = "2025-12", 120, 20
BARS = "▁▂▃▄▅▆▇█"
HEAD = """# Scenario library

<!-- Written by docs/make_library.py from the files in scenarios/. Change those, then run it. -->

Paths for the demo bank's variables, each with what it is for. They are invented, and no forecast: take one, change its numbers to your own economy,
and have it reviewed. The demo runs the first three. The files lie in `scenarios/`; in an installed package this prints their folder:

```python
from stresskit.demo.bank import shipped_scenarios

print(shipped_scenarios())
```

To use one in a study, copy it and `baseline.yaml`, on which all are built, and name both under `scenarios`. Only the demo's three carry weights.
The others say `weighted: false`: they stand beside the probability-weighted mean. Write `weight` in its place to put one in, so that all weights sum to 1.

Some files state variables that the demo does not declare (inflation, a credit spread, unemployment and house prices by region). A study that does not
declare them leaves them out and says so in the result's notes. Severity is each author's label, not a measurement.

The tables show 20 quarters from 2026Q1 on. The small picture runs from the lowest to the highest value of its own row, so rows cannot be
compared by height. *Furthest from baseline* is the quarter in which the path lies furthest from `baseline`: regional variables from the
national ones, inflation from 2 and the credit spread from 1.8, where they stand before the scenarios begin. *Cautions* are those of `stresskit check` against the demo's history,
without the sentence on how far the stated values reach.
"""


class Library(NamedTuple):
    """Every file, resolved: the demo's variables for judging, all of them for the tables."""

    loaded: dict[str, Loaded[ScenarioSpec | TableMapping]]
    history: MacroHistory
    paths: dict[str, ScenarioPath]
    whole: dict[str, ScenarioPath]


def _macro(units: dict[str, str]) -> Macro:
    variables = {v: {"unit": unit, "place": "linear"} for v, unit in units.items()}
    text = json.dumps({"file": "macro.csv", "variables": variables})
    return Macro.model_validate_json(text, strict=True)


def _history(values: dict[str, NDArray[np.float64]], start: int, units: dict[str, str]) -> MacroHistory:
    return MacroHistory(Frequency.QUARTER, start, values, units, dict.fromkeys(units, "linear"))


def library() -> Library:
    """All files of scenarios/, each resolved with the baseline."""
    folder = shipped_scenarios()
    loaded = {name: load_scenario(folder / f"{name}.yaml") for name in ORDER}
    economy = demo_economy()
    observed = {v: economy.values[v] for v in DECLARED}
    history = _history(observed, economy.start, DECLARED)
    blank = {v: np.full(history.n_periods, np.nan) for v in FURTHER}
    wider = _history(observed | blank, economy.start, DECLARED | FURTHER)
    paths, whole = {}, {}
    for name in ORDER:
        files = [_unweighted(loaded[n]) for n in dict.fromkeys(("baseline", name))]
        for units, past, into in ((DECLARED, history, paths), (DECLARED | FURTHER, wider, whole)):
            found = resolve(
                files, _macro(units), past,
                as_of=parse_period(AS_OF, Frequency.MONTH), model=Frequency.MONTH, horizon=MONTHS,
            )  # fmt: skip
            into[name] = found[-1]
    return Library(loaded, history, paths, whole)


def _unweighted(item: Loaded[ScenarioSpec | TableMapping]) -> Loaded[ScenarioSpec | TableMapping]:
    return Loaded(
        item.model.model_copy(update={"weight": None}), item.file, item.text, item.digest, item.marks
    )


def cautions(lib: Library, name: str) -> list[str]:
    """What the check says about a scenario by itself, without the sentence on reach."""
    found = path_findings([lib.paths[name]], lib.history)
    return [s.removeprefix(f"Scenario {name}: ") for s in found if "follow the afterwards rule" not in s]


def picture(values: NDArray[np.float64]) -> str:
    """A bar per quarter, the row's lowest value lowest."""
    low, high = float(values.min()), float(values.max())
    if high == low:
        return BARS[0] * values.size
    steps = np.minimum(((values - low) / (high - low) * len(BARS)).astype(int), len(BARS) - 1)
    return "".join(BARS[i] for i in steps)


def _rows(lib: Library, name: str) -> Iterator[str]:
    path, base = lib.whole[name], lib.whole["baseline"]
    yield "| variable | first | furthest from baseline | last | quarter by quarter |\n|---|---|---|---|---|"
    for variable, values in path.values.items():
        shown = values[:SHOWN]
        national = next(v for v in (*DECLARED, variable) if variable.startswith(v))
        reference = np.full(SHOWN, BEFORE[variable]) if variable in BEFORE else base.values[national][:SHOWN]
        relative = path_unit(variable) == "index"
        apart = shown / reference - 1.0 if relative else shown - reference
        at = int(np.argmax(np.abs(apart)))
        far = f"{100 * apart[at]:+.1f} %" if relative else f"{apart[at]:+.2f}"
        when = format_period(path.start + at, Frequency.QUARTER)
        worst = f"{shown[at]:.2f} in {when} ({far})" if apart[at] else "as the baseline"
        if name == "baseline":
            worst = "-"
        yield f"| `{variable}` | {shown[0]:.2f} | {worst} | {shown[-1]:.2f} | {picture(shown)} |"


def path_unit(variable: str) -> str:
    return (DECLARED | FURTHER)[variable]


def _section(lib: Library, name: str) -> Iterator[str]:
    notes = lib.paths[name].notes
    yield f"## {name}\n"
    severity = f" Severity: {notes['severity']}." if "severity" in notes else ""
    yield f"**{notes['title']}.** {notes['purpose']}{severity} File: `scenarios/{name}.yaml`.\n"
    yield from _rows(lib, name)
    said = cautions(lib, name)
    yield "\nCautions: " + ("none." if not said else "")
    if said:
        yield ""
        yield from (f"- {s}" for s in said)
    yield ""


def page() -> str:
    """The whole page."""
    lib = library()
    lines = [HEAD]
    for name in ORDER:
        lines.extend(_section(lib, name))
    return "\n".join(line.rstrip() for line in "\n".join(lines).split("\n")).rstrip() + "\n"


if __name__ == "__main__":
    PAGE.write_text(page(), encoding="utf-8", newline="\n")
