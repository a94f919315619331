"""The result of a fit: coefficients with their errors, predictions, the parts a projection needs."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Any, NamedTuple

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.coded import Coder
from stresskit.core.errors import DataError, UsageError
from stresskit.core.values import Columns, FeatureDefinition, frozen
from stresskit.hazard.covariance import BY_PERIOD, FEWEST_PERIODS, Covariances, known_kind
from stresskit.hazard.design import Design
from stresskit.hazard.estimation import PLAIN, Estimation
from stresskit.hazard.facts import FitFacts
from stresskit.hazard.link import LINKS, Link
from stresskit.hazard.loan_side import LoanSide
from stresskit.hazard.saved import fit_from_text, fit_to_text
from stresskit.hazard.summary import summary_text
from stresskit.hazard.tail import AgeTail
from stresskit.hazard.terms import LoanNumber, Side, numbers, whole_ages
from stresskit.hazard.usable import Gate, macro_columns
from stresskit.spec.terms import HazardSpec, LoanTerm, MacroTerm

Floats = NDArray[np.float64]


class MovingTerm(NamedTuple):
    """All that moves in a hazard: slope * (x - centre) of one column, x the column's value or its logarithm."""

    column: str
    slope: float
    centre: float
    logged: bool


@dataclass(frozen=True, slots=True, eq=False)
class LoanPart:
    """Loan side of the linear predictor: s (n,), U (n, k)."""

    s: Floats
    U: Floats


@dataclass(frozen=True, slots=True, eq=False)
class LoanColumns:
    """Loan side without coefficients: offset (n,), a column (n,) for each of the coefficients ``at`` (j,), U (n, k)."""

    offset: Floats
    columns: tuple[Floats, ...]
    at: NDArray[np.intp]
    U: Floats

    def part(self, coefficients: Floats) -> LoanPart:
        """The loan side under all coefficients of the fit, (k,)."""
        s = self.offset.copy()
        for j, column in zip(self.at, self.columns, strict=True):
            s += coefficients[j] * column
        return LoanPart(s, self.U)


@dataclass(frozen=True, slots=True, eq=False)
class CellPart:
    """Cell side of the linear predictor: z (m,), V (m, k)."""

    z: Floats
    V: Floats


@dataclass(frozen=True, slots=True, eq=False)
class HazardFit:
    """A fitted hazard of one cause; frozen. Names as in statsmodels.

    coefficients  (k,) in the order of ``design.labels``
    estimation    how the coefficients came about, where not by plain maximum likelihood
    tail          what the age baseline does past its last supported age; None: it keeps its value
    gates         what the fit was measured against; empty only for a fit that was put together by hand
    definitions   column of a macro feature -> how it was made, of all that the fit reads; empty where the feature table did not
                  say so, and in models of version 1
    Predictions follow that rule for every age past the supported one, also where a few rows of the fit were.
    The linear predictor of loan i in a cell (age, feature values) is
    ``s[i] + z[cell] + U[i] @ V[cell]``, with s, U from :meth:`loan_part` and z, V from :meth:`cell_part`.
    P(cause | cause or survive) is the inverse link of it. A macro feature that goes by a loan column is there as one
    column of U for each level (key, see hazard.keys), 1 for the loans of that level.
    """

    spec: HazardSpec
    design: Design
    facts: FitFacts
    coefficients: Floats
    covariances: Covariances
    tail: AgeTail | None = None
    estimation: Estimation = PLAIN
    gates: tuple[Gate, ...] = ()
    definitions: Mapping[str, FeatureDefinition] = field(default_factory=lambda: MappingProxyType({}))

    def __post_init__(self) -> None:
        object.__setattr__(self, "coefficients", frozen(self.coefficients))
        object.__setattr__(self, "definitions", MappingProxyType(dict(self.definitions)))

    # ---- what was estimated

    @property
    def cause(self) -> str:
        return self.facts.cause

    @property
    def link(self) -> Link:
        return LINKS[self.spec.link]

    @property
    def params(self) -> pd.Series[float]:
        return pd.Series(self.coefficients.copy(), index=list(self.design.labels), name="coef")

    def cov_params(self, kind: str | None = None) -> pd.DataFrame:
        """Covariance of the coefficients; kinds as in :mod:`stresskit.hazard.covariance`.

        Default: the kind that the spec names (``model`` is model_expected). NaN for macro coefficients by a kind
        that rests on periods when there are as many of them as periods less one: nothing is left to vary.
        Raises UsageError for a kind that is computed only when the spec names it.
        """
        labels, chosen = list(self.design.labels), self._kind(kind)
        matrix = self.covariances.matrix(chosen).copy()
        if chosen in BY_PERIOD and int(macro_columns(self.design).sum()) >= self.n_periods - 1:
            matrix[self._of_macros, :] = np.nan
            matrix[:, self._of_macros] = np.nan
        return pd.DataFrame(matrix, index=labels, columns=labels)

    @property
    def _of_macros(self) -> NDArray[np.bool_]:
        """(k,) columns that read a macro feature, interactions included."""
        return np.asarray(self.design.index["feature"] >= 0)

    @property
    def withheld(self) -> tuple[str, ...]:
        """Macro coefficients whose p-values and intervals are not given: fewer than FEWEST_PERIODS periods carry them."""
        if self.n_periods >= FEWEST_PERIODS:
            return ()
        return tuple(self.design.labels[j] for j in np.flatnonzero(self._of_macros))

    @property
    def failed_gates(self) -> tuple[Gate, ...]:
        return tuple(g for g in self.gates if not g.passed)

    def standard_errors(self, kind: str | None = None) -> pd.Series[float]:
        return pd.Series(
            np.sqrt(np.diag(self.cov_params(kind).to_numpy())), index=list(self.design.labels), name="se"
        )

    @property
    def bse(self) -> pd.Series[float]:
        return self.standard_errors()

    @property
    def pvalues(self) -> pd.Series[float]:
        """Two-sided, of the default kind; NaN where :attr:`withheld`."""
        return self.p_values()

    def p_values(self, kind: str | None = None) -> pd.Series[float]:
        with np.errstate(divide="ignore", invalid="ignore"):
            statistic = self.coefficients / self.standard_errors(kind).to_numpy()
        values = self.covariances.p_values(self._kind(kind), statistic)
        values[self._hidden] = np.nan
        return pd.Series(values, index=list(self.design.labels), name="p_value")

    def conf_int(self, alpha: float = 0.05, kind: str | None = None) -> pd.DataFrame:
        """Columns lower, upper of the 1 - alpha interval of each coefficient; NaN where :attr:`withheld`, by any kind.

        An interval says what the p-value says, so one is not shown without the other.
        """
        if not 0.0 < alpha < 1.0:
            raise UsageError(f"alpha is {alpha}, expected a number between 0 and 1")
        half = (
            self.covariances.quantile(self._kind(kind), 1.0 - alpha / 2.0)
            * self.standard_errors(kind).to_numpy()
        )
        half[self._hidden] = np.nan
        return pd.DataFrame(
            {"lower": self.coefficients - half, "upper": self.coefficients + half},
            index=list(self.design.labels),
        )

    @property
    def _hidden(self) -> NDArray[np.bool_]:
        return np.isin(np.array(self.design.labels, dtype=object), np.array(self.withheld, dtype=object))

    def _kind(self, kind: str | None) -> Any:
        return known_kind(self.spec.covariance if kind is None else kind)

    @property
    def covariance_kind(self) -> str:
        """The kind shown first."""
        return str(self._kind(None))

    @property
    def df(self) -> float:
        """Degrees of freedom of the default kind; infinite for the normal distribution."""
        return self.covariances.degrees(self._kind(None))

    @property
    def llf(self) -> float:
        return self.facts.llf

    @property
    def aic(self) -> float:
        """With the effective number of coefficients where a ridge or a bound makes it smaller than k."""
        effective = self.estimation.effective
        return -2.0 * self.facts.llf + 2.0 * (self.design.k if effective is None else effective)

    @property
    def at_bound(self) -> tuple[str, ...]:
        """Coefficients held at their bound; they have no standard error."""
        return self.estimation.at_bound

    @property
    def nobs(self) -> float:
        return self.facts.nobs

    @property
    def n_events(self) -> float:
        return self.facts.n_events

    @property
    def n_loans(self) -> int:
        return self.facts.n_loans

    @property
    def n_periods(self) -> int:
        return self.facts.n_periods

    @property
    def rows_without_feature(self) -> float:
        return self.facts.rows_without_feature

    @property
    def largest_age(self) -> int:
        return self.facts.largest_age

    @property
    def supported_age(self) -> int:
        """The last age with enough at risk to count as observed; what a projection takes from later ages is extrapolated."""
        return self.facts.supported_age

    @property
    def feature_ranges(self) -> Mapping[str, tuple[float, float]]:
        return self.facts.feature_ranges

    def coefficient_table(self) -> pd.DataFrame:
        """cause, term, coef, se, se_kind, statistic, p_value, lower, upper, se_model, se_loan, se_period, expect, sign_ok,
        at_bound, coef_free.

        ``statistic`` is coef / se, NaN where p-value and interval are :attr:`withheld`, as it says what they say.
        ``expect`` is "" and ``sign_ok`` None where the spec expects no sign or the coefficient is at its bound.
        ``coef_free`` is the coefficient of the fit without bounds, which is ``coef`` where the spec has none.
        """
        interval, se = self.conf_int(), self.bse.to_numpy()
        with np.errstate(divide="ignore", invalid="ignore"):
            statistic = self.coefficients / se
        statistic[self._hidden] = np.nan
        expect = self._expected_signs()
        pinned = [label in self.at_bound for label in self.design.labels]
        ok = [
            None if not e or bound else bool((c > 0) == (e == "positive"))
            for e, c, bound in zip(expect, self.coefficients, pinned, strict=True)
        ]
        return pd.DataFrame(
            {
                "cause": self.cause,
                "term": list(self.design.labels),
                "coef": self.coefficients,
                "se": se,
                "se_kind": self.covariance_kind,
                "statistic": statistic,
                "p_value": self.pvalues.to_numpy(),
                "lower": interval["lower"].to_numpy(),
                "upper": interval["upper"].to_numpy(),
                "se_model": self.standard_errors("model_expected").to_numpy(),
                "se_loan": self.standard_errors("loan").to_numpy(),
                "se_period": self.standard_errors("period").to_numpy(),
                "expect": expect,
                "sign_ok": pd.Series(ok, dtype=object),
                "at_bound": pinned,
                "coef_free": np.array(self.estimation.free or self.coefficients),
            }
        )

    def _expected_signs(self) -> list[str]:
        """Of each coefficient; a term's expectation is that of its main effect."""
        wanted = {
            (t.loan if isinstance(t, LoanTerm) else t.macro): t.expect or ""
            for t in self.spec.terms
            if isinstance(t, LoanTerm | MacroTerm)
        }
        return [wanted.get(name, "") for name in self.design.owner]

    def summary(self) -> str:
        """The fit as text for a terminal of 100 columns."""
        return summary_text(self)

    # ---- what a projection needs

    @property
    def loan_columns(self) -> tuple[str, ...]:
        """Static loan columns that predictions read, those that macro features go by included."""
        return self.design.sources("loan")

    @property
    def feature_names(self) -> tuple[str, ...]:
        """Columns of macro features that predictions read: one for each level where a feature goes by a loan column."""
        return self.design.sources("feature")

    @property
    def moving_columns(self) -> tuple[str, ...]:
        """Columns that change along a stay: a projection adds :meth:`moving_part` to loan and cell part."""
        return self.design.sources("moving")

    def _split(self) -> tuple[NDArray[np.bool_], NDArray[np.bool_], tuple[tuple[int, int], ...]]:
        """Columns of the loan alone, of the cell alone (intercept included), and the mixed pairs: columns of U and V.

        A pair is (loan product, key); product -1: 1 for all loans; key -1: loans of every key.
        """
        index = self.design.index
        cell = (index["age"] >= 0) | (index["feature"] >= 0)
        loan, moving = index["loan"] >= 0, index["moving"] >= 0
        crossed = [self.design.labels[j] for j in np.flatnonzero(moving & (loan | cell))]
        if crossed:
            raise UsageError(
                f"the hazard of {self.cause} multiplies a column that moves along a stay with something else "
                f"({', '.join(crossed)}), so it does not split into a loan part, a cell part and a moving part; a projection "
                "takes moving columns by themselves or multiplied with each other"
            )
        keyed, count = self.design.keyed_columns(), self.design.keys.count
        mixed = [(int(p), -1) for p in np.unique(index["loan"][loan & cell & ~keyed])]
        for product in np.unique(index["loan"][keyed]):
            mixed += [(int(product), key) for key in range(count)]
        return loan & ~cell, ~loan & ~keyed & ~moving, tuple(mixed)

    def loan_part(
        self,
        static: Columns,
        n: int,
        ids: NDArray[Any] | None = None,
        *,
        coder: Coder | None = None,
        threads: int = 1,
    ) -> LoanPart:
        """s (n,) and U (n, k) of loans with columns ``static`` (each (n,)); DataError for what is missing.

        coder    where these columns are already there as codes
        threads  the result is the same bits for any number of them
        """
        alone, _, mixed = self._split()
        side = LoanSide(self.design, self.coefficients, alone, mixed)
        return LoanPart(*side.part(static, n, ids, coder, threads))

    def loan_columns_of(self, static: Columns, n: int, ids: NDArray[Any] | None = None) -> LoanColumns:
        """What :meth:`loan_part` is made of before coefficients come in; DataError for what is missing."""
        alone, _, _ = self._split()
        matrix = self.design.matrix("loan", static, n, ids)
        at = np.flatnonzero(alone)
        columns = tuple(matrix[:, self.design.index["loan"][j]] for j in at)
        return LoanColumns(
            self.design.offset("loan", static, n, ids), columns, at, self.loan_part(static, n, ids).U
        )

    def cell_part(self, age: NDArray[np.int64], feature_values: Floats, names: tuple[str, ...]) -> CellPart:
        """z (m,) and V (m, k) of cells with the given ages (m,) and feature values (m, f), columns ``names``."""
        _, alone, mixed = self._split()
        ages, values = np.asarray(age), np.asarray(feature_values, dtype=np.float64)
        held = np.minimum(ages, self.supported_age)
        cells = {
            key: self._cell_columns(held, values, tuple(names), max(key, 0))
            for key in dict.fromkeys([-1, *(key for _, key in mixed)])
        }
        z = np.zeros(ages.size) if self.tail is None else self.tail.shift(ages)
        for j in np.flatnonzero(alone):
            z += self.coefficients[j] * cells[-1][:, j]
        v, keyed = np.zeros((ages.size, len(mixed))), self.design.keyed_columns()
        for g, (product, key) in enumerate(mixed):
            for j in np.flatnonzero((self.design.index["loan"] == product) & (keyed == (key >= 0))):
                if not self._is_loan_alone(int(j)):
                    v[:, g] += self.coefficients[j] * cells[key][:, j]
        return CellPart(z, v)

    def moving_part(self, values: Mapping[str, Floats]) -> Floats:
        """(b, H) what the moving columns add to the linear predictor, added to loan part and cell part.

        values  every one of :attr:`moving_columns`, each (b, H), as known at the start of each step
        Raises DataError for a column that is missing or holds numbers that are not finite, UsageError for a model in
        which moving columns meet other terms in a product.
        """
        self._split()
        index = self.design.index["moving"]
        shape = next(iter(values.values())).shape if values else (0, 0)
        plain = self._plain_numbers(values)
        if plain is not None:
            return plain
        columns = {name: np.ravel(values[name]) for name in self.moving_columns if name in values}
        size = int(np.prod(shape))
        eta = self.design.offset("moving", columns, size)
        matrix = self.design.matrix("moving", columns, size)
        for j in np.flatnonzero(index >= 0):
            eta += self.coefficients[j] * matrix[:, index[j]]
        return eta.reshape(shape)

    def _plain_numbers(self, values: Mapping[str, Floats]) -> Floats | None:
        """:meth:`moving_part` of numbers that are neither logged nor multiplied, in few passes; None for all else."""
        design, eta = self.design, None
        terms = {t.source: t for t in design.terms if isinstance(t, LoanNumber) and t.moving and not t.log}
        if set(self.moving_columns) != set(terms) or len(design.products["moving"]) != len(terms):
            return None
        for j in np.flatnonzero(design.index["moving"] >= 0):
            term = terms.get(design.owner[j])
            if term is None or term.source not in values:
                return None
            slope = float(self.coefficients[j]) / term.scale
            part = values[term.source] * slope
            if term.centre != 0.0:
                part -= slope * term.centre
            eta = part if eta is None else eta.__iadd__(part)
        # a sum that is not finite is told apart by the plain way, which names the column
        return eta if eta is not None and np.isfinite(eta.sum()) else None

    def moving_term(self) -> MovingTerm | None:
        """All that moves as one number, None where more does or in another way."""
        design = self.design
        at = np.flatnonzero(design.index["moving"] >= 0)
        if at.size != 1 or len(design.products["moving"]) != 1 or design.has_offset("moving"):
            return None
        found = [t for t in design.terms if isinstance(t, LoanNumber) and t.moving]
        if len(found) != 1 or design.owner[int(at[0])] != found[0].source:
            return None
        term = found[0]
        slope = float(self.coefficients[int(at[0])]) / term.scale
        return MovingTerm(term.source, slope, term.centre, term.log)

    def _is_loan_alone(self, j: int) -> bool:
        return bool(self.design.index["age"][j] < 0 and self.design.index["feature"][j] < 0)

    def _cell_columns(
        self, ages: NDArray[Any], values: Floats, names: tuple[str, ...], key: int = 0
    ) -> Floats:
        """(m, k) product of the age and feature sides of every column, as loans of a key read the features."""
        design = self.design
        by_age, by_feature = design.age_matrix(ages), design.feature_matrix(values, names, key)
        out = np.ones((ages.size, design.k), order="F")
        for j in range(design.k):
            if design.index["age"][j] >= 0:
                out[:, j] *= by_age[:, design.index["age"][j]]
            if design.index["feature"][j] >= 0:
                out[:, j] *= by_feature[:, design.index["feature"][j]]
        return out

    def predict(self, frame: pd.DataFrame) -> pd.Series[float]:
        """P(cause | cause or survive) of each row: needs the loan columns, ``age`` and the macro features.

        Raises DataError for columns that are missing or named twice, numbers that are not finite, levels that were not
        there at estimation and ages that are not whole numbers from 1 on.
        """
        return pd.Series(
            self.link.probability(self.predictor(frame)), index=frame.index, name=f"p_{self.cause}"
        )

    def predictor(self, frame: pd.DataFrame) -> Floats:
        """(n,) linear predictor of each row of a frame, which is as for :meth:`predict`; raises what that raises."""
        design, n = self.design, len(frame)
        needed = [*self.loan_columns, *self.moving_columns, *self.feature_names]
        needed += ["age"] if design.products["age"] else []
        absent = [name for name in dict.fromkeys(needed) if name not in frame.columns]
        if absent:
            raise DataError(
                f"prediction needs the columns {', '.join(map(repr, absent))}; the frame has "
                f"{', '.join(map(str, frame.columns))}"
            )
        doubled = sorted({name for name in needed if list(frame.columns).count(name) > 1})
        if doubled:
            raise DataError(f"the frame has more than one column {', '.join(map(repr, doubled))}")
        columns = {name: _array(frame[name]) for name in needed}
        ids = frame.index.to_numpy()
        eta = design.offset("loan", columns, n, ids) + design.offset("moving", columns, n, ids)
        age = whole_ages(columns["age"], ids) if "age" in columns else np.zeros(n, dtype=np.int64)
        if self.tail is not None:
            eta = eta + self.tail.shift(age)
        x, held = np.empty((n, design.k)), np.minimum(age, self.supported_age)
        key = design.keys.of_loans(columns, n, ids)
        for mine in np.unique(key):
            at, others = np.flatnonzero(key == mine), design.keys.not_read(int(mine))
            names = tuple(name for name in self.feature_names if name not in others)
            values = [numbers(name, columns[name][at], ids[at], what="macro feature") for name in names]
            cells = np.column_stack(values) if values else np.empty((at.size, 0))
            x[at] = self._cell_columns(held[at], cells, names, int(mine))
        sides: tuple[Side, ...] = ("loan", "moving")
        for side in sides:
            matrix = design.matrix(side, columns, n, ids)
            for j, p in enumerate(design.index[side]):
                if p >= 0:
                    x[:, j] *= matrix[:, p]
        return np.asarray(eta + x @ self.coefficients)

    # ---- saved model

    def to_json(self) -> str:
        """The model as text; floats come back to the same bits."""
        return fit_to_text(self)

    @staticmethod
    def from_json(text: str) -> HazardFit:
        """The model from its text. Raises TextError for anything else than a saved hazard."""
        return HazardFit(**fit_from_text(text))


def _array(column: pd.Series[Any]) -> NDArray[Any]:
    if pd.api.types.is_numeric_dtype(column) or pd.api.types.is_bool_dtype(column):
        return column.to_numpy(dtype=np.float64, na_value=np.nan)
    return np.array([str(v) for v in column], dtype=object)
