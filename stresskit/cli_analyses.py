"""What the commands of the analyses share. Imported only by them."""

from __future__ import annotations

import sys
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from rich.text import Text

from stresskit.analyses.ask import analyse
from stresskit.analyses.options import in_words
from stresskit.cli_progress import progress_bar
from stresskit.core.errors import UsageError
from stresskit.report.analysis import formats
from stresskit.report.analysis_folder import write_analysis
from stresskit.report.terminal import as_json, console, show, text
from stresskit.runs.api import checked_setting, load_study, prepare
from stresskit.runs.api import fit as fit_all
from stresskit.runs.folder import read_models
from stresskit.runs.place import whole_folder
from stresskit.runs.records import Analysis
from stresskit.runs.what_if import with_what_if
from stresskit.spec.analyses import Analyses

#: A change that takes a key of the study out, where an option of the command line stands against it.
GONE = object()


def spec_with(section: Analyses | None, key: str, changes: Mapping[str, Any]) -> Any:
    """The study's part of ``analyses`` for a key with the options of the command line put over it; None ones do not count.

    Raises UsageError in which each option that does not do is named.
    """
    own = getattr(section, key, None)
    stated = {} if own is None else own.model_dump(exclude_unset=True, by_alias=True, mode="json")
    stated |= {name: value for name, value in changes.items() if value is not None}
    stated = {name: value for name, value in stated.items() if value is not GONE}
    try:
        return getattr(Analyses.model_validate_json(as_json({key: stated})), key)
    except ValueError as error:
        raise UsageError(f"{key}: {in_words(error, 1, key)}") from None


def ask(
    study: Path,
    key: str,
    changes: Mapping[str, Any],
    *,
    out: Path | None,
    models: Path | None,
    replace: bool,
    json: bool,
    say: Callable[[str], None],
    what_if: list[str] | None = None,
) -> None:
    """Answer one analysis of a study: fit (or read models), analyse, write the folder if one is named, print."""
    from_text = load_study(study)
    file = with_what_if(from_text, what_if)
    spec = spec_with(file.study.analyses, key, changes)
    if out is not None:
        with whole_folder(out, replace=replace, probe=True):
            pass
    say("reading")
    data = prepare(file)
    fits = read_models(models) if models else fit_all(file, data, say=say)
    setting, _ = checked_setting(file, data, fits, say=say)
    with progress_bar(key.replace("_", " ")) as progress:
        found = analyse(setting, key, spec, say=say, progress=progress)
    if out is not None:
        write_analysis(found, setting, spec, out, command=sys.argv[1:], replace=replace)
    show_analysis(found, out, json=json)


def show_analysis(found: Analysis, out: Path | None, *, json: bool) -> None:
    """The answer first, then tables, notes and cautions."""
    if json:
        told: dict[str, Any] = {"analysis": found.key, "answer": found.answer, "facts": dict(found.facts)}
        told |= {"tables": {t.name: t.frame for t in found.tables}, "notes": list(found.notes)}
        told |= {"cautions": list(found.cautions), "folder": None if out is None else str(out)}
        print(as_json(told))
        return
    to = console()
    to.print(Text(f"{found.title}: {text(found.answer)}"))
    for t in found.tables:
        if t.shown:
            show(t.frame, title=t.title, formats=formats(t.frame), to=to)
    for line in (*found.notes, *found.cautions):
        to.print(Text(f"  - {text(line)}"))
    if out is not None:
        to.print(Text(f"Folder: {out}"))
