"""Random hazards for comparisons with another program: rows, what the spec says of them, and the design made by hand.

The rows come first. The risk set is made from them in a random order, and the columns of the oracle are computed
on them one by one from the words of the reference: knots by counting, natural splines by scipy, levels by comparison.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline

import stresskit as sk
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.spec.terms import HazardSpec
from tests.hazard.hazard_cases import feature_table, make_spec
from tests.hazard.keyed_cases import REGIONS, keyed_table

Floats = NDArray[np.float64]
START, MONTHS = 24_000, 36
CAUSES = ("default", "payoff")

#: What a seed goes through in turn, so that any twelve seeds in a row meet every entry.
AGES: tuple[dict[str, Any] | None, ...] = (
    {"age": "spline", "knots": 3},
    {"age": "steps", "bands": (4, 9, 15)},
    {"age": "spline", "knots": (5.0, 11.0)},
    {"age": "steps"},
    {"age": "quadratic"},
    {"age": "spline", "knots": 2, "until": 16},
    {"age": "log"},
    {"age": "linear"},
    {"age": "spline"},
    None,
    {"age": "steps", "bands": (6, 12), "support": 10},
    {"age": "spline", "knots": (8.0,), "support": 5},
)
CROSSED: tuple[tuple[tuple[str, str], ...], ...] = (
    (("product", "rate"), ("age", "rate")),
    (("age", "rate"), ("use", "rate")),
    (("age", "prices"), ("product", "prices")),
    (("product", "rate"), ("state", "rate")),
    (("age", "product"), ("rate", "gap")),
    (("age", "ltv"), ("product", "rate"), ("product:rate", "ltv")),
    (("rate", "age"), ("use", "age")),
    (("product", "prices"), ("prices", "gap")),
    (("age", "rate"), ("product", "state")),
    (("product", "rate"), ("use", "product")),
    (("ltv", "product"), ("age", "gap")),
    (("product", "region"), ("age", "rate")),
)
WEIGHTS = ("ones", "counts", "fractions that change")
OFFSETS: tuple[tuple[str, ...], ...] = ((), ("shift",), ("drift",), ("shift", "drift"))
CATEGORIES = ("product", "region", "state")
MOVING = ("use", "state", "drift")
MACROS = ("rate", "gap", "prices")


@dataclass(frozen=True)
class Case:
    """One spec with its data, and the same in full.

    rows      all rows: loan, age, period, cause, weight, columns of loans, ``prices`` as each loan reads it
    risk_set  made of the rows in another order
    """

    seed: int
    spec: HazardSpec
    cause: str
    rows: pd.DataFrame
    risk_set: RiskSet
    features: FeatureTable

    def features_met(self) -> set[str]:
        """What the case is a test of, in words."""
        said = {self.spec.link, self.cause, str(self.rows.attrs["weights"])}
        said |= {f"age {t.age}" for t in [self.spec.age_term()] if t is not None}
        said |= {"no age"} if self.spec.age_term() is None else set()
        for term in self.spec.model_dump(by_alias=True)["terms"]:
            said |= {kind for kind in ("offset", "interaction") if kind in term}
            said |= {f"{kind} {term['transform']}" for kind in ("loan", "macro") if kind in term}
            if "interaction" in term:
                parts = ":".join(term["interaction"]).split(":")
                kinds = sorted(
                    "age"
                    if p == "age"
                    else "category"
                    if p in CATEGORIES
                    else "macro"
                    if p in MACROS
                    else "number"
                    for p in parts
                )
                said |= {" x ".join(kinds)} | {
                    f"{p} in a product" for p in parts if p in ("use", "state", "prices")
                }
        names = self.spec.loan_columns()
        said |= {f"moving {name}" for name in names if name in MOVING} | {
            f"category {n}" for n in names if n in CATEGORIES
        }
        said |= {"keyed"} if "prices" in self.spec.macro_features() else set()
        said |= {"no intercept"} if not self.spec.intercept else set()
        said |= {"ridge"} if self.spec.ridge else set()
        said |= {"ridge on age"} if self.spec.ridge_age else set()
        age, new = self.rows["age"].to_numpy(), ~self.rows["loan"].duplicated().to_numpy()
        said |= {"late entry"} if (age[new] > 1).any() else set()
        said |= {"gaps"} if (np.diff(age)[~new[1:]] > 1).any() else set()
        return said | (
            {"holes in the macro data"} if self.rows[list(MACROS)].isna().any(axis=None) else set()
        )


def draw(seed: int, *, loans: int = 500) -> Case:
    rng = np.random.default_rng([20_26, seed])
    short = AGES[seed % 12] == {"age": "steps"}
    rows, features = _rows(rng, loans, longest=8 if short else 26, holes=seed % 3 != 0)
    rows["weight"] = _weights(rng, rows, WEIGHTS[seed % 3])
    rows.attrs["weights"] = WEIGHTS[seed % 3]
    static, moving = ["ltv", "product", "region", "shift"], ["use", "state", "drift"]
    shuffled = rows.sample(frac=1.0, random_state=int(rng.integers(1 << 30)))
    risk_set = sk.risk_set_from_rows(
        shuffled, loan="loan", age="age", period="period", event="cause", causes=CAUSES, weight="weight", static=static, moving=moving,
    )  # fmt: skip
    return Case(seed, _spec(rng, seed), CAUSES[int(rng.integers(2))], rows, risk_set, features)


def _spec(rng: np.random.Generator, seed: int) -> HazardSpec:
    age = AGES[seed % 12]
    # "steps" of every age have a level for each: products with them leave cells without events
    fits = [
        c for c in CROSSED[(seed + seed // 12) % 12] if age not in (None, {"age": "steps"}) or "age" not in c
    ]
    needed = {name for pair in fits for side in pair for name in side.split(":")} - {"age"}
    chance = {
        "ltv": 0.8,
        "product": 0.7,
        "region": 0.2,
        "use": 0.6,
        "state": 0.3,
        "rate": 0.8,
        "gap": 0.3,
        "prices": 0.3,
    }
    if "drift" not in OFFSETS[seed % 4]:
        # Half of the designs move only where an interaction says so: they are for the factored sums.
        chance |= {"use": 0.0, "state": 0.0}
    names = [name for name, p in chance.items() if name in needed or rng.random() < p]
    terms: list[dict[str, Any]] = [] if age is None else [age]
    for name in names:
        if name in CATEGORIES:
            levels = {"product": ("fixed", "floating", "other"), "region": REGIONS, "state": ("a", "b", "c")}[
                name
            ]
            given = {"reference": str(rng.choice(levels))} if rng.random() < 0.5 else {}
            terms.append({"loan": name, "as": "category", **given})
        elif name in MACROS:
            terms.append({"macro": name, "transform": str(rng.choice(["none", "standardise"]))})
        else:
            terms.append({"loan": name, "transform": str(rng.choice(["none", "standardise", "log"]))})
    terms += [{"offset": name} for name in OFFSETS[seed % 4]]
    mixed = [terms[i] for i in rng.permutation(len(terms))] + [{"interaction": pair} for pair in fits]
    carried = any(t.get("age") in ("steps", "spline") or t.get("as") == "category" for t in mixed)
    ridge = {"ridge": float(rng.uniform(1.0, 40.0))} if seed % 5 == 4 else {}
    intercept = not (carried and seed % 4 == 1)
    if ridge and intercept and age is not None and rng.random() < 0.5:
        ridge["ridge_age"] = True
    return make_spec(
        *mixed, link=("cloglog", "logit")[seed % 2], intercept=intercept, covariance="two_way", **ridge
    )


def _rows(
    rng: np.random.Generator, loans: int, *, longest: int, holes: bool
) -> tuple[pd.DataFrame, FeatureTable]:
    """Cohorts that start before and within 36 months, come in late, are away for a while, and leave by two causes."""
    walk = {name: np.cumsum(rng.normal(0.0, 0.3, MONTHS)) for name in ("rate", *REGIONS)}
    walk["gap"] = rng.normal(0.0, 1.0, MONTHS)
    origin = START + rng.integers(-longest // 2, MONTHS - 3, loans)
    first = np.where(rng.random(loans) < 0.3, rng.integers(1, longest // 3 + 2, loans), 1)
    away = np.where(rng.random(loans) < 0.25, rng.integers(2, longest - 2, loans), longest + 9)
    back = away + rng.integers(1, 4, loans)
    own: dict[str, Any] = {
        "loan": np.array([f"L{i}" for i in rng.permutation(loans)], dtype=object),
        "ltv": rng.uniform(0.4, 1.2, loans),
        "product": rng.choice(["fixed", "floating", "other"], loans, p=[0.45, 0.3, 0.25]).astype(object),
        "region": rng.choice(REGIONS, loans, p=[0.4, 0.35, 0.25]).astype(object),
        "shift": rng.normal(0.0, 0.3, loans),
    }
    level = {"fixed": 0.0, "floating": 0.4, "other": -0.3}
    fixed = 1.2 * (own["ltv"] - 0.8) + np.array([level[p] for p in own["product"]]) + own["shift"]
    alive, pieces = np.ones(loans, dtype=bool), []
    for t in range(MONTHS):
        age = START + t - origin
        at = np.flatnonzero(alive & (age >= first) & (age <= longest) & ((age < away) | (age >= back)))
        use, drift = rng.lognormal(-0.5, 0.6, at.size), rng.normal(0.0, 0.3, at.size)
        place = np.array([REGIONS.index(r) for r in own["region"][at]])
        prices = np.array([walk[r][t] for r in REGIONS])[place]
        curve = 0.06 * age[at] - 0.003 * age[at] ** 2
        eta = -3.0 + curve + fixed[at] + 0.3 * walk["rate"][t] - 0.2 * prices + 0.3 * use + drift
        bad, good = np.exp(eta), np.exp(-3.0 - 0.2 * walk["rate"][t] + 0.5 * fixed[at])
        u = rng.random(at.size) * (1.0 + bad + good)
        cause = np.where(u < bad, 1, np.where(u < bad + good, 2, 0))
        alive[at] = cause == 0
        state = rng.choice(np.array(["a", "b", "c"], dtype=object), at.size, p=[0.5, 0.3, 0.2])
        pieces.append(
            pd.DataFrame({k: v[at] for k, v in own.items()}).assign(
                age=age[at], period=START + t, cause=cause, use=use, drift=drift, state=state,
                rate=walk["rate"][t], gap=walk["gap"][t], prices=prices,
            )
        )  # fmt: skip
    rows = pd.concat(pieces, ignore_index=True).sort_values(["loan", "age"], ignore_index=True)
    if holes:
        low = int(rng.integers(4, MONTHS - 6))
        for name, months in (("rate", (low, low + 1)), (str(rng.choice(REGIONS)), (low + 3,)), ("gap", (0,))):
            walk[name][list(months)] = np.nan
            of = rows["region"] == name if name in REGIONS else np.ones(len(rows), dtype=bool)
            lost = of & rows["period"].isin([START + m for m in months])
            rows.loc[lost, "prices" if name in REGIONS else name] = np.nan
    columns = {r if r not in REGIONS else f"prices[{r}]": v for r, v in walk.items()}
    return rows, keyed_table(feature_table(START, **columns), "prices", "region", REGIONS)


def _weights(rng: np.random.Generator, rows: pd.DataFrame, kind: str) -> Floats:
    """Counts stay with a loan; fractions change with every sixth age."""
    if kind == "ones":
        return np.ones(len(rows))
    by = [rows["loan"]] if kind == "counts" else [rows["loan"], rows["age"] // 6]
    code = rows.groupby(by).ngroup().to_numpy()
    drawn = rng.integers(1, 5, code.max() + 1) if kind == "counts" else rng.uniform(0.3, 2.0, code.max() + 1)
    return np.asarray(drawn[code], dtype=np.float64)


# ---- the same by hand


def at_risk(case: Case) -> pd.DataFrame:
    """Rows at risk of the cause whose macro features are known, with ``event``; sorted by period and loan."""
    number = CAUSES.index(case.cause) + 1
    known = case.rows[list(case.spec.macro_features())].notna().all(axis=1)
    rows = case.rows[known & case.rows["cause"].isin([0, number])]
    return rows.assign(event=(rows["cause"] == number) * 1.0).sort_values(
        ["period", "loan"], ignore_index=True
    )


@dataclass
class Oracle:
    """x: (n, k) columns by their labels; owner: label -> the term; carrier: the term in place of the intercept."""

    x: pd.DataFrame
    owner: dict[str, str]
    carrier: str
    offset: Floats


def oracle(case: Case, rows: pd.DataFrame) -> Oracle:
    spec = case.spec.model_dump(by_alias=True)
    full = "" if spec["intercept"] else _carrier(spec["terms"])
    main: dict[str, pd.DataFrame] = {}
    crossed: dict[str, pd.DataFrame] = {}
    if spec["intercept"]:
        main["intercept"] = pd.DataFrame({"intercept": np.ones(len(rows))})
    offset = np.zeros(len(rows))
    for term in spec["terms"]:
        if "offset" in term:
            offset += rows[term["offset"]].to_numpy()
            continue
        if "interaction" in term:
            left, right = (crossed[side] for side in term["interaction"])
            name = ":".join(term["interaction"])
            main[name] = crossed[name] = pd.DataFrame(
                {f"{a}:{b}": left[a] * right[b] for a in left for b in right}
            )
            continue
        name, levels, reference = _term(term, rows)
        crossed[name] = levels.drop(columns=reference)
        main[name] = levels if name == full else crossed[name]
    owner = {label: name for name, part in main.items() for label in part}
    return Oracle(pd.concat(list(main.values()), axis=1), owner, full, offset)


def _carrier(terms: list[dict[str, Any]]) -> str:
    if any(t.get("age") in ("steps", "spline") for t in terms):
        return "age"
    return str(next(t["loan"] for t in terms if t.get("as") == "category"))


def _term(term: dict[str, Any], rows: pd.DataFrame) -> tuple[str, pd.DataFrame, list[str]]:
    """(name, columns of all levels, the reference left out)."""
    weight = rows["weight"].to_numpy()
    if "age" in term:
        return "age", *_age(term, rows)
    name = str(term.get("loan", term.get("macro")))
    if term.get("as") == "category":
        levels = pd.DataFrame({f"{name}[{v}]": (rows[name] == v) * 1.0 for v in sorted(set(rows[name]))})
        most = max(levels, key=lambda c: float(levels[c] @ weight))
        return name, levels, [f"{name}[{term['reference']}]" if term["reference"] else most]
    x = rows[name].to_numpy(dtype=float)
    if term["transform"] == "log":
        x = np.log(x)
    if term["transform"] == "standardise":
        mean = np.average(x, weights=weight)
        x = (x - mean) / np.sqrt(np.average((x - mean) ** 2, weights=weight))
    return name, pd.DataFrame({name: x}), []


def _age(term: dict[str, Any], rows: pd.DataFrame) -> tuple[pd.DataFrame, list[str]]:
    age, kind = rows["age"].to_numpy(), term["age"]
    if kind in ("linear", "log", "quadratic"):
        columns = {"age[log]": np.log(age)} if kind == "log" else {"age[linear]": age * 1.0}
        return pd.DataFrame(columns | ({"age[square]": age**2.0} if kind == "quadratic" else {})), []
    deaths = (rows["weight"] * rows["event"]).groupby(rows["age"]).sum()
    if kind == "steps":
        ends = [*(term["bands"] or sorted(set(age))[:-1]), age.max()]
        starts = [1, *(e + 1 for e in ends[:-1])]
        if term["bands"] is None:
            names = [f"age[{e}]" for e in ends]
        else:
            names = [
                *(f"age[{a}-{b}]" if a < b else f"age[{a}]" for a, b in zip(starts, ends[:-1])),
                f"age[{starts[-1]}+]",
            ]
        inside = {n: (age >= a) & (age <= b) for n, a, b in zip(names, starts, ends, strict=True)}
        lived = {n: float((rows["weight"] * rows["event"])[i].sum()) for n, i in inside.items()}
        return pd.DataFrame({n: i * 1.0 for n, i in inside.items()}), [max(lived, key=lambda n: lived[n])]
    knots = np.array(_knots(term, rows, deaths))
    curve = CubicSpline(knots, np.eye(knots.size), bc_type="natural")
    names = [f"age[{k:g}]" for k in knots]
    return pd.DataFrame(curve(np.clip(age, knots[0], knots[-1])), columns=names), [names[knots.size // 2]]


def _knots(term: dict[str, Any], rows: pd.DataFrame, deaths: pd.Series[float]) -> list[float]:
    """As the reference words it: the ends by support and by events left, the others stated or at quantiles of event ages."""
    alive = rows.groupby("age")["weight"].sum()
    enough = term["support"] or min(50.0, alive.max() / 20.0)
    last = max(a for a in alive.index if alive[a] >= enough)
    if term["until"]:
        last = term["until"]
    else:
        few = min(20.0, deaths.sum() / 20.0)
        last = min(
            last, max(a for a in deaths.index if deaths[a] > 0 and deaths[deaths.index >= a].sum() >= few)
        )
    asked = term["knots"] or 5
    if isinstance(asked, tuple):
        return [float(alive.index.min()), *asked, float(last)]
    total = deaths[deaths.index <= last].sum()
    inner = [
        min(a for a in deaths.index if deaths[deaths.index <= a].sum() >= share * total)
        for share in np.arange(1, asked + 1) / (asked + 1)
    ]
    return [float(alive.index.min()), *(float(a) for a in inner), float(last)]


def ridge_weights(case: Case, made: Oracle, rows: pd.DataFrame) -> Floats:
    """(k,) ridge times the weighted variance of each column, 0 where nothing is penalised."""
    out = []
    for label in made.x:
        x, weight = made.x[label].to_numpy(), rows["weight"].to_numpy()
        free = {"intercept", made.carrier} | (set() if case.spec.ridge_age else {"age"})
        variance = np.average((x - np.average(x, weights=weight)) ** 2, weights=weight)
        out.append(0.0 if made.owner[label] in free else case.spec.ridge * variance)
    return np.array(out)


def with_hac_lag(spec: HazardSpec, lag: int) -> HazardSpec:
    return HazardSpec.model_validate(
        spec.model_dump(by_alias=True) | {"covariance": "period_hac", "hac_lag": lag}
    )
