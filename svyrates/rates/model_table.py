"""`ModelTable`: the coefficients of a survey-weighted logistic regression."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from svyrates.rates.limits import t_p_value, t_quantile
from svyrates.totals import WaldTest, joint_wald
from svyrates.words import Column, Table, Tabular, fixed, p_phrase, p_value, significant

__all__ = ["ModelTable", "model_table"]

FloatArray = NDArray[np.float64]
_NUMBERS = ("coefficient", "se", "odds_ratio", "low", "high", "statistic", "df", "p")


@dataclass(frozen=True, repr=False)
class ModelTable(Tabular):
    """A survey-weighted logistic regression; arrays have shape (coefficients,).

    Attributes
    ----------
    formula : as it was given
    term, name : the term that each coefficient belongs to, and its name
    coefficient, se : log odds ratio and its design-based standard error
    odds_ratio, low, high : with limits formed on the log scale
    statistic, df, p : t statistic, its degrees of freedom and p-value
    terms : name -> adjusted Wald F of the term's coefficients
    covariance : (coefficients, coefficients)
    n_records, level : records of the model, confidence level

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.adjusted_rates(design, "damp ~ tenure + age_group", by="tenure")
    >>> sorted(rates.model.terms)
    ['age_group', 'tenure']

    ``print(rates.model)`` shows the odds ratios behind the adjusted rates.
    """

    formula: str
    term: tuple[str, ...]
    name: tuple[str, ...]
    coefficient: FloatArray
    se: FloatArray
    odds_ratio: FloatArray
    low: FloatArray
    high: FloatArray
    statistic: FloatArray
    df: FloatArray
    p: FloatArray
    terms: dict[str, WaldTest]
    covariance: FloatArray
    n_records: int
    level: float

    def to_frame(self) -> pd.DataFrame:
        """All columns as a pandas frame, one row per coefficient."""
        data: dict[str, Any] = {"term": list(self.term), "name": list(self.name)}
        return pd.DataFrame(data | {name: getattr(self, name) for name in _NUMBERS})

    def table(self, *, percent: bool = False, every_column: bool = False) -> Table:  # noqa: ARG002
        """The table laid out for reading."""
        frame = self.to_frame()
        keys = [Column("name", "coefficient of", list(self.name), key=True)]
        title = f"Logistic regression {self.formula}"
        if every_column:
            terms = Column("term", "term", list(self.term), key=True)
            rest = [_number(frame, name, name, str) for name in _NUMBERS]
            return Table(title, (terms, *keys, *rest), self._about())
        shown = [
            _number(frame, "odds_ratio", "odds ratio", _three),
            _number(frame, "low", "low", _three),
            _number(frame, "high", "high", _three),
            _number(frame, "statistic", "t", _two),
            _number(frame, "df", "df", _short),
            _number(frame, "p", "p", p_value),
        ]
        return Table(title, (*keys, *shown), self._about())

    def _about(self) -> tuple[str, ...]:
        lines = [
            (
                f"{self.n_records:,} records; {100 * self.level:g}% limits on the log scale, "
                "design-based."
            )
        ]
        for name, test in self.terms.items():
            said = "no test"
            if not np.isnan(test.p):
                df2 = significant(test.df2, 4)
                said = f"F = {test.f:.2f} on {test.df1:g} and {df2} df, {p_phrase(test.p)}"
            lines.append(f"{name}: {said}.")
        lines.append("An association in a model is not a cause.")
        return tuple(lines)


def model_table(
    formula: str,
    names: tuple[str, ...],
    terms: dict[str, slice],
    beta: FloatArray,
    covariance: FloatArray,
    df: float,
    n_records: int,
    level: float,
) -> ModelTable:
    """Tests and limits of the coefficients, and a joint test of every term."""
    se = np.sqrt(np.maximum(covariance.diagonal(), 0.0))
    freedom = np.full(beta.size, df)
    half = t_quantile(freedom, level) * se
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        statistic = np.where(se > 0, beta / se, np.nan)
        odds, low, high = np.exp(beta), np.exp(beta - half), np.exp(beta + half)
    term_of = ["Intercept"] * beta.size
    for name, where in terms.items():
        term_of[where] = [name] * (where.stop - where.start)
    return ModelTable(
        formula=formula,
        term=tuple(term_of),
        name=names,
        coefficient=beta,
        se=se,
        odds_ratio=odds,
        low=low,
        high=high,
        statistic=statistic,
        df=freedom,
        p=t_p_value(statistic, freedom),
        terms={
            name: joint_wald(beta[where], covariance[where, where], df)
            for name, where in terms.items()
        },
        covariance=covariance,
        n_records=n_records,
        level=level,
    )


def _number(frame: pd.DataFrame, name: str, heading: str, show: Any) -> Column:
    return Column(name, heading, frame[name].tolist(), "number", show)


def _two(value: Any) -> str:
    return fixed(value, 2)


def _three(value: Any) -> str:
    return fixed(value, 3)


def _short(value: Any) -> str:
    return significant(value, 4)
