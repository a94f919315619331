"""Other specifications of a study's model: one change each."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd

from stresskit.core.errors import DataError, UsageError
from stresskit.core.period import format_period
from stresskit.evidence.rows import fit_rows
from stresskit.evidence.stability import median_event_period
from stresskit.runs.setting import Setting
from stresskit.search.api import read_search, search_specifications
from stresskit.search.candidates import base_hazard, options
from stresskit.spec.load import Loaded, search_from_text
from stresskit.spec.model_choice import ModelChoice
from stresskit.spec.search import SearchSpec
from stresskit.spec.study import Study
from stresskit.spec.terms import AgeTerm, HazardSpec

Say = Callable[[str], None]
STUDY = "study"
LINKS = {"cloglog": "logit", "logit": "cloglog"}
TAILS = ("hold", "weibull", "loglogistic")


@dataclass(frozen=True, slots=True, eq=False)
class Variant:
    """One change.

    name         short, as weights call it
    kind         study, link, age tail, lag, estimation window, search or payoff
    change       in words
    study        with the change
    first, last  periods of the rows that are fitted to (ordinals); None: all
    in_range     whether it is another view of the same book, so that its loss belongs to the range
    """

    name: str
    kind: str
    change: str
    study: Study
    first: int | None = None
    last: int | None = None
    in_range: bool = True


def variants(setting: Setting, spec: ModelChoice, say: Say) -> tuple[Variant, ...]:
    """The study as it stands, then every change that the section asks for and the study allows."""
    study = setting.file.study
    out = [Variant(STUDY, STUDY, "the study as it stands", study)]
    if spec.search is not None:
        out += _searched(setting, spec, say)
    if spec.links:
        out.append(_other_link(study))
    if spec.tails:
        out += _tails(study)
    out += _lags(study, spec.lags)
    out += _windows(setting, spec)
    if spec.payoff and "payoff" in study.hazards:
        kept = {c: s for c, s in study.hazards.items() if c != "payoff"}
        words = "without the payoff hazard: every loan stays to its end or defaults"
        out.append(Variant("without_payoff", "payoff", words, _with(study, kept), in_range=False))
    return tuple(out)


def _with(study: Study, hazards: Any) -> Study:
    return study.model_copy(update={"hazards": dict(hazards)})


def _other_link(study: Study) -> Variant:
    links = {c: LINKS[s.link] for c, s in study.hazards.items()}
    changed = {c: s.model_copy(update={"link": links[c]}) for c, s in study.hazards.items()}
    same = set(links.values())
    words = (
        f"link {same.pop()} in every hazard"
        if len(same) == 1
        else ", ".join(f"link {v} of {c}" for c, v in links.items())
    )
    return Variant("link", "link", words, _with(study, changed))


def _tails(study: Study) -> Iterator[Variant]:
    """Of the default hazard alone: it is the one whose old ages cost losses."""
    hazard = study.hazards["default"]
    age = hazard.age_term()
    if age is None:
        return
    for rule in TAILS:
        if rule == age.beyond:
            continue
        update: dict[str, Any] = {"beyond": rule}
        if rule == "hold":
            update["tail_from"] = None
        terms = tuple(t.model_copy(update=update) if isinstance(t, AgeTerm) else t for t in hazard.terms)
        changed = {**study.hazards, "default": hazard.model_copy(update={"terms": terms})}
        words = f"default hazard beyond the supported ages: {rule} instead of {age.beyond}"
        yield Variant(f"tail_{rule}", "age tail", words, _with(study, changed))


def used_features(study: Study) -> tuple[str, ...]:
    """Macro features that an exit's hazard reads, in the order of the study."""
    used = {name for s in study.hazards.values() for name in s.macro_features()}
    return () if study.macro is None else tuple(n for n in study.macro.features if n in used)


def _lags(study: Study, steps: Sequence[int]) -> Iterator[Variant]:
    for name in used_features(study):
        if study.macro is None:
            return
        feature = study.macro.features[name]
        for step in steps:
            lag = feature.lag + step
            if lag < 0:
                continue
            features = {**study.macro.features, name: feature.model_copy(update={"lag": lag})}
            macro = study.macro.model_copy(update={"features": features})
            words = f"{name} at lag {lag} instead of {feature.lag}"
            yield Variant(f"lag_{name}_{lag}", "lag", words, study.model_copy(update={"macro": macro}))


def _windows(setting: Setting, spec: ModelChoice) -> Iterator[Variant]:
    study, rows = setting.file.study, setting.data.loans.risk_set
    frequency = setting.file.frequency
    last = int((rows.stay_origin + rows.stay_exit).max())
    if spec.halves:
        fit = setting.fits["default"]
        middle = median_event_period(fit_rows(fit, rows, setting.data.features).rows)
        words = "fitted to {} {}, with half of the defaults"
        label, following = (format_period(p, frequency) for p in (middle, middle + 1))
        yield Variant(
            "first_half", "estimation window", words.format("rows up to", label), study, last=middle
        )
        yield Variant(
            "last_half", "estimation window", words.format("rows from", following), study, first=middle + 1
        )
    for years in spec.without_last_years:
        end = last - years * frequency.per_year
        text = f"fitted without the last {years} year{'s' if years > 1 else ''}, to rows up to {format_period(end, frequency)}"
        yield Variant(f"without_last_{years}", "estimation window", text, study, last=end)


# ---- specifications of a search


def _searched(setting: Setting, spec: ModelChoice, say: Say) -> list[Variant]:
    study, file = setting.file.study, setting.file
    place = file.base / str(spec.search)
    if place.is_dir():
        loaded, table = _finished(place)
    elif place.is_file():
        loaded = read_search(place)
        say(f"searching {loaded.model.search}")
        table = search_specifications(file, setting.data, loaded).table
    else:
        raise UsageError(
            f"analyses.model_choice.search: there is no file or folder {spec.search!r} beside the study"
        )
    if study.macro is None or setting.data.history is None:
        raise UsageError("analyses.model_choice.search: the study has no macro section")
    base = base_hazard(loaded, study)
    known = {o.name: o for o in options(loaded, study.macro, setting.data.history.frequency)}
    ranked = table[table["rank"].notna()].sort_values("rank").head(spec.top)
    out = []
    for k, title in enumerate(ranked["specification"], start=1):
        chosen = [known[name] for name in str(title).split(" + ")]
        own = study.hazards[loaded.model.cause]
        # Everything that the hazard says besides its terms stays as the study has it.
        terms = base.with_terms(chosen).terms
        hazard: HazardSpec = own.model_copy(update={"terms": terms})
        features = {**study.macro.features, **{o.name: o.feature for o in chosen}}
        changed = study.model_copy(update={"macro": study.macro.model_copy(update={"features": features})})
        words = f"{loaded.model.cause} hazard with {title} (rank {k} of the search {loaded.model.search})"
        out.append(
            Variant(
                f"search_{k}", "search", words, _with(changed, {**study.hazards, loaded.model.cause: hazard})
            )
        )
    return out


def _finished(folder: Path) -> tuple[Loaded[SearchSpec], pd.DataFrame]:
    """Text and table of a finished search. Raises DataError for a folder that is none."""
    try:
        record = json.loads((folder / "manifest.json").read_text(encoding="utf-8"))
        table = pd.read_csv(folder / "search.csv")
        said = record["search"]
        text, name = str(said["text"]), str(said["file"])
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise DataError(
            f"{folder.name} is not the folder of a finished search (manifest.json and search.csv): {error}"
        ) from None
    return search_from_text(text, folder / name), table
