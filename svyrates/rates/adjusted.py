"""`adjusted_rates`: predictive margins of a survey-weighted logistic regression.

Every record is given each group's label in turn, and the predicted probabilities are averaged over
all. Sources: Graubard & Korn (1999), Biometrics 55, 652-659; Binder (1983) for the variance.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import special

from svyrates.design import SampleDesign
from svyrates.errors import QuestionError, all_faults, some
from svyrates.rates.assemble import Asked, assemble, measure
from svyrates.rates.crude import CrudeRates
from svyrates.rates.estimate import check_options, check_rule, usual_rule
from svyrates.rates.formula import ParsedFormula, parse_formula
from svyrates.rates.limits import Interval
from svyrates.rates.logistic import LogisticFit, fit_logistic, refit
from svyrates.rates.logistic_faults import Basis, model_basis
from svyrates.rates.model_matrix import ModelMatrix, build_matrix, read_model_columns
from svyrates.rates.model_source import ModelRates
from svyrates.rates.model_table import ModelTable, model_table
from svyrates.rates.question import Outcome, read_outcomes, read_where
from svyrates.rates.source import freedom_of
from svyrates.rates.table import Coverage, RateBlock, RateTable
from svyrates.rates.tallied import Tallied, check_design, tally_question
from svyrates.totals import Estimates, InfluenceTotals, ReplicatedSpread, Spread
from svyrates.words import count, progress_bar

__all__ = ["adjusted_rates"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
# Some ten million numbers of a model matrix are fitted in a second.
_WORTH_PROGRESS = 20_000_000


def adjusted_rates(
    design: SampleDesign,
    formula: str,
    by: str,
    *,
    success: Any = None,
    where: Any = None,
    interval: Interval = "korn-graubard",
    level: float = 0.95,
    df: str | float | None = None,
) -> RateTable:
    """Adjust rates by a model: what each group's rate would be if all else in the model were alike.

    Parameters
    ----------
    design : SampleDesign
    formula : str
        Outcome and terms, such as ``"cold_home ~ tenure + C(age_group)"``: columns,
        ``+ - * : / **``, ``C(x)``, ``C(x, Treatment("level"))``, ``I(x**2)``, ``log``, ``exp``,
        ``sqrt``, ``center``, ``standardize``, ``bs(x, df=4)`` and ``cr(x, df=4)``. It is read,
        never evaluated.
    by : str
        Column of the groups, one of the formula's.
    success, where, interval, level, df : see `estimate_rates`

    Returns
    -------
    RateTable
        Adjusted rates with `crude_rate` beside them; `model` holds the odds ratios. Comparisons
        work on it; the differences are average marginal differences.

    Raises
    ------
    QuestionError
        For faults in the formula and the columns, and for a model that cannot be fitted:
        separation, collinear terms, too few records.

    Notes
    -----
    `m_g = Σ_i w_i expit(x_i(g)'β)/Σ_i w_i` over the records of the subpopulation in which outcome
    and terms are known, `x_i(g)` the record with the label g. Linearized variance through the
    regression: that of the total of `w_i(μ_ig - m_g)/Σw + a_g' I⁻¹ w_i x_i (y_i - μ_i)` with
    `a_g = Σ w μ_g(1 - μ_g) x(g)/Σw`; with replicate weights the regression is fitted again under
    each.

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.adjusted_rates(design, "damp ~ tenure + age_group + sex", by="tenure")
    >>> rates.kind
    'adjusted by damp ~ tenure + age_group + sex'

    Each tenure's rate if its people had the ages and sexes of everyone.
    """
    check_design(design)
    parsed = parse_formula(formula)
    faults: list[str] = []
    check_options(interval, level, df, faults)
    check_rule(design, df, faults)
    if by not in parsed.columns:
        faults.append(f"by={by!r} is no column of the formula; these are {some(parsed.columns)}.")
    outcome = read_outcomes(design.frame, parsed.outcome, success, faults)
    if parsed.outcome in parsed.columns:
        faults.append(f"the outcome {parsed.outcome!r} is on both sides of the formula.")
    columns = read_model_columns(design.frame, parsed.columns, by, faults)
    inside, n_unknown = read_where(design.frame, where, faults)
    all_faults(QuestionError, "The question has", faults)
    everyone = np.ones(design.n_records, dtype=bool) if inside is None else inside
    known = (outcome[0].level < 2) & columns.known & (design.weights > 0)
    kept = np.flatnonzero(everyone & known)
    if not kept.size:
        raise QuestionError("No record has a known outcome and all columns of the formula.")
    tallied = tally_question(design, parsed.outcome, success, by, everyone & known, [])
    crude = tallied.blocks[0].source
    built = build_matrix(parsed, columns, kept)
    model = _Model(
        design, parsed, built, by, tallied.grouping.labels, kept, outcome[0].level[kept] == 1, crude
    )
    rule = usual_rule(design, df)
    source, table = model.source(rule, level)
    lost = int(np.count_nonzero(everyone & (design.weights > 0) & ~known))
    return _table(
        design, tallied, source, table, _coverage(design, everyone, n_unknown),
        (outcome[0], lost), (interval, level, rule),
    )  # fmt: skip


@dataclass(frozen=True)
class _Model:
    """A model about to be fitted."""

    design: SampleDesign
    parsed: ParsedFormula
    built: ModelMatrix
    by: str
    labels: tuple[tuple[object, ...], ...]
    kept: IntArray
    y: NDArray[np.bool_]
    crude: CrudeRates

    def source(self, rule: str | float, level: float) -> tuple[ModelRates, ModelTable]:
        """Fit the model, and find the margins and the spread of everything."""
        y, w = self.y.astype(np.float64), self.design.weights[self.kept]
        basis = model_basis(self.built.matrix, y, w, self.built.names)
        fit = fit_logistic(basis, y, w)
        beta = basis.coefficients(fit.gamma)
        matrices = [self._with(label[0], basis) for label in self.labels]
        margins = _margins(fit.gamma, matrices, w)
        sides = self.crude.rows_of(list(range(len(self.labels))))
        found = self.crude.sides(sides)
        values = np.concatenate((margins, found.unweighted, found.rate, beta))
        if self.design.replicates is None:
            influence = self._influence(basis, fit, matrices, margins, found.unweighted, found.rate)
            spreads: dict[str, Spread] = {
                "design": influence.spread,
                "unstratified": influence.unstratified,
                "independent-records": influence.independent_records,
            }
        else:
            spreads = {"design": self._replicated(basis, fit, matrices, values, sides)}
        estimates = Estimates(values, spreads["design"])
        g, k = len(self.labels), beta.size
        everyone = self.crude.sides(self.crude.row(dict.fromkeys(range(g), 1.0)))
        table = model_table(
            self.parsed.text,
            self.built.names,
            self.built.terms,
            beta,
            estimates.covariance()[3 * g : 3 * g + k, 3 * g : 3 * g + k],
            float(freedom_of(everyone, self.crude, rule)[0]),
            self.kept.size,
            level,
        )
        return ModelRates(self.crude, values[: 3 * g], spreads, g), table

    def _with(self, label: object, basis: Basis) -> FloatArray | None:
        """The matrix with everyone in one group; None for a group without a record."""
        key = f"x{self.parsed.columns.index(self.by)}"
        if str(label) not in self.built.categories(key):
            return None
        return basis.of(self.built.with_level(key, label))

    def _influence(
        self,
        basis: Basis,
        fit: LogisticFit,
        matrices: list[FloatArray | None],
        margins: FloatArray,
        unweighted: FloatArray,
        rate: FloatArray,
    ) -> InfluenceTotals:
        """Influence of every record on margins, crude rates and coefficients."""
        x, y = basis.matrix, self.y.astype(np.float64)
        w = self.design.weights[self.kept]
        total = w.sum()
        mu = np.stack([_predicted(matrix, fit.gamma, w.size) for matrix in matrices], axis=1)
        through = np.stack(
            [
                np.zeros(fit.gamma.size)
                if matrix is None
                else (w * mu[:, g] * (1.0 - mu[:, g])) @ matrix / total
                for g, matrix in enumerate(matrices)
            ],
            axis=1,
        )
        bread = np.linalg.inv(fit.information)
        member = self._members()
        size = member.sum(axis=0)
        weighted = w @ member

        def values(rows: slice) -> FloatArray:
            score = x[rows] * (fit.weights[rows] * (y[rows] - fit.fitted[rows]))[:, None]
            of_gamma = score @ bread
            of_margin = w[rows, None] * (mu[rows] - margins) / total + of_gamma @ through
            here = member[rows]
            with np.errstate(invalid="ignore", divide="ignore"):
                of_plain = here * (y[rows, None] - unweighted) / size
                of_crude = here * w[rows, None] * (y[rows, None] - rate) / weighted
            whole = np.hstack((of_margin, of_plain, of_crude, basis.coefficients(of_gamma)))
            # An empty group has no rate; it must not spoil the others' sums.
            return np.asarray(np.nan_to_num(whole))

        leaf = self.design.tree.leaf[self.kept].astype(np.intp)
        return InfluenceTotals.of(self.design.tree, self.design.n_records, leaf, values)

    def _members(self) -> FloatArray:
        """Which group each record is in, (rows, groups)."""
        codes = self.built.codes(f"x{self.parsed.columns.index(self.by)}")
        names = self.built.categories(f"x{self.parsed.columns.index(self.by)}")
        position = [
            names.index(str(label[0])) if str(label[0]) in names else -1 for label in self.labels
        ]
        return np.stack([codes == p for p in position], axis=1).astype(np.float64)

    def _replicated(
        self,
        basis: Basis,
        fit: LogisticFit,
        matrices: list[FloatArray | None],
        values: FloatArray,
        sides: Any,
    ) -> ReplicatedSpread:
        """Margins, crude rates and coefficients under every replicate."""
        replicates = self.design.replicates
        assert replicates is not None  # noqa: S101 - the caller has looked
        crude = self.crude.estimates(sides).spread
        assert isinstance(crude, ReplicatedSpread)  # noqa: S101 - of the same design
        plain = np.split(crude.values, 2, axis=1)
        work = self.built.matrix.size * replicates.count

        def weights() -> Any:
            for name in replicates.names:
                column = self.design.replicate_column(name)[self.kept] * replicates.scale
                yield column * self.design.weights[self.kept] if replicates.factors else column

        rows = []
        y = self.y.astype(np.float64)
        with progress_bar("Fits", replicates.count, worth=work > _WORTH_PROGRESS) as progress:
            fits = refit(basis, y, weights(), fit.gamma, progress)
            for again, w in zip(fits, weights(), strict=True):
                if again is None:
                    rows.append(np.full(len(matrices) + fit.gamma.size, np.nan))
                    continue
                margins = _margins(again.gamma, matrices, w)
                rows.append(np.concatenate((margins, basis.coefficients(again.gamma))))
        fitted = np.array(rows)
        whole = np.hstack(
            (fitted[:, : len(matrices)], plain[1], plain[0], fitted[:, len(matrices) :])
        )
        return ReplicatedSpread(whole, values, replicates)


def _predicted(matrix: FloatArray | None, gamma: FloatArray, n: int) -> FloatArray:
    return np.full(n, np.nan) if matrix is None else np.asarray(special.expit(matrix @ gamma))


def _margins(gamma: FloatArray, matrices: list[FloatArray | None], w: FloatArray) -> FloatArray:
    """Predictive margin of every group; NaN for one without a record."""
    total = w.sum()
    return np.array(
        [
            np.nan if matrix is None else float(w @ special.expit(matrix @ gamma)) / total
            for matrix in matrices
        ]
    )


def _coverage(design: SampleDesign, inside: NDArray[np.bool_], n_unknown: int) -> Coverage:
    n_zero = int(design.n_records - np.count_nonzero(design.weights))
    return Coverage(design.n_records, n_zero, int(np.count_nonzero(~inside)), n_unknown, 0)


def _table(
    design: SampleDesign,
    tallied: Tallied,
    source: ModelRates,
    model: ModelTable,
    coverage: Coverage,
    outcome: tuple[Outcome, int],
    options: tuple[str, float, str | float],
) -> RateTable:
    named, lost = outcome
    interval, level, rule = options
    cells = list(range(source.n_cells))
    part = measure(source, cells, np.zeros(source.n_cells), rule)
    remarks = ["An adjusted rate is what the model predicts; what it leaves out stays in the rate."]
    if lost:
        remarks.insert(
            0, f"{count(lost)} records with an unknown value in the formula are left out."
        )
    asked = Asked(
        outcomes=(named.name,),
        success=(named.defined,),
        columns=tallied.grouping.columns,
        groups=tallied.grouping.labels,
        coverage=coverage,
        overlapping=False,
        interval=interval,
        level=level,
        df_rule=rule,
        kind=f"adjusted by {model.formula}",
        remarks=tuple(remarks),
    )
    crude = tallied.blocks[0].source.sides(tallied.blocks[0].source.rows_of(cells)).rate
    return assemble(design, asked, (RateBlock((0,), source),), [part], crude, model)
