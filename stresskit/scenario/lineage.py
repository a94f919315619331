"""Who says what: scenarios by name, inheritance through based_on, and where an error in them is located."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType

from stresskit.core.errors import TextError
from stresskit.spec.base import meant
from stresskit.spec.load import Loaded
from stresskit.spec.scenario import (
    AddTo,
    Afterwards,
    GivenValues,
    GrowthPath,
    HoldAt,
    MultiplyBy,
    PeakAndBack,
    ReachLevel,
    ScenarioSpec,
    TableMapping,
)

Statement = GivenValues | AddTo | MultiplyBy | PeakAndBack | GrowthPath | HoldAt | ReachLevel
BASELINE = "baseline"


@dataclass(frozen=True, slots=True)
class Entry:
    """One scenario as text: the file it came from, and what it says (a table already read)."""

    loaded: Loaded[ScenarioSpec | TableMapping]
    spec: ScenarioSpec

    @property
    def name(self) -> str:
        return self.spec.scenario

    @property
    def is_table(self) -> bool:
        return isinstance(self.loaded.model, TableMapping)

    @property
    def where(self) -> tuple[str, ...]:
        """Place of an error about the scenario's paths as a whole."""
        return ("paths",) if self.spec.paths else ("scenario",)

    def error(self, keys: tuple[str | int, ...], message: str) -> TextError:
        """The error at a key of the file; a table mapping names its columns under ``variables``."""
        if self.is_table and keys[0] == "paths":
            keys = ("variables", *keys[1:2])
        elif self.is_table and keys == ("starts",):
            keys = ("table",)
        return self.loaded.error(keys, message)


@dataclass(frozen=True, slots=True)
class Lineage:
    """All scenarios of a study. Names are unique and based_on leads to an end (checked by ``lineage``)."""

    entries: Mapping[str, Entry]

    def chain(self, name: str) -> tuple[Entry, ...]:
        """The scenario, then what it is based on, and so on."""
        out = [self.entries[name]]
        while out[-1].spec.based_on is not None:
            out.append(self.entries[out[-1].spec.based_on])
        return tuple(out)

    def path(self, name: str, variable: str) -> tuple[Entry, Statement] | None:
        """The nearest statement of a variable's path, and who makes it."""
        for entry in self.chain(name):
            if variable in entry.spec.paths:
                return entry, entry.spec.paths[variable]
        return None

    def rule(self, name: str, variable: str, *, up_to: str | None = None) -> tuple[Entry, Afterwards] | None:
        """The nearest afterwards rule for a variable, and who states it; None when nobody does.

        ``up_to`` ends the search with that scenario of the chain: rules below it do not count.
        """
        for entry in self.chain(name):
            rule = entry.spec.afterwards
            if isinstance(rule, dict):
                rule = rule.get(variable)
            if rule is not None:
                return entry, rule
            if entry.name == up_to:
                break
        return None

    def completes(self, name: str) -> Entry | None:
        """Who asks for variables without a path to be filled: the nearest that says what is done about them."""
        for entry in self.chain(name):
            if "missing" in entry.spec.model_fields_set:
                return entry if entry.spec.missing == "conditional" else None
        return None

    def stated(self, name: str) -> tuple[str, ...]:
        """Every variable that the scenario or what it is based on gives a path for."""
        return tuple(dict.fromkeys(v for entry in self.chain(name) for v in entry.spec.paths))


def lineage(entries: Sequence[Entry]) -> Lineage:
    """Check names and based_on. Raises TextError for a name used twice, an unknown one, or a circle."""
    known: dict[str, Entry] = {}
    for entry in entries:
        if entry.name in known:
            raise entry.error(
                ("scenario",), f"scenario {entry.name!r} is there twice; give each its own name"
            )
        known[entry.name] = entry
    for entry in entries:
        if entry.spec.based_on is not None and entry.spec.based_on not in known:
            raise entry.error(("based_on",), unknown(entry.spec.based_on, tuple(known)))
    for entry in entries:
        walk = [entry.name]
        while (parent := known[walk[-1]].spec.based_on) is not None:
            walk.append(parent)
            if parent in walk[:-1]:
                raise entry.error(("based_on",), f"based_on goes in a circle: {' -> '.join(walk)}")
    return Lineage(MappingProxyType(known))


def unknown(name: str, known: Sequence[str]) -> str:
    """Sentence for a scenario name that the study does not have."""
    return f"there is no scenario {name!r}; the study has {', '.join(known)}{meant(name, known)}"
