"""From the text of a search to features, specifications and their number."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import combinations

from stresskit.core.period import Frequency
from stresskit.spec.base import Sign, meant
from stresskit.spec.load import Loaded
from stresskit.spec.search import SPANNING, Candidate, SearchSpec, TransformName
from stresskit.spec.study import Feature, Macro, Study
from stresskit.spec.terms import HazardSpec, InteractionTerm, MacroTerm, Term, term_name

_LONGEST_NAME = 80
Key = tuple[str, str, int, int]


@dataclass(frozen=True, slots=True)
class Option:
    """A feature that specifications may take, and the sign its coefficient should have."""

    name: str
    feature: Feature
    expect: Sign | None

    @property
    def term(self) -> MacroTerm:
        return MacroTerm(macro=self.name, transform="none", expect=self.expect)


@dataclass(frozen=True, slots=True)
class BaseHazard:
    """The study's hazard without the macro terms that are searched.

    left_out  names of the terms taken out: macro terms that are not kept, and interactions with them
    """

    spec: HazardSpec
    left_out: tuple[str, ...]

    def with_terms(self, chosen: Sequence[Option]) -> HazardSpec:
        return _spec(self.spec, (*self.spec.terms, *(o.term for o in chosen)))


def _spec(like: HazardSpec, terms: Sequence[object]) -> HazardSpec:
    """``like`` with other terms: its link, estimator and errors stay. Reasons given for its own fit do not pass to others."""
    same = {name: getattr(like, name) for name in HazardSpec.model_fields if name not in ("terms", "accept")}
    return HazardSpec.model_validate({**same, "terms": tuple(terms)})


def base_hazard(loaded: Loaded[SearchSpec], study: Study) -> BaseHazard:
    """The hazard that every specification extends. Raises TextError for a cause or kept term that is not there."""
    search = loaded.model
    if search.cause not in study.hazards:
        raise loaded.error(
            ("cause",), f"the study has no hazard of {search.cause!r} (hazards: {', '.join(study.hazards)})"
        )
    hazard = study.hazards[search.cause]
    there = hazard.macro_features()
    _same_for_all(loaded, study, there)
    for i, name in enumerate(search.keep):
        if name not in there:
            raise loaded.error(
                ("keep", i),
                f"{name!r} is no macro term of the study's {search.cause} hazard{meant(name, there)} "
                f"(its macro terms: {', '.join(there) or 'none'})",
            )
        if name in search.keep[:i]:
            raise loaded.error(("keep", i), f"{name!r} is listed twice")
    gone = set(there) - set(search.keep)
    kept: list[Term] = []
    left: list[Term] = []
    for term in hazard.terms:
        sides = set(term.interaction) if isinstance(term, InteractionTerm) else {term_name(term)}
        searched = isinstance(term, MacroTerm | InteractionTerm) and bool(sides & gone)
        (left if searched else kept).append(term)
    return BaseHazard(_spec(hazard, kept), tuple(term_name(t) for t in left))


def _same_for_all(loaded: Loaded[SearchSpec], study: Study, used: Sequence[str]) -> None:
    """TextError where the hazard reads a feature that goes by a loan column: a search compares one value per period."""
    keys = study.macro.keys() if study.macro is not None else {}
    found = [f"{name} by {keys[name]}" for name in used if name in keys]
    if found:
        raise loaded.error(
            ("cause",),
            f"the study's {loaded.model.cause} hazard reads macro features that go by a loan column ({', '.join(found)}), and a "
            "search cannot judge these yet: it compares features that are the same for all loans. Search a copy of the "
            "study without these terms",
        )


def options(loaded: Loaded[SearchSpec], macro: Macro, frequency: Frequency) -> tuple[Option, ...]:
    """Every feature that the candidates make, in the order of the text, each once.

    macro      the study's macro section
    frequency  of the macro calendar

    Within a candidate a feature that two of its transforms make (a moving average over 1 is the level)
    is taken once. Raises TextError for a variable that the study does not have, and for a feature that
    two candidates, or a candidate and ``keep``, both make.
    """
    search = loaded.model
    known = {_key(f, frequency): n for n, f in macro.features.items() if f.by is None}
    kept = {_key(macro.features[n], frequency): n for n in search.keep}
    makers: dict[Key, int] = {}
    out: list[Option] = []
    for i, candidate in enumerate(search.candidates):
        if candidate.of not in macro.variables:
            raise loaded.error(
                ("candidates", i, "of"),
                f"no macro variable {candidate.of!r}{meant(candidate.of, macro.variables)} "
                f"(macro.variables of the study: {', '.join(sorted(macro.variables))})",
            )
        for feature in _features(candidate):
            key = _key(feature, frequency)
            if makers.get(key) == i:
                continue
            name = known.get(key) or _name(feature, {*macro.features, *(o.name for o in out)})
            if key in kept:
                raise loaded.error(("candidates", i), f"makes {name}, which keep holds already")
            if key in makers:
                raise loaded.error(
                    ("candidates", i), f"makes {name}, which candidates#{makers[key] + 1} makes too"
                )
            makers[key] = i
            out.append(Option(name, feature, candidate.expect))
    return tuple(out)


def _features(candidate: Candidate) -> Iterator[Feature]:
    for transform in candidate.transforms:
        for over in candidate.over if transform in SPANNING else (1,):
            for lag in candidate.lags:
                yield Feature(of=candidate.of, transform=transform, over=over, lag=lag)


def _key(feature: Feature, frequency: Frequency) -> Key:
    """The same for features that are the same numbers."""
    transform: TransformName = feature.transform
    over = feature.over
    if transform == "year_on_year":
        transform, over = "growth", frequency.per_year
    if transform == "level" or (transform == "moving_average" and over == 1):
        transform, over = "level", 1
    return feature.variable, transform, over, feature.lag


def _name(feature: Feature, taken: set[str]) -> str:
    span = str(feature.over) if feature.transform in SPANNING else ""
    tail = f"_{feature.transform}{span}_lag{feature.lag}"
    name = feature.variable[: _LONGEST_NAME - len(tail)] + tail
    for number in range(2, len(taken) + 3):
        if name not in taken:
            break
        end = f"{tail}_{number}"
        name = feature.variable[: _LONGEST_NAME - len(end)] + end
    return name


def counts(chosen: Sequence[Option], most_terms: int, *, many: bool) -> tuple[int, ...]:
    """Number of specifications with 1, 2, ... ``most_terms`` terms, without making them.

    Elementary symmetric sums of the number of features per variable (or of ones, when a variable may
    come ``many`` times).
    """
    sizes = [1] * len(chosen) if many else list(_by_variable(chosen).values())
    sums = [1] + [0] * most_terms
    for size in sizes:
        for k in range(most_terms, 0, -1):
            sums[k] += size * sums[k - 1]
    return tuple(sums[1:])


def _by_variable(chosen: Sequence[Option]) -> dict[str, int]:
    out: dict[str, int] = {}
    for option in chosen:
        out[option.feature.variable] = out.get(option.feature.variable, 0) + 1
    return out


def check_limit(loaded: Loaded[SearchSpec], chosen: Sequence[Option]) -> tuple[int, ...]:
    """The counts by number of terms. Raises TextError when they are more than the search allows."""
    search = loaded.model
    by_terms = counts(chosen, search.most_terms, many=search.same_variable == "many")
    total = sum(by_terms)
    if total > search.limit:
        split = ", ".join(f"{n:,} of {k} term{'s' if k > 1 else ''}" for k, n in enumerate(by_terms, 1))
        raise loaded.error(
            ("limit",),
            f"{len(chosen):,} features make {total:,} specifications ({split}), more than the limit of "
            f"{search.limit:,}. List fewer lags, spans or transforms, lower most_terms, or raise limit: "
            "the more are tried, the less a small p-value means",
        )
    return by_terms


def specifications(chosen: Sequence[Option], most_terms: int, *, many: bool) -> Iterator[tuple[Option, ...]]:
    """Every specification, fewest terms first, in the order of the text."""
    for k in range(1, most_terms + 1):
        for terms in combinations(chosen, k):
            if many or len({o.feature.variable for o in terms}) == k:
                yield terms
