"""From a mapping file to scenario files: read, make, check against a study, write."""

from __future__ import annotations

import tempfile
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from types import MappingProxyType

import numpy as np

from stresskit.core.errors import DataError, TextError, UsageError
from stresskit.core.period import Frequency, convert, format_period, parse_period
from stresskit.core.values import MacroHistory, ScenarioPath
from stresskit.imports.join import Past
from stresskit.imports.paths import ImportedPath, Importer
from stresskit.imports.rows import first_projected
from stresskit.imports.stated import Tables
from stresskit.imports.text import FIRST_WORDS, history_text, scenario_text
from stresskit.macro.calendar import first_after
from stresskit.macro.read import read_history
from stresskit.macro.table import Layout, read_csv, wide_table
from stresskit.macro.var_fit import fit_var
from stresskit.runs.files import put_files
from stresskit.runs.plausibility import plausibility_tables
from stresskit.runs.record import digest_file
from stresskit.scenario.checks import JOINS, path_findings
from stresskit.scenario.plausibility import assess_paths
from stresskit.scenario.resolve import resolve
from stresskit.spec.base import meant
from stresskit.spec.imports import ImportMapping
from stresskit.spec.load import Loaded, load_import, load_scenario, load_study
from stresskit.spec.scenario import BackTo, ScenarioSpec, TableMapping
from stresskit.spec.study import Study

#: Periods beyond the stated ones over which an import is tried in a study.
_YEARS_BEYOND = 1


@dataclass(frozen=True, slots=True)
class ImportResult:
    """What an import made, nothing written yet.

    paths     scenario -> levels by variable, with the sheets they come from
    texts     scenario -> YAML
    history   the table's own macro history as CSV, None when it has none
    left_out  variables that the history lacks because the table does not state their levels
    cautions  scenario -> what a reader should look at
    findings  what the study's checks say about the resolved paths; empty without a study
    """

    mapping: Loaded[ImportMapping]
    paths: Mapping[str, ImportedPath]
    texts: Mapping[str, str]
    history: str | None
    left_out: tuple[str, ...]
    cautions: Mapping[str, tuple[str, ...]]
    findings: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class _StudySide:
    loaded: Loaded[Study]
    history: MacroHistory


def import_table(
    mapping: str | Path, *, scenarios: Sequence[str] = (), study: str | Path | None = None
) -> ImportResult:
    """Scenarios of a published table, as text that the scenario loader has read back to the same numbers.

    scenarios  which of the mapping's to make; all of them when empty
    study      a study whose macro history the scenarios join, and against which they are checked

    Raises TextError (mapping, study), DataError (tables), UsageError (a scenario that the mapping lacks).
    """
    loaded = load_import(Path(mapping))
    known = tuple(loaded.model.scenarios)
    for name in scenarios:
        if name not in known:
            raise UsageError(
                f"{loaded.file} has no scenario {name!r}; it has {', '.join(known)}{meant(name, known)}"
            )
    side = None if study is None else _study_side(loaded, Path(study))
    importer = Importer(Tables(loaded), _given(loaded, side))
    paths = {name: importer.path(name) for name in scenarios or known}
    texts = {name: scenario_text(path, loaded) for name, path in paths.items()}
    read = _read_back(paths, texts)
    findings = [] if side is None else _checked(loaded, side, read)
    history, left_out = _history(importer, paths)
    return ImportResult(
        loaded,
        MappingProxyType(paths),
        MappingProxyType(texts),
        history,
        left_out,
        MappingProxyType({name: path.cautions for name, path in paths.items()}),
        tuple(findings),
    )


def write_import(
    result: ImportResult, out: str | Path, *, history: str | Path | None = None, replace: bool = False
) -> tuple[Path, ...]:
    """Write the scenarios: to the file ``out`` (.yaml, one scenario) or as NAME.yaml into the folder ``out``.

    history  file for the table's macro history
    replace  overwrite files that an import wrote before; other files are never overwritten

    Raises OutputError, and UsageError when the places do not fit what is written. All files or none.
    """
    out = Path(out)
    if out.suffix.lower() in (".yaml", ".yml"):
        if len(result.texts) > 1:
            raise UsageError(
                f"{out} is one file, and there are {len(result.texts)} scenarios ({', '.join(result.texts)}): name a folder, "
                "or choose one scenario"
            )
        texts = {out: next(iter(result.texts.values()))}
    elif out.exists() and not out.is_dir():
        raise UsageError(f"{out} is neither a folder nor a .yaml file")
    else:
        texts = {out / f"{name}.yaml": text for name, text in result.texts.items()}
    ours = dict.fromkeys(texts, FIRST_WORDS)
    if history is not None:
        if result.history is None:
            raise UsageError(
                f"the table holds no history of levels to write to {history}; leave --history out"
            )
        if Path(history).resolve() in {p.resolve() for p in texts}:
            raise UsageError(f"{history} is named for a scenario and for the history; choose another place")
        texts[Path(history)] = result.history
        ours[Path(history)] = result.history.partition("\n")[0] + "\n"
    put_files(texts, replace=replace, ours=ours)
    return tuple(texts)


def _study_side(loaded: Loaded[ImportMapping], study: Path) -> _StudySide:
    """The study's history, and that the mapping speaks of the same units and period as the study."""
    text = load_study(study)
    macro, model = text.model.macro, Frequency(text.model.frequency)
    if macro is None:
        raise text.error((), "the study has no macro section, so no scenario can be imported for it")
    history = read_history(macro, base=text.file.parent, model=model)
    wanted = parse_period(text.model.as_of, Frequency.MONTH)
    if model is Frequency.QUARTER:
        wanted = int(convert(parse_period(text.model.as_of, model), model, Frequency.MONTH))
    first = [
        int(convert(end + 1, Frequency.MONTH, history.frequency))
        for end in (wanted, parse_period(loaded.model.as_of, Frequency.MONTH))
    ]
    if first[0] != first[1]:
        said = [format_period(p, history.frequency) for p in first]
        raise loaded.error(
            ("as_of",),
            f"the mapping's scenarios start in {said[1]}, but the study's as_of {text.model.as_of} asks for {said[0]}: take the "
            "vintage of the table that starts there, or move as_of",
        )
    for name in loaded.model.scenarios:
        for variable, spec in loaded.model.of(name).items():
            unit = history.units.get(variable)
            if unit is not None and unit != spec.unit:
                own = variable in loaded.model.scenarios[name].variables
                keys = (("scenarios", name) if own else ()) + ("variables", variable, "unit")
                raise loaded.error(keys, f"{variable} is in {unit} in the study, in {spec.unit} here")
    return _StudySide(text, history)


def _given(loaded: Loaded[ImportMapping], side: _StudySide | None) -> dict[str, Past]:
    """History to join: the study's, else the file that the mapping names, else none (the table's own serves)."""
    m = loaded.model
    if side is not None:
        frequency, start = side.history.frequency, side.history.start
        macro, values = side.loaded.model.macro, dict(side.history.values)
        assert macro is not None
        name, file = macro.file, side.loaded.file.parent / macro.file
    elif m.join is not None:
        file = loaded.file.parent / m.join.file
        wanted = {v for s in m.scenarios for v in m.of(s)}
        frame = read_csv(file)
        columns = {
            v: m.join.columns.get(v, v) for v in sorted(wanted) if m.join.columns.get(v, v) in frame.columns
        }
        for v, column in m.join.columns.items():
            if column not in frame.columns:
                raise loaded.error(
                    ("join", "columns", v),
                    f"{m.join.file} has no column {column!r}; it has {', '.join(frame.columns)}{meant(column, frame.columns)}",
                )
        if not columns:
            raise loaded.error(
                ("join",), f"{m.join.file} has none of the variables; say which column is which: columns"
            )
        table = wide_table(frame, Layout(m.join.period, m.join.only, columns), source=str(file))
        frequency, start, values, name = table.frequency, table.start, dict(table.values), m.join.file
    else:
        return {}
    first = first_projected(m.as_of, frequency.value)
    assert first is not None
    end = start + len(next(iter(values.values())))
    if not start < first <= end:
        said = [format_period(p, frequency) for p in (start, end - 1, first - 1)]
        raise DataError(
            f"{name}: the history to join runs from {said[0]} to {said[1]}, and as_of {m.as_of} needs it up to {said[2]}"
        )
    kept, digest = {v: x[: first - start] for v, x in values.items()}, digest_file(file)
    return {v: Past(frequency.value, x[np.isfinite(x)], file.name, False, digest) for v, x in kept.items()}


def _read_back(
    paths: Mapping[str, ImportedPath], texts: Mapping[str, str]
) -> dict[str, Loaded[ScenarioSpec | TableMapping]]:
    """Every text through the scenario loader; a number that differs would be a bug of ours."""
    out = {}
    with tempfile.TemporaryDirectory() as folder:
        for name, text in texts.items():
            file = Path(folder) / f"{name}.yaml"
            file.write_text(text, encoding="utf-8", newline="\n")
            try:
                read = load_scenario(file)
            except TextError as error:
                raise TextError(f"scenario {name!r} cannot be written as text: {error}") from error
            assert isinstance(read.model, ScenarioSpec)
            for variable, values in paths[name].values.items():
                again = getattr(read.model.paths[variable], "values", ())
                if np.array(again, dtype=np.float64).tobytes() != values.astype(np.float64).tobytes():
                    raise AssertionError(f"{name}.{variable}: the text does not hold the same numbers")
            out[name] = read
    return out


def _checked(
    loaded: Loaded[ImportMapping],
    side: _StudySide,
    made: Mapping[str, Loaded[ScenarioSpec | TableMapping]],
) -> list[str]:
    """The scenarios resolved as the study would, and what its checks say about their paths.

    The study's own scenarios take part only where these refer to others: an older one that is still to be
    replaced must not stand in the way. Weights are left out, since they are a matter of the study as a whole.
    """
    study, base = side.loaded.model, side.loaded.file.parent
    files = [base / f for f in study.scenarios if (base / f).is_file()] if _refers(loaded.model, made) else []
    beside = [o for o in map(load_scenario, files) if o.model.scenario not in made]
    everything = [_unweighted(x) for x in (*made.values(), *beside)]
    model = Frequency(study.frequency)
    as_of = parse_period(study.as_of, model)
    longest = max(
        max(len(getattr(p, "values", ())) for p in x.model.paths.values())
        for x in made.values()
        if isinstance(x.model, ScenarioSpec)
    )
    years = -(-longest // side.history.frequency.per_year) + _YEARS_BEYOND
    var = None
    if study.macro is not None and study.macro.var is not None:
        end = first_after(as_of, model=model, macro=side.history.frequency) - 1
        var = fit_var(study.macro.var, side.history, end=end)
    resolved: tuple[ScenarioPath, ...] = resolve(
        everything, study.macro, side.history,
        as_of=as_of, model=model, horizon=years * model.per_year, var=var,
    )  # fmt: skip
    ours = [p for p in resolved if p.name in made]
    found = path_findings(ours, side.history)
    out = [words for words in found if JOINS not in words]  # the import has said that itself
    if var is not None:
        out.extend(plausibility_tables(var, assess_paths(var, ours), side.history.units).sentences)
    return out


def _refers(mapping: ImportMapping, made: Mapping[str, object]) -> bool:
    """Whether a scenario is based on another, or goes back to the baseline."""
    for name in made:
        spec = mapping.scenarios[name]
        rules = spec.afterwards.values() if isinstance(spec.afterwards, dict) else (spec.afterwards,)
        if spec.based_on is not None or any(r == "baseline" or isinstance(r, BackTo) for r in rules):
            return True
    return False


def _unweighted(item: Loaded[ScenarioSpec | TableMapping]) -> Loaded[ScenarioSpec | TableMapping]:
    model = item.model.model_copy(update={"weight": None})
    return Loaded(model, item.file, item.text, item.digest, item.marks)


def _history(importer: Importer, paths: Mapping[str, ImportedPath]) -> tuple[str | None, tuple[str, ...]]:
    """The table's own history of the variables whose levels it states, from the first scenario that has one."""
    name = next((n for n in paths if importer.tables.stated(n).before is not None), None)
    if name is None:
        return None, ()
    before = importer.tables.stated(name).before
    assert before is not None
    mapping = importer.mapping.of(name)
    kept = [v for v, s in mapping.items() if s.growth is None and s.deviation_from is None]
    columns = {v: importer.tables.own_levels(name, v) for v in kept}
    held = [v for v in kept if columns[v].size and np.isfinite(columns[v]).any()]
    left = tuple(v for v in mapping if v not in held)
    if not held or before.calendar == "year":
        return None, tuple(mapping)
    return history_text(columns, before.start, before.calendar, held), left
