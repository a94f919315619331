"""``python -m tests.benchmarks project ...`` and ``evidence ...``: see the modules of these names.

``python -m tests.benchmarks fit [--quick] [--json] [--rows N] [--large-rows N] [--only GROUP ...] [--plot FILE]``."""

from __future__ import annotations

import argparse
import importlib
import json
import subprocess
import sys
from dataclasses import asdict
from pathlib import Path
from typing import Any

from rich.console import Console

from tests.benchmarks.plan import Case, plan
from tests.benchmarks.tables import AGREEMENT, Line, figures, plot_growth, print_tables, worst_difference

ROOT = Path(__file__).parents[2]
PATIENCE = 3600.0


def run_case(case: Case) -> dict[str, Any]:
    """The measurement of one fit in a process of its own."""
    asked = json.dumps({"who": case.who, "link": case.link, "shape": asdict(case.shape)})
    done = subprocess.run(
        [sys.executable, "-m", "tests.benchmarks.worker", asked],
        cwd=ROOT, capture_output=True, text=True, timeout=PATIENCE, check=False,
    )  # fmt: skip
    if done.returncode != 0:
        raise RuntimeError(f"{case.who}, {case.link}, {case.shape}:\n{done.stderr}")
    found: dict[str, Any] = json.loads(done.stdout.splitlines()[-1])
    return found


def run_all(cases: list[Case], say: Console) -> list[Line]:
    """Rounds of a group one after the other, its cases interleaved within each round."""
    lines = [Line(case) for case in cases]
    for group in dict.fromkeys(case.group for case in cases):
        mine = [line for line in lines if line.case.group == group]
        for n in range(max(line.case.rounds for line in mine)):
            for line in mine:
                if n < line.case.rounds:
                    line.runs.append(run_case(line.case))
                    say.print(
                        f"{group}: {line.case.who}, {line.case.link}, {line.runs[-1]['wall']:.2f} s",
                        style="dim",
                    )
    return lines


def main(arguments: list[str] | None = None) -> int:
    """0 when all coefficients agree, 1 when some do not."""
    words = sys.argv[1:] if arguments is None else arguments
    if words[:1] in (["project"], ["evidence"]):
        return int(importlib.import_module(f"tests.benchmarks.{words[0]}").main(words[1:]))
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks")
    parser.add_argument("what", choices=["fit", "project", "evidence"])
    parser.add_argument("--quick", action="store_true", help="half a million loan-months, within two minutes")
    parser.add_argument("--json", action="store_true", help="print the figures instead of the tables")
    parser.add_argument(
        "--rows", type=int, help="loan-months of the comparison (default 5,000,000; quick 500,000)"
    )
    parser.add_argument(
        "--large-rows", type=int, help="loan-months of the fit without peers (default: ten times --rows)"
    )
    parser.add_argument(
        "--only", nargs="+", metavar="GROUP", help="tables to make, e.g. peers large 'by periods'"
    )
    parser.add_argument("--plot", type=Path, help="write the growth of cost as SVG to this file")
    given = parser.parse_args(words)
    cases = plan(quick=given.quick, rows=given.rows, large_rows=given.large_rows)
    if given.only:
        cases = [case for case in cases if case.group in given.only]
    lines = run_all(cases, Console(stderr=True))
    worst = worst_difference(lines)
    if given.json:
        print(json.dumps({"figures": figures(lines), "largest_difference": worst}, indent=1))
    else:
        print_tables(lines, Console(width=None if sys.stdout.isatty() else 150))
        print(f"largest difference of a coefficient from ours: {worst:.1e} (asked: {AGREEMENT:g})")
    if given.plot is not None:
        plot_growth(lines, given.plot)
    return int(worst > AGREEMENT)


if __name__ == "__main__":
    raise SystemExit(main())
