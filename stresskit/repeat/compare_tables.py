"""Tables of two runs, row by row of the same key; column ``differs`` says whether anything in a row does."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np
import pandas as pd

from stresskit.report import numbers as num
from stresskit.runs.manifest import Manifest
from stresskit.runs.records import PORTFOLIO, WEIGHTED

#: Amounts and rates of summary.csv that are set side by side, where both runs have them.
MEASURES = (
    "loans", "exposure", "pd_12m", "pd_lifetime", "lgd", "el_12m", "el_lifetime", "el_12m_adjusted", "el_lifetime_adjusted",
)  # fmt: skip
_COUNTS = ("rows", "loans", "events_default", "events_payoff", "balance")


def read_table(folder: Path, name: str, numbers: Sequence[str]) -> pd.DataFrame:
    """A CSV of a run folder, every cell as text but for the columns of numbers (blank: NaN); no rows without the file."""
    file = folder / name
    if not file.is_file():
        return pd.DataFrame()
    frame = pd.read_csv(file, dtype=str, keep_default_na=False, na_filter=False)
    for column in (c for c in numbers if c in frame):
        # float() reads back every digit; the parser of the table reader may be off by one in the last place
        frame[column] = [float(v) if v != "" else np.nan for v in frame[column]]
    return frame


def _differ(one: pd.Series, two: pd.Series) -> pd.Series:
    """Whether cells differ; two blanks do not."""
    return ~((one == two) | (one.isna() & two.isna()))


def _merged(one: pd.DataFrame, two: pd.DataFrame, keys: list[str], values: Sequence[str]) -> pd.DataFrame:
    """Both tables on their keys: columns value_a, value_b, in the order of a, then what only b has."""
    shared = [v for v in values if v in one or v in two]
    a, b = (f.reindex(columns=[*keys, *shared]) for f in (one, two))
    out = a.merge(b, on=keys, how="outer", suffixes=("_a", "_b"), sort=False, indicator="in")
    seen = pd.concat([a, b])[keys].drop_duplicates().reset_index(drop=True)
    out = seen.merge(out, on=keys, how="left", sort=False)
    out["in"] = out["in"].map({"both": "both", "left_only": "a", "right_only": "b"}).astype(str)
    return out.reset_index(drop=True)


def facts(one: Manifest, two: Manifest) -> pd.DataFrame:
    """what, a, b, differs: name and date of the study, how it was run, versions and build."""
    rows: list[tuple[str, str, str]] = []

    def add(what: str, a: object, b: object) -> None:
        rows.append((what, str(a), str(b)))

    for key in ("study", "as_of"):
        add(key, one.plain[key], two.plain[key])
    for words, a, b in (
        ("models", *("given" if m.models_given else "fitted" for m in (one, two))),
        ("evidence", *("asked" if m.asked_evidence else "not asked" for m in (one, two))),
        ("seeds", *(str(dict(m.plain["seeds"]) or "none") for m in (one, two))),
        ("tables from memory", *(", ".join(m.plain["inputs_given"]) or "none" for m in (one, two))),
    ):
        add(words, a, b)
    for name in sorted({*one.versions, *two.versions}):
        add(name, one.versions.get(name, "not recorded"), two.versions.get(name, "not recorded"))
    for key, words in (
        ("code", "stresskit's own code"),
        ("blas", "linear algebra"),
        ("cpu", "instruction sets"),
    ):
        add(words, *(_short(m.plain["build"].get(key)) for m in (one, two)))
    out = pd.DataFrame(rows, columns=["what", "a", "b"])
    out["differs"] = out["a"] != out["b"]
    return out


def _short(value: object) -> str:
    if isinstance(value, str):
        return value[:12]
    if isinstance(value, list):
        return ", ".join(
            " ".join(str(v) for k, v in sorted(i.items()) if k != "user_api")
            if isinstance(i, dict)
            else str(i)
            for i in value
        )
    return "not recorded"


def inputs(one: Manifest, two: Manifest) -> pd.DataFrame:
    """file, digest_a, digest_b, how (same, changed, only in a, only in b), differs."""
    rows = []
    for name in sorted({*one.inputs, *two.inputs}):
        a, b = one.inputs.get(name, ""), two.inputs.get(name, "")
        how = "only in b" if not a else "only in a" if not b else "same" if a == b else "changed"
        rows.append((name, a[:12], b[:12], how, how != "same"))
    out = pd.DataFrame(rows, columns=["file", "digest_a", "digest_b", "how", "differs"])
    return out.astype({"differs": bool})


def reconciliation(one: Manifest, two: Manifest) -> pd.DataFrame:
    """what, reason, then for each count its value in a, in b, and the change; missing rows count as zero."""
    keys = ["what", "reason"]
    left, right = (read_table(m.folder, "reconciliation.csv", _COUNTS) for m in (one, two))
    out = _merged(left, right, keys, _COUNTS).drop(columns="in")
    changed = pd.Series(False, index=out.index)
    for count in (c for c in _COUNTS if f"{c}_a" in out):
        out[[f"{count}_a", f"{count}_b"]] = out[[f"{count}_a", f"{count}_b"]].fillna(0.0)
        out[f"{count}_change"] = out[f"{count}_b"] - out[f"{count}_a"]
        changed |= out[f"{count}_change"] != 0
    out["differs"] = changed
    return out


def scenario_values(one: Manifest, two: Manifest) -> pd.DataFrame:
    """scenario ("history": observed values), variable, unit, periods (of both), largest_change, period, value_a,
    value_b, only_a, only_b (periods that only one run has), differs: the largest difference of each path, and when."""
    keys = ["scenario", "variable", "unit", "period"]
    left, right = (read_table(m.folder, "paths.csv", ("value",)) for m in (one, two))
    columns = [
        "scenario", "variable", "unit", "periods", "largest_change", "period", "value_a", "value_b", "only_a", "only_b",
        "differs",
    ]  # fmt: skip
    if left.empty and right.empty:
        return pd.DataFrame(columns=columns).astype({"differs": bool})
    both = _merged(left, right, keys, ("value",))
    rows = []
    for (scenario, variable, unit), part in both.groupby(keys[:3], sort=False):
        shared = part[part["in"] == "both"]
        only = [int((part["in"] == side).sum()) for side in ("a", "b")]
        change = (shared["value_b"] - shared["value_a"]).to_numpy()
        at = int(np.nanargmax(np.abs(change))) if np.isfinite(change).any() else -1
        told = (
            (change[at], shared["period"].iloc[at], shared["value_a"].iloc[at], shared["value_b"].iloc[at])
            if at >= 0
            else (np.nan, "", np.nan, np.nan)
        )
        differs = bool(only[0] or only[1] or _differ(shared["value_a"], shared["value_b"]).any())
        rows.append((scenario, variable, unit, len(shared), *told, *only, differs))
    return pd.DataFrame(rows, columns=columns)


def coefficients(one: Manifest, two: Manifest) -> pd.DataFrame:
    """cause, term, coef_a, se_a, coef_b, se_b, change, z, differs; a term that only one run has leaves the other blank.

    z = change / sqrt(se_a^2 + se_b^2), see docs/compare.md for what it can and can not say.
    """
    left, right = (read_table(m.folder, "coefficients.csv", ("coef", "se")) for m in (one, two))
    out = _merged(left, right, ["cause", "term"], ("coef", "se")).drop(columns="in")
    out = out[["cause", "term", "coef_a", "se_a", "coef_b", "se_b"]]
    out["change"] = out["coef_b"] - out["coef_a"]
    spread = np.sqrt(out["se_a"] ** 2 + out["se_b"] ** 2)
    out["z"] = (out["change"] / spread).where(spread > 0)
    out["differs"] = _differ(out["coef_a"], out["coef_b"]) | _differ(out["se_a"], out["se_b"])
    return out


def losses(one: Manifest, two: Manifest) -> pd.DataFrame:
    """scenario, by, segment, then for each measure its value in a, in b, the change, and for amounts the relative one."""
    keys = ["scenario", "by", "segment"]
    left, right = (read_table(m.folder, "summary.csv", MEASURES) for m in (one, two))
    out = _merged(left, right, keys, MEASURES)
    differs = out["in"] != "both"
    new: dict[str, pd.Series] = {}
    for name in (m for m in MEASURES if f"{m}_a" in out):
        a, b = out[f"{name}_a"], out[f"{name}_b"]
        new |= {f"{name}_a": a, f"{name}_b": b, f"{name}_change": b - a}
        if name.startswith(("el_", "exposure")):
            new[f"{name}_relative"] = ((b - a) / a).where(a != 0)
        differs |= _differ(a, b)
    return pd.concat([out[keys], pd.DataFrame(new), differs.rename("differs")], axis=1)


def headline(table: pd.DataFrame) -> str:
    """The largest change of the whole book's lifetime expected loss, in words."""
    whole = table[(table["segment"] == PORTFOLIO) & (table["by"] == "") & table["differs"]]
    whole = whole[whole["el_lifetime_change"].notna()]
    told = whole[whole["scenario"] != WEIGHTED]
    told = told if len(told) else whole
    if not len(told):
        return ""
    top = told.iloc[int(told["el_lifetime_change"].abs().to_numpy().argmax())]
    return (
        f"Under {top['scenario']} the lifetime expected loss goes from {num.amount(top['el_lifetime_a'])} to "
        f"{num.amount(top['el_lifetime_b'])} ({num.signed(num.percent(top['el_lifetime_relative'], 1))})."
    )
