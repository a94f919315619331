"""``python -m tests.benchmarks.large_study FOLDER [--loans N]``: memory and time of a whole study through the command line.

Writes a study with a history of 600 loans, a book of N loans, monthly, four scenarios, into FOLDER; fits it, projects it by
``stresskit project`` in a process of its own, and prints that process's peak memory and time.
"""

from __future__ import annotations

import argparse
import resource
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pandas as pd

from tests.cli.small_study import write_small_study

OTHERS = (("adverse", 2.0), ("severe", 4.0))


def write_large_study(folder: Path, loans: int) -> Path:
    """The study file; the book's loans were taken out in the last four years and run for up to ten."""
    folder.mkdir(parents=True, exist_ok=True)
    study, rng = write_small_study(folder), np.random.default_rng(3)
    opened = pd.period_range("2017-01", "2020-11", freq="M")
    start, term = rng.integers(0, len(opened), loans), rng.integers(60, 121, loans)
    months = np.array(pd.period_range("2017-01", periods=48 + 121, freq="M").astype(str), dtype=object)
    frame = pd.DataFrame(
        {
            "id": np.char.add("B", np.arange(loans).astype("U8")).astype(object), "month": "2020-12",
            "opened": months[start], "matures": months[start + term - 1], "owed": rng.uniform(1e3, 5e4, loans).round(2),
            "interest": rng.uniform(0.03, 0.08, loans).round(4), "state": "C",
            "product": rng.choice(np.array(["fixed", "floating"], dtype=object), loans),
            "place": rng.choice(np.array(["east", "west"], dtype=object), loans),
        }
    )  # fmt: skip
    history = pd.read_csv(folder / "loans.csv")
    pd.concat([history, frame], ignore_index=True).to_parquet(folder / "loans.parquet", index=False)
    text = study.read_text().replace("loans.csv", "loans.parquet")
    names = ["baseline.yaml", "slump.yaml"]
    for name, size in OTHERS:
        names.append(f"{name}.yaml")
        slump = (folder / "slump.yaml").read_text().replace("scenario: slump", f"scenario: {name}")
        slump = slump.replace("weight: 0.3\n", "weight: 0.1\n").replace("3.5", str(3.5 + size))
        (folder / f"{name}.yaml").write_text(slump)
    slump = (folder / "slump.yaml").read_text().replace("weight: 0.3\n", "weight: 0.1\n")
    (folder / "slump.yaml").write_text(slump)
    study.write_text(
        text.replace("scenarios: [baseline.yaml, slump.yaml]", f"scenarios: [{', '.join(names)}]")
    )
    return study


def command(*words: str) -> tuple[float, float]:
    """(seconds, peak GiB of the largest child so far) of one command."""
    begun = time.perf_counter()
    subprocess.run([sys.executable, "-m", "stresskit.cli", *words], check=True, stdout=subprocess.DEVNULL)
    peak = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 2**20
    return time.perf_counter() - begun, peak


def main() -> None:
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks.large_study")
    parser.add_argument("folder", type=Path)
    parser.add_argument("--loans", type=int, default=1_000_000)
    given = parser.parse_args()
    small = write_small_study(_made(given.folder / "small"))
    command("fit", str(small), "--out", str(given.folder / "models"))
    study = write_large_study(given.folder / "large", given.loans)
    for words in (("project", "--models", str(given.folder / "models")), ("run",)):
        out = given.folder / f"{words[0]}1"
        took, peak = command(words[0], str(study), *words[1:], "--out", str(out), "--no-evidence")
        size = (out / "loans.parquet").stat().st_size / 2**20
        print(
            f"stresskit {words[0]}, {given.loans:,} loans, 4 scenarios: {took:.0f} s, peak {peak:.2f} GiB, loans.parquet {size:.0f} MiB"
        )


def _made(folder: Path) -> Path:
    folder.mkdir(parents=True, exist_ok=True)
    return folder


if __name__ == "__main__":
    main()
