"""One fit in a process of its own: ``python -m tests.benchmarks.worker '{"who": ..., "link": ..., "shape": {...}}'``.

Everybody first fits a small book, so that nobody's first call counts: loading compiled loops, filling caches.
Time runs from the panel in memory to the coefficients. Peak memory is what the process holds at its highest
from then on, less what it held after the small fit (``imports_mib``: imports, and machine code that the small fit
loaded); the panel is part of it for everybody.
"""

from __future__ import annotations

import ctypes
import gc
import importlib
import json
import resource
import sys
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from stresskit.core.values import FeatureTable, RiskSet
from tests.benchmarks.matrices import dense, split
from tests.benchmarks.panel import Shape, make_panel, make_spec

Found = tuple[list[float], list[str], dict[str, float]]
Run = Callable[[Shape, str, RiskSet, FeatureTable], Found]

#: glum stops on the mean gradient; loose enough to be reached, tight enough that its coefficients agree to 1e-6. In the
#: crossed logit rounding keeps it from the tighter one at 5 million rows, and it would look ten times slower.
GLUM_TOLERANCE, GLUM_TOLERANCE_CROSSED_LOGIT = 1e-9, 1e-8
STATSMODELS_TOLERANCE = 1e-9
#: Loan-months of the book that is fitted before the clock starts; enough for the way through the data that the large one takes.
SMALL_ROWS, SMALL_ROWS_CROSSED = 200_000, 400_000


def ours(threads: int) -> Run:
    fit = importlib.import_module("stresskit.hazard.fit")

    def run(shape: Shape, link: str, risk_set: RiskSet, features: FeatureTable) -> Found:
        found = fit.fit_hazard(make_spec(shape, link), risk_set, features, threads=threads)
        names = [_plain(label) for label in found.design.labels]
        names = [f"age{sum(n == 'age' for n in names[:j])}" if n == "age" else n for j, n in enumerate(names)]
        return list(found.params), names, {"iterations": found.facts.iterations, "llf": found.facts.llf}

    return run


def _plain(label: str) -> str:
    """Our label in the names of :mod:`matrices`; all age columns as ``age``."""
    if label.startswith("age["):
        return "age"
    return label.replace("grade[", "grade").replace("]", "")


def glum(kind: str) -> Run:
    library, tabmat, pandas = (importlib.import_module(name) for name in ("glum", "tabmat", "pandas"))

    def run(shape: Shape, link: str, risk_set: RiskSet, features: FeatureTable) -> Found:
        if kind == "dense":
            plain, y, names = dense(shape, risk_set, features, constant=False)
            x = tabmat.DenseMatrix(plain)
        else:
            x, y, names = split(shape, risk_set, features, tabmat, pandas)
        tolerance = GLUM_TOLERANCE_CROSSED_LOGIT if shape.crossed and link == "logit" else GLUM_TOLERANCE
        model = library.GeneralizedLinearRegressor(
            family="binomial", link={"cloglog": library.CloglogLink(), "logit": "logit"}[link], alpha=0.0,
            solver="irls-ls", gradient_tol=tolerance, copy_X=False, check_input=False,
        )  # fmt: skip
        model.fit(x, y)
        return (
            [float(model.intercept_), *map(float, model.coef_)],
            ["intercept", *names],
            {"iterations": model.n_iter_},
        )

    return run


def statsmodels() -> Run:
    api = importlib.import_module("statsmodels.api")

    def run(shape: Shape, link: str, risk_set: RiskSet, features: FeatureTable) -> Found:
        x, y, names = dense(shape, risk_set, features, constant=True)
        links = {"cloglog": api.families.links.CLogLog, "logit": api.families.links.Logit}
        model = api.GLM(y, x, family=api.families.Binomial(link=links[link]()))
        # Its Newton takes less than half of the time of its IRLS with any of the three wls methods.
        found = model.fit(method="newton", tol=STATSMODELS_TOLERANCE, disp=False)
        return (
            list(map(float, found.params)),
            names,
            {"iterations": found.mle_retvals["iterations"], "llf": found.llf},
        )

    return run


def bare_exp(shape: Shape, link: str, risk_set: RiskSet, features: FeatureTable) -> Found:
    raise AssertionError("timed by itself")


PEERS: dict[str, Callable[[], Run]] = {
    "ours": lambda: ours(1),
    "ours-2": lambda: ours(2),
    "glum-dense": lambda: glum("dense"),
    "glum-split": lambda: glum("split"),
    "statsmodels": statsmodels,
    "exp": lambda: bare_exp,
}


def _status(key: str) -> float:
    """MiB of a line of /proc/self/status."""
    for line in Path("/proc/self/status").read_text(encoding="ascii").splitlines():
        if line.startswith(key + ":"):
            return float(line.split()[1]) / 1024.0
    raise KeyError(key)


def _forget_peak() -> None:
    """Starts the kernel's high-water mark again (proc(5), clear_refs)."""
    Path("/proc/self/clear_refs").write_text("5", encoding="ascii")


def _give_back() -> None:
    """Lets go of what is no longer used, so that it hides nothing of what comes."""
    gc.collect()
    ctypes.CDLL("libc.so.6").malloc_trim(0)


def measure_exp(rows: int) -> dict[str, Any]:
    """One numpy exp over ``rows`` float64 into an array that is there already; the median of five."""
    x = np.random.default_rng(0).normal(-6.0, 1.0, rows)
    out = np.empty_like(x)
    wall, cpu = [], []
    for _ in range(6):
        a, b = time.perf_counter(), time.process_time()
        np.exp(x, out=out)
        wall.append(time.perf_counter() - a)
        cpu.append(time.process_time() - b)
    return {"who": "exp", "rows": rows, "wall": float(np.median(wall[1:])), "cpu": float(np.median(cpu[1:]))}


def measure(who: str, link: str, shape: Shape) -> dict[str, Any]:
    """Runs one fit and says what it took: seconds, MiB, coefficients by name."""
    if who == "exp":
        return measure_exp(shape.rows)
    run = PEERS[who]()
    before = _status("VmRSS")
    small = SMALL_ROWS_CROSSED if shape.crossed else SMALL_ROWS
    run(shape, link, *make_panel(replace(shape, rows=min(small, shape.rows or small), loans=0)))
    _give_back()
    imports = _status("VmRSS")
    risk_set, features = make_panel(shape)
    _give_back()
    panel = _status("VmRSS")
    _forget_peak()
    wall, cpu = time.perf_counter(), time.process_time()
    params, names, more = run(shape, link, risk_set, features)
    wall, cpu = time.perf_counter() - wall, time.process_time() - cpu
    return {
        "who": who, "link": link, "rows": risk_set.n_rows, "loans": risk_set.n_loans, "events": risk_set.events("default"),
        "wall": wall, "cpu": cpu, "imports_mib": imports, "small_fit_mib": imports - before,
        "panel_mib": panel - imports, "peak_mib": _status("VmHWM") - imports,
        "rusage_mib": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024.0,
        "params": dict(zip(names, params, strict=True)), **more,
    }  # fmt: skip


def main(argument: str) -> None:
    asked = json.loads(argument)
    print(json.dumps(measure(asked["who"], asked["link"], Shape(**asked["shape"]))))


if __name__ == "__main__":
    main(sys.argv[1])
