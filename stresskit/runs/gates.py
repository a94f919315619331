"""Which gates the hazards of a study passed, which it accepts, and what happens when neither is so."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from stresskit.core.errors import NumericError
from stresskit.hazard.result import HazardFit
from stresskit.hazard.usable import UNKNOWN, Gate, gate_plain
from stresskit.recovery.regression import REGRESSIONS
from stresskit.spec.study import Study


@dataclass(frozen=True, slots=True)
class Verdict:
    """A gate of a cause's hazard; ``accepted``: the study's reason to go on though it failed, "" without one."""

    cause: str
    gate: Gate
    accepted: str

    @property
    def usable(self) -> bool:
        return self.gate.passed or (bool(self.accepted) and not self.gate.hard)


def _place(cause: str) -> str:
    """Where the study declares the hazard of a cause."""
    keys = {name: key for key, name in REGRESSIONS.items()}
    return f"recovery.{keys[cause]}" if cause in keys else f"hazards.{cause}"


def gate_table(study: Study, fits: Mapping[str, HazardFit]) -> tuple[Verdict, ...]:
    """Every gate of every hazard that the study declares, with the study's own reasons."""
    out = []
    declared = {str(cause): spec for cause, spec in study.hazards.items()}
    declared |= {
        REGRESSIONS[key]: spec for key, spec in study.recovery_hazards().items() if REGRESSIONS[key] in fits
    }
    for cause, spec in declared.items():
        reasons: Mapping[str, str] = {str(name): text for name, text in spec.accept.items()}
        out += [Verdict(cause, g, reasons.get(g.name, "")) for g in fits[cause].gates or (UNKNOWN,)]
    return tuple(out)


def refuse_failed(verdicts: tuple[Verdict, ...]) -> None:
    """NumericError that names every gate that failed and is not accepted."""
    failed = [v for v in verdicts if not v.usable]
    if not failed:
        return
    lines = [
        f"{_place(v.cause)}: gate {v.gate.name} failed: asked {v.gate.asked}; found {v.gate.found}. {v.gate.remedy}."
        for v in failed
    ]
    first = failed[0]
    names = ", ".join(dict.fromkeys(v.gate.name for v in failed))
    raise NumericError(
        f"not projected, because {len(failed)} gates failed ({names}).\n"
        + "\n".join(lines)
        + "\nTo go on all the same, write the "
        f"reason into the study: {_place(first.cause)}.accept: {{{first.gate.name}: reason}}; it is kept in the record "
        "and printed as a caution. `stresskit fit` shows the fit."
    )


def accepted_gates(verdicts: tuple[Verdict, ...]) -> list[str]:
    """Cautions: the failed gates that the study accepts, with its reasons."""
    return [
        f"The {v.cause} hazard failed the gate {v.gate.name} (asked {v.gate.asked}; found {v.gate.found}); accepted in the "
        f"study because: {v.accepted}"
        for v in verdicts
        if not v.gate.passed and v.accepted
    ]


def gate_record(verdicts: tuple[Verdict, ...]) -> list[dict[str, Any]]:
    """For the run's record; a reason is kept also where the gate passed and did not need it."""
    return [{"cause": v.cause, **gate_plain(v.gate), "accepted": v.accepted} for v in verdicts]
