"""The report's words and tables on how plausible scenarios are."""

from __future__ import annotations

from dataclasses import dataclass

from stresskit.report import numbers as num
from stresskit.report.macro_pictures import band_words
from stresskit.report.tables import Cell, Table, columns, cut, row
from stresskit.runs.plausibility import IMPLAUSIBLE, furthest_words, pair_words
from stresskit.runs.records import PlausibilityTables, StudyResult

_REST = "plausibility/{}.csv"


@dataclass(frozen=True, slots=True)
class PlausibilityPage:
    """Lead and model in sentences, a row per scenario and span, sentences on why, further tables."""

    lead: str
    scenarios: Table
    why: tuple[str, ...]
    model: str
    details: tuple[Table, ...]


def page(result: StudyResult) -> PlausibilityPage | None:
    """The part of the report; None when the study declares no VAR."""
    found = result.plausibility
    if found is None:
        return None
    details = [_variables(found), _episodes(found), _forecast(found)]
    return PlausibilityPage(
        _lead(), _scenarios(found), _why(found), _model(found), tuple(t for t in details if t.rows)
    )


def _lead() -> str:
    return (
        "Distance of what a scenario states from what a vector autoregression (VAR) of macro history expects, in one figure: d² grows with "
        "the surprises that the path needs. If the VAR were the truth, d² of a random path would be chi-square with as many degrees of "
        "freedom as there are stated values. Filled values and those of a rule for afterwards are not judged. A long calm stretch makes up "
        "for a violent start, so the first year stands beside the whole."
    )


def _model(found: PlausibilityTables) -> str:
    m = found.model
    made = ", ".join(f"{name} ({str(how).replace('_', ' ')})" for name, how in m["variables"].items())
    chosen = "as declared" if m["criterion"] == "fixed" else f"chosen by {str(m['criterion']).upper()}"
    return (
        f"VAR of {made}: {m['lags']} lag{'s' if m['lags'] > 1 else ''}, {chosen}; {m['periods']} periods, {m['first']} to {m['last']}; "
        f"largest root {m['largest_root']:.3f}. Its parameters count as known, so true shares are somewhat larger than those shown, and the "
        "normal law is only a guide far out. Windows of history overlap and are judged by parameters that were estimated on them."
    )


def _scenarios(found: PlausibilityTables) -> Table:
    worst = found.episodes[found.episodes["place"] == 1] if len(found.episodes) else found.episodes
    furthest = {
        (r["scenario"], r["span"]): f"{r['first']} to {r['last']} (d² {r['d2']:.1f})"
        for r in worst.to_dict("records")
    }
    out = []
    for r in found.scenarios.to_dict("records"):
        among = below = worst_one = ""
        if r["windows"]:
            among = f"{r['rank']} of {r['windows'] + 1}"
            below = f"{num.percent(r['beyond_5pct'], 0)} of windows beyond the 5% radius"
            worst_one = f"furthest window of history: {furthest[r['scenario'], r['span']]}"
        mark = "warn" if r["tail"] < IMPLAUSIBLE and r["stated"] else ""
        out.append(
            row(
                str(r["scenario"]),
                Cell(str(r["span"]), f"{r['first']} to {r['last']}"),
                Cell(_capital(str(r["in_words"])), worst_one, mark),
                Cell(f"{r['d2']:.1f}", f"{r['stated']} stated values"),
                Cell(among or num.MISSING, below),
            )
        )
    heads = columns("Scenario", "Span", "How far", "d²", "Rank among windows of history", words=3)
    rows, note = cut(out, rest=_REST.format("scenarios"))
    return Table("How far scenarios lie from the forecast", heads, rows, note)


def _capital(words: str) -> str:
    return words[:1].upper() + words[1:]


def _why(found: PlausibilityTables) -> tuple[str, ...]:
    """Per scenario the variable that lies furthest out, then the pair that is least like history."""
    out = []
    for name in found.scenarios["scenario"].unique():
        if words := furthest_words(found.variables[found.variables["scenario"] == name]):
            out.append(f"{name}: {words}.")
        pairs = found.pairs[found.pairs["scenario"] == name].to_dict("records")
        out += [f"{name}: {pair_words(r)}." for r in pairs]
    return tuple(out)


def _variables(found: PlausibilityTables) -> Table:
    out = []
    for r in found.variables.to_dict("records"):
        given = r["how"] == "given"
        out.append(
            row(
                str(r["scenario"]),
                str(r["variable"]),
                str(r["how"]),
                Cell(num.signed(num.plain(r["z"], 1)), f"in {r['at']}"),
                Cell(num.plain(r["d2"], 1), f"{r['dof']:.0f} values") if given else num.MISSING,
                num.p_value(r["tail"]) if given else num.MISSING,
            )
        )
    heads = columns(
        "Scenario",
        "Variable",
        "How",
        "Largest distance, standard deviations",
        "d² of its path",
        "Share further away",
        words=3,
    )
    rows, note = cut(out, rest=_REST.format("variables"))
    return Table("Each variable by itself", heads, rows, note)


def _episodes(found: PlausibilityTables) -> Table:
    out = [
        row(
            str(r["scenario"]),
            str(r["span"]),
            str(r["place"]),
            f"{r['first']} to {r['last']}",
            num.plain(r["d2"], 1),
            num.p_value(r["tail"]),
        )
        for r in found.episodes.to_dict("records")
    ]
    heads = columns(
        "Compared with", "Span", "Place", "Window of history", "d²", "Share further away", words=4
    )
    rows, note = cut(out, rest=_REST.format("episodes"))
    return Table("The furthest windows of history from their own forecast", heads, rows, note)


def _forecast(found: PlausibilityTables) -> Table:
    out = [
        row(
            str(r["variable"]),
            str(r["period"]),
            num.plain(r["middle"]),
            num.plain(r["low"]),
            num.plain(r["high"]),
        )
        for r in found.forecast.to_dict("records")
    ]
    heads = columns("Variable", "Period", "Middle", "Low", "High", words=2)
    rows, note = cut(out, rest=_REST.format("forecast"))
    return Table(
        f"What the VAR expects from history alone, with {band_words(found)} bands", heads, rows, note
    )
