"""What the section on method needs besides its formulas: symbols, and the sources of what this study uses."""

from __future__ import annotations

from dataclasses import dataclass

from stresskit.report.tables import Table, columns, row
from stresskit.runs.records import StudyResult

_SYMBOLS = (
    ("i, t, h, c", "a loan; a calendar period; a step after as_of; a cause of exit"),
    ("η", "linear predictor of a cause: the sum of its terms, each with its coefficient"),
    ("P", "probability of the cause in a period, given that no other cause ended the loan"),
    ("o", "its odds, P / (1 − P)"),
    ("S(h)", "probability of being on book after step h"),
    ("q(h)", "probability that the loan ends by the cause in step h, seen from as_of"),
    ("EAD(h)", "exposure at default in step h"),
    ("LGD", "share of the exposure at default that is lost"),
    ("D(h)", "discount factor of step h"),
    ("EL", "expected loss: the sum over steps"),
)
_HAZARDS = (
    "Allison, P. D. (1982). Discrete-time methods for the analysis of event histories. Sociological Methodology 13.",
    "Cameron, A. C., Gelbach, J. B. and Miller, D. L. (2011). Robust inference with multiway clustering. Journal of Business & "
    "Economic Statistics 29(2).",
)
_LINKS = {
    "cloglog": "Prentice, R. L. and Gloeckler, L. A. (1978). Regression analysis of grouped survival data with application to breast "
    "cancer data. Biometrics 34(1).",
    "logit": "Begg, C. B. and Gray, R. (1984). Calculation of polychotomous logistic regression parameters using individualized "
    "regressions. Biometrika 71(1).",
}
_VAR = (
    "Breuer, T., Jandačka, M., Rheinberger, K. and Summer, M. (2009). How to find plausible, severe, and useful stress scenarios. "
    "International Journal of Central Banking 5(3)."
)
_RECOVERY = (
    "Kaplan, E. L. and Meier, P. (1958). Nonparametric estimation from incomplete observations. Journal of the American Statistical "
    "Association 53(282)."
)
_ACCOUNTING = (
    "IFRS 9, Financial Instruments (2014): effective interest rate as discount rate; mechanics of stages."
)
_CAPITAL = "Basel Committee on Banking Supervision (2023). The Basel Framework, chapters CRE31 and CRE32."


@dataclass(frozen=True, slots=True)
class MethodPage:
    """symbols and sources; var, stages, capital: whether the study uses them."""

    symbols: Table
    sources: tuple[str, ...]
    var: bool
    stages: bool
    capital: bool


def method_page(result: StudyResult) -> MethodPage:
    study = result.study
    var, stages, capital = (
        result.plausibility is not None,
        study.staging is not None,
        study.capital is not None,
    )
    links = {h.link for h in study.hazards.values()}
    sources = [*_HAZARDS, *(words for link, words in _LINKS.items() if link in links)]
    sources += [_VAR] * var + [_RECOVERY] * (result.recovery is not None)
    sources += [_ACCOUNTING] * (stages or study.loss.discount in ("rate", "rate_path")) + [_CAPITAL] * capital
    rows = tuple(row(symbol, words) for symbol, words in _SYMBOLS)
    symbols = Table("Symbols", columns("Symbol", "Meaning", words=2), rows)
    return MethodPage(symbols, tuple(sorted(sources)), var, stages, capital)
