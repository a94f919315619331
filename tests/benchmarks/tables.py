"""From measurements to tables and plots."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import matplotlib
import numpy as np
from matplotlib.figure import Figure
from rich.console import Console
from rich.table import Table

from tests.benchmarks.plan import Case

#: Largest difference of a coefficient from ours.
AGREEMENT = 1e-6
TITLES = {
    "peers": "Fit from the panel in memory to coefficients",
    "statsmodels": "statsmodels GLM, at a fifth of the rows for its time and memory",
    "moving": "With one loan column that has a value of its own every month",
    "crossed": "With the interaction category x macro",
    "large": "Ours alone, against one numpy exp over as many elements",
}
WORDS = {
    "ours": "stresskit",
    "ours-2": "stresskit, 2 threads",
    "glum-dense": "glum, dense",
    "glum-split": "glum, split",
}


@dataclass
class Line:
    """A case with what its rounds measured."""

    case: Case
    runs: list[dict[str, Any]] = field(default_factory=list)

    def median(self, key: str) -> float:
        return float(np.median([run[key] for run in self.runs]))

    @property
    def params(self) -> dict[str, float]:
        return dict(self.runs[0].get("params", {}))


def apart(ours: Line, other: Line) -> float:
    """Largest difference of a coefficient; raises KeyError when the columns are not the same."""
    if ours.params.keys() != other.params.keys():
        raise KeyError(f"other columns: {sorted(ours.params.keys() ^ other.params.keys())}")
    return max(abs(ours.params[name] - value) for name, value in other.params.items())


def of_group(lines: Sequence[Line], group: str) -> dict[tuple[str, str, int], Line]:
    return {(x.case.who, x.case.link, x.case.at): x for x in lines if x.case.group == group and x.runs}


def worst_difference(lines: Sequence[Line]) -> float:
    """Over all cases that have a fit of ours beside them."""
    worst = 0.0
    for group in dict.fromkeys(x.case.group for x in lines):
        found = of_group(lines, group)
        for (who, link, at), line in found.items():
            if who not in ("ours", "exp"):
                worst = max(worst, apart(found["ours", link, at], line))
    return worst


def figures(lines: Sequence[Line]) -> list[dict[str, Any]]:
    """What --json prints: one record per case, medians."""
    out = []
    for line in lines:
        c = line.case
        record: dict[str, Any] = {
            "group": c.group,
            "who": c.who,
            "link": c.link,
            "at": c.at,
            "rounds": len(line.runs),
        }
        for key in (
            "rows",
            "loans",
            "events",
            "iterations",
            "wall",
            "cpu",
            "panel_mib",
            "peak_mib",
            "small_fit_mib",
        ):
            if key in line.runs[0]:
                record[key] = line.median(key)
        ours = of_group(lines, c.group).get(("ours", c.link, c.at))
        if ours is not None and c.who not in ("ours", "exp"):
            record["apart"] = apart(ours, line)
        out.append(record)
    return out


def print_tables(lines: Sequence[Line], console: Console) -> None:
    for group in ("peers", "statsmodels", "moving", "crossed"):
        found = of_group(lines, group)
        if found:
            console.print(_peer_table(group, found))
    found = of_group(lines, "large")
    if found:
        console.print(_large_table(found))
    for group in ("by loans", "by periods", "by columns"):
        found = of_group(lines, group)
        if found:
            console.print(_growth_table(group, found))


def _peer_table(group: str, found: dict[tuple[str, str, int], Line]) -> Table:
    first = next(iter(found.values()))
    table = Table(
        title=f"{TITLES[group]}: {first.median('rows'):,.0f} loan-months, {first.median('loans'):,.0f} loans"
    )
    for name in ("link", "who"):
        table.add_column(name)
    for name in ("wall s", "CPU s", "x wall", "x CPU", "peak MiB", "x peak", "coefficients apart"):
        table.add_column(name, justify="right")
    for (who, link, at), line in found.items():
        ours = found["ours", link, at]
        cells = [f"{line.median(key) / ours.median(key):.1f}" for key in ("wall", "cpu", "peak_mib")]
        table.add_row(
            link, WORDS.get(who, who), f"{line.median('wall'):.2f}", f"{line.median('cpu'):.2f}", cells[0], cells[1],
            f"{line.median('peak_mib'):,.0f}", cells[2], "" if who == "ours" else f"{apart(ours, line):.0e}",
        )  # fmt: skip
    return table


def _large_table(found: dict[tuple[str, str, int], Line]) -> Table:
    exp = found["exp", "cloglog", 0]
    table = Table(
        title=f"{TITLES['large']}: {exp.median('rows'):,.0f}; the exp took {exp.median('wall'):.3f} s, CPU {exp.median('cpu'):.3f} s"
    )
    for name in ("link", "who"):
        table.add_column(name)
    for name in ("wall s", "CPU s", "exps, wall", "exps, CPU", "peak MiB", "of which panel"):
        table.add_column(name, justify="right")
    for (who, link, _), line in found.items():
        if who != "exp":
            table.add_row(
                link, WORDS.get(who, who), f"{line.median('wall'):.2f}", f"{line.median('cpu'):.2f}",
                f"{line.median('wall') / exp.median('wall'):.0f}", f"{line.median('cpu') / exp.median('cpu'):.0f}",
                f"{line.median('peak_mib'):,.0f}", f"{line.median('panel_mib'):,.0f}",
            )  # fmt: skip
    return table


def _growth_table(group: str, found: dict[tuple[str, str, int], Line]) -> Table:
    table = Table(title=f"Cost {group}")
    what = {"by loans": "loans", "by periods": "mean contract months", "by columns": "numeric loan columns"}[
        group
    ]
    for name in (
        what,
        "loan-months",
        "stresskit cloglog CPU s",
        "stresskit logit CPU s",
        "glum cloglog CPU s",
        "peak MiB, stresskit cloglog",
        "peak MiB, glum",
    ):
        table.add_column(name, justify="right")
    for at in sorted({at for _, _, at in found}):
        ours, logit, glum = (
            found["ours", "cloglog", at], found["ours", "logit", at], found["glum-dense", "cloglog", at],
        )  # fmt: skip
        table.add_row(
            f"{at:,}", f"{ours.median('rows'):,.0f}", f"{ours.median('cpu'):.2f}", f"{logit.median('cpu'):.2f}",
            f"{glum.median('cpu'):.2f}", f"{ours.median('peak_mib'):,.0f}", f"{glum.median('peak_mib'):,.0f}",
        )  # fmt: skip
    return table


def plot_growth(lines: Sequence[Line], path: Path) -> None:
    """CPU seconds against loans, periods and columns, one panel each; the same file for the same figures."""
    matplotlib.rcParams["svg.hashsalt"] = "stresskit"
    figure = Figure(figsize=(10.0, 3.4), layout="constrained")
    axes = figure.subplots(1, 3, sharey=True)
    labels = {
        "by loans": "loans",
        "by periods": "mean contract length, months",
        "by columns": "numeric loan columns",
    }
    for axis, (group, label) in zip(axes, labels.items(), strict=True):
        found = of_group(lines, group)
        places = sorted({at for _, _, at in found})
        for who, link, style in (
            ("ours", "cloglog", "o-"),
            ("ours", "logit", "s-"),
            ("glum-dense", "cloglog", "^--"),
        ):
            axis.plot(
                places, [found[who, link, at].median("cpu") for at in places], style,
                label=f"{'stresskit' if who == 'ours' else 'glum, dense'}, {link}",
            )  # fmt: skip
        axis.set_xscale("log", base=2)
        axis.set_yscale("log")
        axis.set_xticks(places, [f"{at:,}" for at in places])
        axis.minorticks_off()
        axis.set_xlabel(label)
        axis.grid(alpha=0.3)
    axes[0].set_ylabel("CPU seconds of a fit")
    axes[0].legend(fontsize="small")
    path.parent.mkdir(parents=True, exist_ok=True)
    figure.savefig(path, format="svg", metadata={"Date": None})
