"""`standardize_rates`: rates as they would be if all groups were made up alike.

Direct standardisation: `Σ_a π_a p_ga` with the standard's shares π of the categories. Sources:
Klein & Schoenborn (2001), Healthy People Statistical Notes 20; Korn & Graubard (1999), section 3.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from svyrates.design import SampleDesign
from svyrates.rates.assemble import Asked, assemble, measure
from svyrates.rates.cells import CellGrid, read_cells
from svyrates.rates.crude import CrudeRates, side_rows
from svyrates.rates.limits import Interval
from svyrates.rates.source import SideRates, SpreadKind
from svyrates.rates.standard import read_standard
from svyrates.rates.table import RateBlock, RateTable
from svyrates.totals import Estimates, RatesOfSides, blocks, lighter, scaled

__all__ = ["StandardizedRates", "standardize_rates"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class StandardizedSides:
    """Totals of groups × categories -> `[standardised rate | unweighted crude rate]` of each side.

    Attributes
    ----------
    sides : (m, groups) each side as a signed sum of groups
    shares : (categories,) of the standard; None for those of all groups together, estimated
    n_categories : int
    """

    sides: Any
    shares: FloatArray | None
    n_categories: int

    def value(self, at: FloatArray) -> FloatArray:
        """Rates at totals (4 cells,) or (r, 4 cells)."""
        n, y, size, success = (self._gathered(block) for block in blocks(at))
        shares = self._shares(blocks(at)[2])
        with np.errstate(invalid="ignore", divide="ignore"):
            rate = np.where(shares[..., None, :] > 0, shares[..., None, :] * success / size, 0.0)
            plain = y.sum(axis=-1) / n.sum(axis=-1)
        return np.concatenate((rate.sum(axis=-1), plain), axis=-1)

    def jacobian(self, at: FloatArray) -> Any:
        """`∂p/∂Y = π/N`, `∂p/∂N = -π p/N`, and through the shares where they are estimated."""
        n, y, size, success = (self._gathered(block) for block in blocks(at))
        shares = self._shares(blocks(at)[2])
        used = (size > 0) & (shares > 0)
        inverse = np.divide(1.0, size, out=np.zeros_like(size), where=used)
        rate = success * inverse
        wide = sparse.kron(sparse.csr_array(self.sides), sparse.eye_array(self.n_categories))
        together = sparse.kron(
            sparse.eye_array(self.sides.shape[0]), np.ones((1, self.n_categories)), format="csr"
        )
        by_success = together @ scaled((shares * inverse).ravel(), wide.tocsr())
        by_size = together @ scaled((-shares * rate * inverse).ravel(), wide.tocsr())
        if self.shares is None:
            mean = (shares * rate).sum(axis=1, keepdims=True)
            through = (rate - mean) / blocks(at)[2].sum()
            by_size = by_size + sparse.csr_array(np.tile(through, (1, self._n_groups(at))))
        m_n, m_y = n.sum(axis=1), y.sum(axis=1)
        one = np.divide(1.0, m_n, out=np.zeros_like(m_n), where=m_n > 0)
        flat = together @ wide
        nowhere = sparse.csr_array(flat.shape)
        return lighter(
            sparse.block_array(
                [
                    [nowhere, nowhere, by_size, by_success],
                    [scaled(-m_y * one**2, flat), scaled(one, flat), nowhere, nowhere],
                ],
                format="csr",
            )
        )

    def _n_groups(self, at: FloatArray) -> int:
        return int(at.shape[-1] // (4 * self.n_categories))

    def _gathered(self, block: FloatArray) -> FloatArray:
        """Sums of each side by category, (..., m, categories)."""
        grid = block.reshape(*block.shape[:-1], -1, self.n_categories)
        dense = self.sides.toarray() if sparse.issparse(self.sides) else self.sides
        return np.asarray(dense @ grid)

    def _shares(self, size: FloatArray) -> FloatArray:
        if self.shares is not None:
            return self.shares
        total = size.reshape(*size.shape[:-1], -1, self.n_categories).sum(axis=-2)
        return np.asarray(total / total.sum(axis=-1, keepdims=True))


@dataclass(frozen=True)
class StandardizedRates:
    """Rates standardised over categories; its cells are the groups.

    Attributes
    ----------
    crude : rates of the groups × categories
    shares : (categories,) of the standard, or None for the sample's own
    n_cells, n_categories : groups, and categories
    """

    crude: CrudeRates
    shares: FloatArray | None
    n_cells: int
    n_categories: int

    adds_cells = True
    no_variance = "a rate is undefined in too many replicates"

    @property
    def design_df(self) -> int:
        """Units minus strata of the whole design."""
        return self.crude.design_df

    @property
    def scheme_df(self) -> float | None:
        """Degrees of freedom of the replicates, None without them."""
        return self.crude.scheme_df

    @property
    def knows_records(self) -> bool:
        """The tally keeps the squares of the weights."""
        return self.crude.knows_records

    @property
    def tells_strata_apart(self) -> bool:
        """Whether the parts of the design's variance can be told apart."""
        return self.crude.tells_strata_apart

    def estimates(self, sides: Any, kind: SpreadKind = "design") -> Estimates:
        """Estimates of `[standardised rate | unweighted crude rate]` of each row of `sides`."""
        function = StandardizedSides(sides, self.shares, self.n_categories)
        return self.crude.totals(kind).apply(function)

    def with_crude(self, sides: Any) -> Estimates:
        """`[standardised | unweighted | crude | unweighted]` of each row of `sides`."""
        adjusted = StandardizedSides(sides, self.shares, self.n_categories)
        return self.crude.totals().apply(_Both(adjusted, RatesOfSides(self._wide(sides))))

    def sides(self, sides: Any) -> SideRates:
        """Standardised rates of each row of `sides`, with the sizes of the crude ones."""
        whole = self.crude.sides(self._wide(sides))
        stacked = self.estimates(sides)
        rate, unweighted = np.split(stacked.values, 2)
        # All or none of a group: so too in every category, whatever rounding says.
        certain = np.where(whole.y == 0, 0.0, np.where(whole.y == whole.n, 1.0, rate))
        return SideRates(
            n=whole.n,
            y=whole.y,
            weighted_n=whole.weighted_n,
            squared_weights=whole.squared_weights,
            rate=np.where(whole.n > 0, certain, np.nan),
            unweighted=np.where(whole.n > 0, unweighted, np.nan),
            stacked=stacked,
            units=whole.units,
            strata=whole.strata,
        )

    def row(self, cells: dict[int, float]) -> Any:
        """One side as a row: group -> sign."""
        index = np.fromiter(cells, dtype=np.intp)
        signs = np.array(list(cells.values()))
        return side_rows(np.zeros_like(index), index, signs, 1, self.n_cells)

    def rows_of(self, cells: list[int]) -> Any:
        """Sides that are single groups."""
        index = np.asarray(cells, dtype=np.intp)
        ones = np.ones(index.size)
        return side_rows(np.arange(index.size), index, ones, index.size, self.n_cells)

    def _wide(self, sides: Any) -> Any:
        """Sides of groups as sides of groups × categories."""
        return lighter(
            sparse.kron(sparse.csr_array(sides), np.ones((1, self.n_categories)), format="csr")
        )


@dataclass(frozen=True, slots=True)
class _Both:
    """Two functions of the same totals, one after the other."""

    first: StandardizedSides
    second: RatesOfSides

    def value(self, at: FloatArray) -> FloatArray:
        return np.concatenate((self.first.value(at), self.second.value(at)), axis=-1)

    def jacobian(self, at: FloatArray) -> Any:
        parts = (self.first.jacobian(at), self.second.jacobian(at))
        return lighter(sparse.vstack([sparse.csr_array(part) for part in parts], format="csr"))


def standardize_rates(
    design: SampleDesign,
    outcome: Any,
    by: str | Sequence[str] | None,
    adjust_for: str | Sequence[str],
    standard: Any,
    *,
    success: Any = None,
    where: Any = None,
    merge: Mapping[str, Mapping[object, object]] | None = None,
    interval: Interval = "korn-graubard",
    level: float = 0.95,
    df: str | float | None = None,
) -> RateTable:
    """Standardise rates directly, so that groups are compared as if they were made up alike.

    Parameters
    ----------
    design : SampleDesign
    outcome, success, where, interval, level, df : see `estimate_rates`
        One outcome.
    by : str, list of str or None
        Grouping columns.
    adjust_for : str or list of str
        Columns of the categories, such as age; several are crossed.
    standard : str or dict
        ``"sample"``: the shares that the categories have among all groups together, whose sampling
        error is counted. The name of a population: ``"us-2000"``, ``"european-2013"`` or
        ``"who-2000-2025"``, whose age bands are summed to the labels of `adjust_for`. Or a dict of
        category -> share or count, with tuples for crossed categories.
    merge : dict, optional
        Column -> {level: the level it joins}, for categories without sample.

    Returns
    -------
    RateTable
        With `crude_rate` beside `rate`; every comparison works on it.

    Raises
    ------
    QuestionError
        For faults in the columns or the standard, and for cells without sample, which are named.

    Notes
    -----
    `Σ_a π_a p_ga`, a smooth function of the totals of groups × categories. A union of groups, such
    as EVERYONE, has its categories added up first. Records with an unknown category are left out,
    of the crude rate too. Limits are formed as for a crude rate, with `n* = p(1 - p)/V`.

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.standardize_rates(design, "damp", "tenure", "age_group", "sample")
    >>> rates.kind
    'standardised for age_group to the whole sample'

    Each tenure's rate if all of them had the ages of everyone.
    """
    factors = [adjust_for] if isinstance(adjust_for, str) else list(adjust_for)
    grid = read_cells(design, outcome, success, by, factors, where, merge, level, df, interval)
    shares, called = read_standard(standard, factors, grid.categories)
    needed = np.ones(len(grid.categories), bool) if shares is None else shares > 0
    if shares is None:
        needed = grid.n.sum(axis=0) > 0
    present = grid.n.sum(axis=1) > 0
    grid.refuse_empty((grid.n == 0) & needed & present[:, None], range(len(grid.groups)))
    source = StandardizedRates(grid.source, shares, len(grid.groups), len(grid.categories))
    return _table(design, grid, source, called, interval, level)


def _table(
    design: SampleDesign,
    grid: CellGrid,
    source: StandardizedRates,
    called: str,
    interval: str,
    level: float,
) -> RateTable:
    cells = list(range(len(grid.groups)))
    units = grid.source.units
    missing = units.by_cell(units.tally.n, answered=False).reshape(grid.n.shape).sum(axis=1)
    part = measure(source, cells, missing, grid.rule)
    crude = grid.source.sides(grid.unions()).rate
    asked = Asked(
        outcomes=(grid.outcome.name,),
        success=(grid.outcome.defined,),
        columns=grid.by,
        groups=grid.groups,
        coverage=grid.coverage,
        overlapping=False,
        interval=interval,
        level=level,
        df_rule=grid.rule,
        kind=f"standardised for {' × '.join(grid.factors)} to {called}",
    )
    return assemble(design, asked, (RateBlock((0,), source),), [part], crude)
