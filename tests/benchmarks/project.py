"""``python -m tests.benchmarks project [--quick] [--json] [--loans N] [--plot FILE]``: projection and expected loss.

Everything is timed in one process, participants of a table in turn; importing and compiling come before. Times are
medians of the rounds; CPU seconds are those of all threads, wall-clock seconds depend on what else the machine does.
"""

from __future__ import annotations

import argparse
import json
import os
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import matplotlib
import numpy as np
from matplotlib.figure import Figure
from rich.console import Console
from rich.table import Table

from stresskit.core.period import Frequency
from stresskit.core.values import Portfolio
from stresskit.loss.book import LossBook, Route, prepare_book
from tests.benchmarks.book import AS_OF, LOSS, MovingLtv, cells_of, make_book, make_fits, mortgages, path
from tests.benchmarks.by_hand import models, project_frame

MONTH, QUARTER = Frequency.MONTH, Frequency.QUARTER
LINKS = ("logit", "cloglog")
#: Largest difference of a loan's figures from those of the frame, relative to the largest.
AGREEMENT = 1e-9

#: The most loans of the frame: 6 million rows take 2.4 GiB and eight seconds; at 100,000 loans it is 4.5 GiB and no faster per row.
FRAME, FRAME_LOANS = "frame, statsmodels, groupby", 50_000

Case = tuple[dict[str, Any], Callable[[], Any]]


def prepared(book: Portfolio, fits: Any, steps: int, threads: int = 1) -> LossBook:
    """Preparation from the start: what an earlier round has kept of the loan columns is forgotten."""
    book.coded.clear()
    cells = cells_of(book)
    return prepare_book(book, fits, LOSS, cells=cells.codes, n_cells=cells.count, cap=steps, threads=threads)


def routes(book: Portfolio, steps: int, count: int) -> list[Route]:
    return [Route(path(steps, AS_OF[book.frequency] + 1, seed, book.frequency)) for seed in range(count)]


def exp_over(elements: int) -> Case:
    """numpy exp on one thread over an array that is there already; of at most 20 million, scaled up."""
    x = np.random.default_rng(0).normal(-6.0, 1.0, min(elements, 20_000_000))
    out = np.empty_like(x)
    return {"who": "numpy exp, 1 thread", "elements": elements, "scale": elements / x.size}, lambda: np.exp(
        x, out=out
    )


def whole(link: str, book: Portfolio, fits: Any, steps: int, count: int, threads: int) -> Case:
    """From the book in memory to all results, preparation included."""
    paths = routes(book, steps, count)
    told = {"who": f"stresskit, {threads} threads" if threads > 1 else "stresskit, 1 thread", "link": link}
    told |= {
        "elements": book.n_loans * steps * count,
        "loans": book.n_loans,
        "steps": steps,
        "scenarios": count,
    }
    return told, lambda: prepared(book, fits, steps, threads).along(paths, threads=threads)


def take_turns(group: str, cases: list[Case], rounds: int, say: Console) -> list[dict[str, Any]]:
    found: list[list[tuple[float, float]]] = [[] for _ in cases]
    for n in range(rounds + 1):
        for k, (told, run) in enumerate(cases):
            wall, cpu = time.perf_counter(), time.process_time()
            run()
            took = time.perf_counter() - wall, time.process_time() - cpu
            if n:  # the first round warms up
                found[k].append(took)
        say.print(f"{group}: round {n} of {rounds}", style="dim")
    out = []
    for (told, _), runs in zip(cases, found, strict=True):
        scale = told.get("scale", 1.0)
        wall, cpu = (scale * float(np.median([r[j] for r in runs])) for j in (0, 1))
        out.append(
            {"group": group, **told, "wall": wall, "cpu": cpu, "best_wall": scale * min(r[0] for r in runs)}
        )
    return out


def large(loans: int, rounds: int, say: Console) -> list[dict[str, Any]]:
    book = make_book(loans, MONTH, 120)
    cases = [exp_over(loans * 480)]
    for link in LINKS:
        fits = make_fits(link, MONTH)
        cases += [whole(link, book, fits, 120, 4, threads) for threads in (1, 2)]
    return take_turns("large", cases, rounds, say)


def against_frame(loans: int, ours: int, rounds: int, say: Console) -> list[dict[str, Any]]:
    """The frame at ``loans`` loans in turn with ours at as many, and with the large run of ``ours`` loans on two threads."""
    out = []
    for link in LINKS:
        book, fits = make_book(loans, MONTH, 120), make_fits(link, MONTH)
        glms, route = models(fits), routes(book, 120, 1)[0]
        told = {"who": FRAME, "link": link, "elements": loans * 120, "loans": loans}
        by_frame: Case = (
            told,
            lambda b=book, f=fits, g=glms, r=route: project_frame(b, f, r.features, g, 120),
        )  # type: ignore[misc]
        mine = prepared(book, fits, 120).along([route])[0]
        theirs, _ = project_frame(book, fits, route.features, glms, 120)
        apart = max(
            float(np.abs(theirs[column] - mine.loans[measure]).max() / np.abs(mine.loans[measure]).max())
            for column, measure in (("first", "pd_12m"), ("default", "pd_lifetime"), ("el", "el_lifetime"))
        )
        large_one = whole(link, make_book(ours, MONTH, 120), fits, 120, 4, 2)
        found = take_turns("frame", [by_frame, whole(link, book, fits, 120, 1, 1), large_one], rounds, say)
        out += [line | {"apart": apart} for line in found]
    return out


def times_faster(lines: list[dict[str, Any]]) -> dict[str, tuple[float, float]]:
    """Link -> time of the frame over ours per loan-step at the largest size of each, by wall clock and by CPU."""
    out = {}
    for link in LINKS:
        mine = [x for x in lines if x["group"] == "frame" and x["link"] == link]
        frame = next(x for x in mine if x["who"] == FRAME)
        ours = max((x for x in mine if x["who"] != FRAME), key=lambda x: x["elements"])
        out[link] = tuple(frame[t] / frame["elements"] * ours["elements"] / ours[t] for t in ("wall", "cpu"))
    return out


def moving(loans: int, rounds: int, say: Console) -> list[dict[str, Any]]:
    book, cases = make_book(loans, MONTH, 120), []
    index = np.exp(np.cumsum(np.random.default_rng(5).normal(0, 0.01, 120)))
    for link in LINKS:
        fits = make_fits(link, MONTH)
        cases.append(whole(link, book, fits, 120, 1, 1))
        with_ltv = fits | {"default": MovingLtv(fits["default"])}
        told = {"who": "with current LTV", "link": link, "elements": loans * 120}
        route = [Route(routes(book, 120, 1)[0].features, mortgages(book, index))]
        cases.append((told, lambda b=book, f=with_ltv, r=route: prepared(b, f, 120).along(r)))  # type: ignore[misc]
    return take_turns("moving", cases, rounds, say)


def interactive(rounds: int, say: Console) -> list[dict[str, Any]]:
    """100,000 loans, 60 quarters, one path that changed; book ready, totals per segment out."""
    book, cases = make_book(100_000, QUARTER, 60), []
    for link in LINKS:
        ready, route = prepared(book, make_fits(link, QUARTER), 60), routes(book, 60, 1)
        for threads in (1, 2):
            told = {
                "who": f"one changed path, {threads} thread{'s' * (threads > 1)}",
                "link": link,
                "elements": 6_000_000,
            }
            cases.append((told, lambda w=ready, r=route, t=threads: w.along(r, threads=t)[0].cells))  # type: ignore[misc]
    return take_turns("interactive", cases, 3 * rounds, say)


def growth(loans: int, rounds: int, say: Console) -> list[dict[str, Any]]:
    out = []
    fits = {link: make_fits(link, MONTH) for link in LINKS}
    for group, sizes in (
        ("by loans", [(k * loans, 60, 1) for k in (1, 2, 4, 8)]),
        ("by steps", [(2 * loans, 30 * k, 1) for k in (1, 2, 4, 8)]),
        ("by scenarios", [(2 * loans, 60, k) for k in (1, 2, 4, 8)]),
    ):
        cases = []
        for n, steps, count in sizes:
            book = make_book(n, MONTH, steps)
            cases += [whole(link, book, fits[link], steps, count, 1) for link in LINKS]
        out += take_turns(group, cases, rounds, say)
    return out


def print_tables(lines: list[dict[str, Any]], console: Console) -> None:
    exp = next(x for x in lines if x["who"].startswith("numpy"))
    for group in dict.fromkeys(x["group"] for x in lines):
        table = Table(title=group)
        for name in (
            "who",
            "link",
            "loan-steps",
            "wall s",
            "CPU s",
            "ns of CPU per loan-step",
            "exps, wall",
            "exps, CPU",
        ):
            table.add_column(name, justify="left" if name in ("who", "link") else "right")
        for x in (x for x in lines if x["group"] == group):
            each = exp["elements"] / x["elements"]
            table.add_row(
                x["who"], x.get("link", ""), f"{x['elements']:,}", f"{x['wall']:.4f}", f"{x['cpu']:.4f}",
                f"{1e9 * x['cpu'] / x['elements']:.2f}", f"{x['wall'] * each / exp['wall']:.2f}",
                f"{x['cpu'] * each / exp['cpu']:.2f}",
            )  # fmt: skip
        console.print(table)


def plot_growth(lines: list[dict[str, Any]], file: Path) -> None:
    """CPU seconds against loans, steps and scenarios; a dashed line is proportional to the first point."""
    matplotlib.rcParams["svg.hashsalt"] = "stresskit"
    figure = Figure(figsize=(10.0, 3.4), layout="constrained")
    axes = figure.subplots(1, 3)
    for axis, what in zip(axes, ("loans", "steps", "scenarios"), strict=True):
        for link, style in (("logit", "s-"), ("cloglog", "o-")):
            mine = [x for x in lines if x["group"] == f"by {what}" and x["link"] == link]
            places, cpu = np.array([x[what] for x in mine]), np.array([x["cpu"] for x in mine])
            axis.plot(places, cpu, style, label=link)
            axis.plot(places, cpu[-1] * places / places[-1], "k:", linewidth=0.8)
        axis.set_xlabel(what)
        axis.set_ylim(bottom=0.0)
        axis.grid(alpha=0.3)
    axes[0].set_ylabel("CPU seconds, 1 thread")
    axes[0].legend(fontsize="small")
    file.parent.mkdir(parents=True, exist_ok=True)
    figure.savefig(file, format="svg", metadata={"Date": None})


def main(arguments: list[str] | None = None) -> int:
    """0 when our figures agree with those of the frame, 1 when they do not."""
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks project")
    parser.add_argument("--quick", action="store_true", help="a tenth of the loans, within two minutes")
    parser.add_argument("--json", action="store_true", help="print the figures instead of the tables")
    parser.add_argument(
        "--loans", type=int, help="loans of the large table (default 1,000,000; quick 100,000)"
    )
    parser.add_argument("--rounds", type=int, help="rounds that count (default 5; quick 3)")
    parser.add_argument("--plot", type=Path, help="write the growth of cost as SVG to this file")
    given = parser.parse_args(arguments)
    loans = given.loans or (100_000 if given.quick else 1_000_000)
    rounds, say = given.rounds or (3 if given.quick else 5), Console(stderr=True)
    lines = large(loans, rounds, say)
    lines += against_frame(min(FRAME_LOANS, max(200, loans // 20)), loans, max(1, rounds - 2), say)
    lines += moving(loans // 10, rounds, say)
    lines += interactive(rounds, say)
    lines += growth(loans // 40, rounds, say)
    worst = max(x.get("apart", 0.0) for x in lines)
    load = os.getloadavg()[0]
    if given.json:
        found = {
            "figures": lines,
            "largest_difference": worst,
            "load": load,
            "times_faster": times_faster(lines),
        }
        print(json.dumps(found, indent=1))
    else:
        print_tables(lines, Console(width=None if sys.stdout.isatty() else 150))
        for link, (wall, cpu) in times_faster(lines).items():
            print(
                f"{link}: the frame takes {wall:,.0f} times our wall-clock time per loan-step, {cpu:,.0f} times our CPU time"
            )
        print(
            f"largest relative difference from the frame: {worst:.1e} (asked: {AGREEMENT:g}); load average {load:.1f}"
        )
    if given.plot is not None:
        plot_growth(lines, given.plot)
    return int(worst > AGREEMENT)
