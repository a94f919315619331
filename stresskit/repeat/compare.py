"""Two finished runs side by side: what went in, what was assumed, what was estimated, what came out."""

from __future__ import annotations

import difflib
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from types import MappingProxyType

import pandas as pd

from stresskit.core.errors import UsageError
from stresskit.repeat import compare_tables as tables
from stresskit.repeat.bridge import Bridge, NoBridge, bridge_between
from stresskit.runs.manifest import Manifest, check_outputs, read_manifest

Say = Callable[[str], None]


def _silent(_: str) -> None:
    return None


@dataclass(frozen=True, slots=True)
class Comparison:
    """Differences of run b to run a.

    tables    facts, inputs, reconciliation, scenario_values, coefficients, losses, bridge: see docs/compare.md
    texts     what ("study", "scenario NAME") -> unified diff, of those that differ; "" for one that only one run has
    bridge    what the change of expected loss comes from; None with the reason in ``no_bridge``
    cautions  sentences for the reader
    """

    a: Path
    b: Path
    study: tuple[str, str]
    as_of: tuple[str, str]
    tables: Mapping[str, pd.DataFrame]
    texts: Mapping[str, str]
    bridge: Bridge | None
    no_bridge: str
    cautions: tuple[str, ...]

    @property
    def same(self) -> bool:
        """Whether nothing at all differs."""
        return not self.texts and not any(self.differing.values())

    @property
    def differing(self) -> Mapping[str, int]:
        """Table -> rows in which the two runs differ."""
        return MappingProxyType(
            {name: int(t["differs"].sum()) for name, t in self.tables.items() if "differs" in t}
        )

    @property
    def sentence(self) -> str:
        """What it comes to, in one or two sentences."""
        if self.same:
            return "No difference: inputs, texts, versions, scenario values, coefficients and losses are the same."
        names = {
            "facts": "versions or settings", "inputs": "inputs", "reconciliation": "reconciliation",
            "scenario_values": "scenario values", "coefficients": "coefficients", "losses": "losses",
        }  # fmt: skip
        found = [words for key, words in names.items() if self.differing.get(key)]
        if self.texts:
            found.insert(1 if self.differing.get("facts") else 0, "texts")
        head = f"The runs differ in {_listed(found)}."
        if not self.differing.get("losses"):
            return f"{head} No loss differs."
        return f"{head} {tables.headline(self.tables['losses'])}"


def _listed(words: list[str]) -> str:
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} and {words[-1]}"


def compare(
    a: str | Path,
    b: str | Path,
    *,
    inputs_a: str | Path | None = None,
    inputs_b: str | Path | None = None,
    bridge: bool = True,
    say: Say = _silent,
) -> Comparison:
    """What differs between two run folders, and where the change of expected loss comes from.

    a, b                 folders that run, project or demo wrote; changes are b less a
    inputs_a, inputs_b   folders of the input files, where they were moved
    bridge               re-project to say which part of the change comes from inputs, models and scenarios

    Raises UsageError when a folder is no run folder.
    """
    one, two = _run(a), _run(b)
    texts = text_differences(one, two)
    found = {
        "facts": tables.facts(one, two),
        "inputs": tables.inputs(one, two),
        "reconciliation": tables.reconciliation(one, two),
        "scenario_values": tables.scenario_values(one, two),
        "coefficients": tables.coefficients(one, two),
        "losses": tables.losses(one, two),
    }
    made: Bridge | None = None
    why = "not asked for"
    if bridge:
        try:
            made = bridge_between(one, two, inputs_a=inputs_a, inputs_b=inputs_b, say=say)
            found["bridge"] = made.table
            why = ""
        except NoBridge as e:
            why = str(e)
    return Comparison(
        one.folder,
        two.folder,
        (str(one.plain["study"]), str(two.plain["study"])),
        (str(one.plain["as_of"]), str(two.plain["as_of"])),
        MappingProxyType(found),
        MappingProxyType(texts),
        made,
        why,
        _cautions(one, two),
    )


def _run(folder: str | Path) -> Manifest:
    manifest = read_manifest(folder)
    if manifest.kind != "run":
        remedy = (
            "; name the analysis under analyses in the study and run it"
            if manifest.kind == "analysis"
            else ""
        )
        raise UsageError(
            f"{folder} holds the results of kind {manifest.kind!r}: compare takes folders that run, project or demo wrote{remedy}"
        )
    return manifest


def text_differences(one: Manifest, two: Manifest) -> dict[str, str]:
    """Texts that differ, as unified diffs; a scenario that only one run has stands with an empty diff."""
    out = {}
    if one.study_text != two.study_text:
        out["study"] = _diff(
            one.study_text, two.study_text, *(str(m.plain["study_file"]) for m in (one, two))
        )
    left, right = ({s.name: s for s in m.scenarios} for m in (one, two))
    for name in dict.fromkeys([*left, *right]):
        if name not in left or name not in right:
            out[f"scenario {name} (only in {'a' if name in left else 'b'})"] = ""
        elif left[name].text != right[name].text:
            out[f"scenario {name}"] = _diff(
                left[name].text, right[name].text, left[name].file, right[name].file
            )
    return out


def _diff(old: str, new: str, name_a: str, name_b: str) -> str:
    lines = difflib.unified_diff(
        old.splitlines(), new.splitlines(), f"a/{name_a}", f"b/{name_b}", lineterm=""
    )
    return "\n".join(lines) + "\n"


def _cautions(one: Manifest, two: Manifest) -> tuple[str, ...]:
    out = []
    for letter, manifest in (("a", one), ("b", two)):
        outputs = check_outputs(manifest)
        if not outputs.sound:
            first = (*outputs.edited, *outputs.missing)[0]
            n = len(outputs.edited) + len(outputs.missing)
            out.append(
                f"Files of run {letter} were changed after the run ({n}, first {first}): `stresskit verify` says which figures moved."
            )
    if one.plain["study"] != two.plain["study"]:
        out.append(f"The runs are of two studies: {one.plain['study']} and {two.plain['study']}.")
    out.append(
        "z holds the change of a coefficient against the root of the sum of both squared standard errors, as if the two "
        "estimates were independent. They share most loans as a rule: the change then varies less, and z is too small in size."
    )
    return tuple(out)
