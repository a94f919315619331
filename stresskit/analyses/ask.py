"""Which analyses there are, and how a study's section ``analyses`` is answered."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Any

from stresskit.analyses.attribution import attribute
from stresskit.analyses.backtest import backtest
from stresskit.analyses.bands.maker import bands
from stresskit.analyses.files import digests_read
from stresskit.analyses.model_choice import model_choice
from stresskit.analyses.reverse import reverse
from stresskit.core.errors import StresskitError, UsageError
from stresskit.runs.cautions import before_standing
from stresskit.runs.inputs import StudyFile
from stresskit.runs.records import Analysis, StudyResult
from stresskit.runs.setting import Setting
from stresskit.spec.analyses import Analyses

Say = Callable[[str], None]
Progress = Callable[[int, int], None]


def _silent(_: str) -> None:
    return None


def _no_bar(_: int, __: int) -> None:
    return None


@dataclass(frozen=True, slots=True, eq=False)
class Question:
    """What an analysis is given.

    setting   the study set up for projections
    spec      its own part of the study's section ``analyses``, with defaults filled in
    say       told what is being done
    progress  told how many of how many steps are done
    """

    setting: Setting
    spec: Any
    say: Say = _silent
    progress: Progress = _no_bar


Maker = Callable[[Question], Analysis]

#: Key under ``analyses`` -> what answers it; in the order in which a run does them.
MAKERS: Mapping[str, Maker] = {
    "attribution": attribute,
    "bands": bands,
    "reverse": reverse,
    "model_choice": lambda q: model_choice(q.setting, q.spec, q.say, q.progress),
    "backtest": lambda q: backtest(q.setting, q.spec, q.say, q.progress),
}


def asked(file: StudyFile) -> tuple[str, ...]:
    """Keys of the analyses that the study asks for, in the order in which they are done."""
    section = file.study.analyses
    return tuple(key for key in MAKERS if section is not None and getattr(section, key) is not None)


def analyse(
    setting: Setting, key: str, spec: Any = None, *, say: Say = _silent, progress: Progress = _no_bar
) -> Analysis:
    """One analysis; ``spec``: its section, default the study's own or, where it has none, all defaults.

    Raises UsageError for a key that there is no analysis of, and what the analysis raises.
    """
    used = options_of(setting.file, key) if spec is None else spec
    if key not in MAKERS:
        raise _no_analysis(key)
    return MAKERS[key](Question(setting, used, say, progress))


def options_of(file: StudyFile, key: str) -> Any:
    """A study's section of an analysis or, where it has none, all defaults. Raises UsageError for an unknown key."""
    if key not in MAKERS:
        raise _no_analysis(key)
    own = getattr(file.study.analyses, key, None)
    return getattr(Analyses.model_validate({key: {}}), key) if own is None else own


def _no_analysis(key: str) -> UsageError:
    return UsageError(f"there is no analysis {key!r} (analyses: {', '.join(MAKERS)})")


def add_analyses(
    result: StudyResult, setting: Setting, *, say: Say = _silent, progress: Progress = _no_bar
) -> StudyResult:
    """The result with every analysis that the study asks for; ``setting``: what the result was projected with.

    One that cannot be made must not cost the result: it becomes a caution with the reason.
    """
    keys = asked(setting.file)
    if not keys:
        return result
    found: list[Analysis] = []
    for key in keys:
        say(key.replace("_", " "))
        try:
            found.append(analyse(setting, key, say=say, progress=progress))
        except StresskitError as error:
            why = str(error).splitlines()[0]
            lost = f"The analysis {key} could not be made: {why}"
            result = replace(result, cautions=before_standing(result.cautions, (lost,)))
    more = tuple(c for a in found for c in a.cautions)
    record = {**result.record, "analyses": {a.key: dict(a.facts) for a in found}}
    for a in found:
        record["inputs"] = {
            **record["inputs"],
            **digests_read(options_of(setting.file, a.key), setting.file.base),
        }
    record["inputs"] = dict(sorted(record["inputs"].items()))
    seeds = {**result.record.get("seeds", {})}
    seeds |= {a.key: a.facts["seed"] for a in found if "seed" in a.facts}
    record["seeds"] = seeds
    if any("seed" in a.facts for a in found):
        note = "draws of the analyses named are made with these seeds"
        before = result.record.get("seeds_note", "") if result.record.get("seeds") else ""
        record["seeds_note"] = f"{before}; {note}" if before else note
    return replace(
        result,
        analyses=tuple(found),
        cautions=before_standing(result.cautions, more) if more else result.cautions,
        record=record,
    )
