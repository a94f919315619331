"""An attribution as tables, sentences and notes."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.analyses.attributed import Attributed
from stresskit.analyses.reads import CHANNELS, WORDS, channel_reads
from stresskit.analyses.shapley import Split
from stresskit.runs.records import AnalysisTable

Floats = NDArray[np.float64]

#: Parts named in the answer, the largest first; what is smaller than this share of the difference is not named.
_NAMED, _WORTH_NAMING = 4, 0.01


def attribution_answer(found: Attributed) -> str:
    """One or two sentences: how much, and from where, in points of the loss at the start."""
    before, after = (float(x[:, :-1].sum()) for x in (found.before, found.after))
    if before <= 0:
        return f"The lifetime loss is {after:,.0f} in {found.end.name} and nothing in {found.start.name}: parts are in the table in amounts."
    change = after - before
    what = "rise" if change >= 0 else "fall"
    points = 100.0 / before
    sign = 1.0 if change >= 0 else -1.0
    variables = _named([p.name.replace("_", " ") for p in found.cast.players], found.variables, sign * points)
    channels = _named([WORDS[c] for c in found.moving], found.channels, sign * points, "through ")
    return (
        f"Of the {abs(change) * points:.1f}% {what} of the lifetime loss from {found.start.name} ({before:,.0f}) to {found.end.name} "
        f"({after:,.0f}), {variables}. By channel, {channels}."
    )


def _named(names: Sequence[str], parts: Split, points: float, word: str = "from ") -> str:
    """``31.0 points come from house prices, 22.0 from unemployment``; ``points`` per unit of money, signs turned so that a
    part of the change counts as above 0."""
    size = points * parts.shares[:, :, :-1].sum(axis=(1, 2))
    order = np.argsort(-np.abs(size), kind="stable")
    told = [i for i in order if abs(size[i]) >= _WORTH_NAMING * abs(size.sum())][:_NAMED] or list(order[:1])
    words = [f"{_plain(size[i])} {word}{names[i]}" for i in told]
    first = f"{_plain(size[told[0]])} points come {word}{names[told[0]]}"
    rest = float(size.sum() - size[told].sum())
    if len(told) < len(names) and abs(rest) >= 0.05:
        words.append(f"{_plain(rest)} {word}the rest")
    return ", ".join([first, *words[1:]])


def _plain(points: float) -> str:
    return f"{points:.1f}".replace("-", "−")


def attribution_tables(found: Attributed) -> tuple[AnalysisTable, ...]:
    """All tables; docs/attribution.md lists their columns."""
    players = [p.name for p in found.cast.players]
    channels = [WORDS[c] for c in found.moving]
    out = [
        AnalysisTable(
            "variables",
            "By macro variable",
            _parts(found, "variable", players, found.variables, _idle(found)),
            note="alone: this variable moved by itself; removed: everything moved but this, less everything moved. Shares "
            "add up, those two do not: what variables do together is counted in neither or twice.",
        ),
        AnalysisTable(
            "channels",
            "By channel",
            _parts(
                found,
                "channel",
                channels,
                found.channels,
                [WORDS[c] for c in CHANNELS if c not in found.moving],
            ),
            note="A hazard's channel is what it reads, moving loan columns included; exposure is balances, discounting rates in force.",
        ),
    ]
    if found.matrix is not None:
        out.append(AnalysisTable("matrix", "Variable by channel", _matrix(found, players, channels)))
    for kind, names, parts in (
        ("variables", players, found.variables),
        ("channels", channels, found.channels),
    ):
        out.append(
            AnalysisTable(f"years_{kind}", f"By calendar year and {kind[:-1]}", _years(found, names, parts))
        )
        out.append(
            AnalysisTable(
                f"segments_{kind}",
                f"By segment and {kind[:-1]}",
                _segments(found, names, parts),
                shown=False,
            )
        )
    if found.elasticities:
        out.append(
            AnalysisTable(
                "elasticities",
                "One more all along the path",
                _elasticities(found),
                note="One variable one point (an index or a level one percent) higher in every period, the others as they are. A usual "
                "year: the standard deviation of the variable's change over a year in history.",
            )
        )
    out.append(AnalysisTable("factors", "By factor of the loss, two ways", _factors(found), shown=False))
    return tuple(out)


def _idle(found: Attributed) -> list[str]:
    """Variables that have no part: those that differ and are not read, and those that are read and do not differ."""
    return [*found.cast.not_read, *found.cast.alike]


def _parts(
    found: Attributed, what: str, names: Sequence[str], parts: Split, idle: Sequence[str]
) -> pd.DataFrame:
    """A row per player, largest part first, then those without one at exactly 0."""
    before = float(found.before[:, :-1].sum())
    change = float(found.after[:, :-1].sum()) - before
    life = [x[:, :, :-1].sum(axis=(1, 2)) for x in (parts.shares, parts.alone, parts.removed)]
    year = parts.shares[:, :, -1].sum(axis=1)
    frame = pd.DataFrame(
        {
            what: list(names),
            "el_lifetime": life[0],
            "share_of_difference": life[0] / change if change else np.full(len(names), np.nan),
            "points": 100.0 * life[0] / before if before > 0 else np.full(len(names), np.nan),
            "el_12m": year,
            "el_alone": life[1],
            "el_removed": life[2],
        }
    )
    order = np.argsort(-np.abs(life[0]), kind="stable")
    none = pd.DataFrame({what: list(idle)} | {c: np.zeros(len(idle)) for c in frame.columns if c != what})
    whole = {c: [float(frame[c].sum())] for c in frame.columns if c not in (what, "el_alone", "el_removed")}
    total = pd.DataFrame({what: ["difference"]} | whole)
    pieces = [frame.iloc[order], none, total] if len(idle) else [frame.iloc[order], total]
    return pd.concat(pieces, ignore_index=True)


def _matrix(found: Attributed, players: Sequence[str], channels: Sequence[str]) -> pd.DataFrame:
    assert found.matrix is not None
    size = found.matrix[:, :, :, :-1].sum(axis=(2, 3))
    frame = pd.DataFrame({"variable": list(players)})
    for k, name in enumerate(channels):
        frame[f"el_{name.replace(' ', '_')}"] = size[:, k]
    frame["el_lifetime"] = size.sum(axis=1)
    total = pd.DataFrame({"variable": ["difference"]} | {c: [frame[c].sum()] for c in frame.columns[1:]})
    return pd.concat([frame, total], ignore_index=True)


def _years(found: Attributed, names: Sequence[str], parts: Split) -> pd.DataFrame:
    before, after = (x[:, :-1].sum(axis=0) for x in (found.before, found.after))
    frame = pd.DataFrame(
        {"year": list(found.years), "el_before": before, "el_after": after, "el_difference": after - before}
    )
    for k, name in enumerate(names):
        frame[_column(name)] = parts.shares[k, :, :-1].sum(axis=0)
    return frame


def _segments(found: Attributed, names: Sequence[str], parts: Split) -> pd.DataFrame:
    """A row per breakdown and segment, lifetime."""
    frames = []
    for by, labels, index in found.setting.cells.breakdowns:
        sums = [
            np.bincount(index, weights=x[:, :-1].sum(axis=1), minlength=len(labels))
            for x in (found.before, found.after, *parts.shares)
        ]
        columns = {"el_before": sums[0], "el_after": sums[1], "el_difference": sums[1] - sums[0]}
        columns |= {_column(n): s for n, s in zip(names, sums[2:], strict=True)}
        frames.append(pd.DataFrame({"by": by, "segment": list(labels)} | columns))
    return pd.concat(frames, ignore_index=True)


def _column(name: str) -> str:
    return f"el_{name.replace(' ', '_')}"


def _elasticities(found: Attributed) -> pd.DataFrame:
    return pd.DataFrame(
        [
            {
                "scenario": e.scenario,
                "variable": e.variable,
                "one_more": e.unit,
                "el_per_one_more": e.per_unit,
                "relative_change": e.relative,
                "usual_year": e.usual_year,
                "el_per_usual_year": e.per_unit * e.usual_year,
            }
            for e in found.elasticities
        ]
    )


def _factors(found: Attributed) -> pd.DataFrame:
    """Levels of the totals, and the log-mean split by totals and by segment and period."""
    rows = [
        {
            "factor": name,
            "before": x[0],
            "after": x[1],
            "el_by_totals": x[2],
            "el_by_segment_and_period": x[3],
        }
        for name, x in found.factors.items()
    ]
    return pd.DataFrame(rows)


def notes_of(found: Attributed) -> tuple[str, ...]:
    """How it was done, and who has no part."""
    k, start, end = len(found.cast.players), found.start.name, found.end.name
    out = [
        f"Shapley values over whole paths, afterwards rules included: the mean of what a variable adds over all orders in which {k} "
        f"can be moved from {start} to {end}; {found.projections:,} projections of the whole book, and parts add up to the difference."
    ]
    if found.cast.not_read:
        many = len(found.cast.not_read) > 1
        out.append(
            f"{', '.join(found.cast.not_read)} {'differ' if many else 'differs'} between the scenarios, but no hazard, contract or LGD "
            f"of this study reads {'them' if many else 'it'}: {'their parts are' if many else 'its part is'} exactly 0."
        )
    if found.cast.alike:
        many = len(found.cast.alike) > 1
        out.append(f"{', '.join(found.cast.alike)} {'are' if many else 'is'} read and the same in both.")
    still = [c for c in CHANNELS if c not in found.moving]
    if still:
        reads = channel_reads(found.setting)
        fixed = [WORDS[c] for c in still if not reads[c]]
        same = [WORDS[c] for c in still if reads[c]]
        told = [f"{', '.join(fixed)}: not made of macro variables in this study"] if fixed else []
        told += [f"{', '.join(same)}: made of variables that do not differ"] if same else []
        out.append(f"Channels without a part: {'; '.join(told)}.")
    if found.matrix is None and k > 1 and len(found.moving) > 1:
        out.append(
            "The table of variables by channel was left out for its number of projections; ask for it with matrix: true."
        )
    out.append("The first 12 months are split in the same way (el_12m).")
    return tuple(out)
