"""Is a rate precise enough to be shown? Named published standards, and the user's own.

Every standard is read the same way: thresholds that withhold, thresholds that ask for a review by
a statistician, thresholds that ask for a note. They look at the sample size, the effective sample
size, the degrees of freedom, the 95% Korn-Graubard limits and the relative standard error. The
limits are always these, whatever interval and level the table itself shows.

The relative standard error, which is also called the coefficient of variation, treats a rate and
its complement differently: at 2% it is seven times what it is at 98%, for the same standard error
and the same information. A rule on it withholds rare outcomes readily and common ones hardly ever.
That is why NCHS gave it up for the width of the interval.

Sources: Parker et al. (2017, as revised), National Center for Health Statistics, Vital and Health
Statistics, Series 2 No. 175; Korn & Graubard (1998), Survey Methodology 24, 193-201.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, field, fields
from typing import Literal, get_args

import numpy as np
from numpy.typing import NDArray

from svyrates.errors import QuestionError, some
from svyrates.rates.limits import rate_limits
from svyrates.rates.table import RateTable
from svyrates.words import significant

__all__ = ["STANDARDS", "Presentation", "Standard", "Status", "Thresholds", "judge_presentation"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

Status = Literal["show", "show-with-note", "review", "withhold"]
_RANKS: tuple[str, ...] = get_args(Status)
_NOTE, _REVIEW, _WITHHOLD = 1, 2, 3
_NO_VARIANCE = "its variance cannot be estimated"

# A value this close to a threshold lies on it: 0.1 + 0.2 is a width of 0.30.
_ON_THRESHOLD = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class Thresholds:
    """What a rate must satisfy; a threshold that is None is not looked at.

    Attributes
    ----------
    least_n : fewest members with a known answer; exactly so many pass
    least_effective_n : smallest `min(n, p(1 - p)/V)`, which is `n` for rates of 0 and 1; likewise
    least_df : fewest degrees of freedom; likewise
    large_width : width of the 95% limits, in (0, 1], that fails, as does anything wider
    largest_relative_width : largest width of the 95% limits in units of the rate that passes
    small_width : width of the 95% limits, up to and with which the relative width does not matter
    largest_rse : largest relative standard error that passes, as a proportion of the rate

    Raises
    ------
    QuestionError
        A threshold is not a positive number, or `small_width` stands without the relative width.

    Examples
    --------
    >>> import svyrates as sr
    >>> sr.Thresholds(least_n=30, largest_rse=0.3).largest_rse
    0.3

    At least 30 members, and a relative standard error of at most 30%.
    """

    least_n: float | None = None
    least_effective_n: float | None = None
    least_df: float | None = None
    large_width: float | None = None
    largest_relative_width: float | None = None
    small_width: float | None = None
    largest_rse: float | None = None

    def __post_init__(self) -> None:
        for each in fields(self):
            value = getattr(self, each.name)
            number = isinstance(value, int | float) and not isinstance(value, bool)
            if value is not None and not (number and 0.0 < value < math.inf):
                raise QuestionError(f"{each.name} must be a positive number; got {value!r}.")
        for name in ("large_width", "small_width"):
            if (getattr(self, name) or 0.0) > 1.0:
                raise QuestionError(
                    f"{name} is a width in proportions, at most 1; got {getattr(self, name)!r}. "
                    "30 percentage points are 0.30."
                )
        if self.small_width is not None and self.largest_relative_width is None:
            raise QuestionError(
                "small_width says where the relative width does not matter; give "
                "largest_relative_width too, or leave it out."
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class Standard:
    """A presentation standard: what withholds a rate, what sends it to review, what adds a note.

    Attributes
    ----------
    name : how the standard is called where results are published
    source : who publishes it
    withhold : a rate that fails these is withheld
    review : a rate that fails these needs a statistician's decision
    note : a rate that fails these is shown with a note

    Notes
    -----
    Some rules belong to every standard. A group without members is withheld. A rate of exactly 0
    or 1 has no variance: its effective size is `n`, its relative standard error is not looked at,
    nor the relative width at a rate of 0, and if nothing withholds it, it is for review. So is a
    rate whose variance cannot be estimated, or is zero, which a calibrated margin may explain, or
    an error. A threshold on something that cannot be computed is not passed. And where `withhold`
    has a relative width, a rate whose complement fails it is shown with a note.

    Examples
    --------
    >>> import svyrates as sr
    >>> ours = sr.Standard(
    ...     name="our own",
    ...     withhold=sr.Thresholds(least_n=25),
    ...     review=sr.Thresholds(least_df=8),
    ...     note=sr.Thresholds(least_n=50),
    ... )
    >>> ours.note.least_n
    50

    Rates of fewer than 25 members are withheld, those of 25 to 49 are shown with a note.
    """

    name: str = "own thresholds"
    source: str = "chosen by the author"
    withhold: Thresholds = field(default_factory=Thresholds)
    review: Thresholds = field(default_factory=Thresholds)
    note: Thresholds = field(default_factory=Thresholds)


STANDARDS: dict[str, Standard] = {
    standard.name: standard
    for standard in (
        Standard(
            name="nchs-proportions",
            source=(
                "NCHS Data Presentation Standards for Proportions, Vital and Health Statistics, "
                "Series 2 No. 175 (2017, as revised)"
            ),
            withhold=Thresholds(
                least_n=30,
                least_effective_n=30,
                large_width=0.30,
                largest_relative_width=1.30,
                small_width=0.05,
            ),
            review=Thresholds(least_df=8),
        ),
        # A size is needed beside it: at rates near 1 the error is small however few the members.
        Standard(
            name="relative-standard-error",
            source="relative standard error of at most 30%, at least 30 members (common practice)",
            withhold=Thresholds(least_n=30, largest_rse=0.30),
        ),
        # The printed bands leave 16.5 to 16.6 open; what lies between is noted.
        Standard(
            name="coefficient-of-variation",
            source=(
                "coefficient of variation of at most 16.5%, noted up to 33.3%, at least 10 members "
                "(practice of Statistics Canada)"
            ),
            withhold=Thresholds(least_n=10, largest_rse=0.333),
            note=Thresholds(largest_rse=0.165),
        ),
    )
}


@dataclass(frozen=True, slots=True, eq=False)
class Presentation:
    """What a standard says of each row of a table of rates.

    Attributes
    ----------
    standard : the standard applied
    status : (rows,) one of "show", "show-with-note", "review" and "withhold"
    reason : (rows,) why, parts joined by "; " and "" for "show"; a withheld row names only what
        withholds it, any other all that was found

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(design, "damp", by="dwelling_type")
    >>> rates.presentation.status.tolist()
    ['show', 'show', 'withhold']

    The interval of the third group is too wide to be shown.
    """

    standard: Standard
    status: NDArray[np.object_]
    reason: NDArray[np.object_]

    @property
    def withheld(self) -> BoolArray:
        """(rows,) whether the row is to be withheld."""
        return np.asarray(self.status == "withhold", dtype=np.bool_)


@dataclass(frozen=True, slots=True)
class Precision:
    """What standards look at, each of shape (rows,); proportions, not percent.

    `effective_n` is at most `n`; `width` is that of the 95% Korn-Graubard limits. NaN where it
    cannot be computed.
    """

    rate: FloatArray
    n: FloatArray
    effective_n: FloatArray
    df: FloatArray
    se: FloatArray
    width: FloatArray

    @classmethod
    def of(cls, rates: RateTable) -> Precision:
        """Measure the rows of a table."""
        certain = (rates.rate == 0.0) | (rates.rate == 1.0)
        n_star = rates.n_effective
        low, high = rate_limits(rates.rate, rates.n, n_star, rates.df, "korn-graubard", 0.95)
        effective_n = np.where(certain, rates.n, np.minimum(rates.n, n_star))
        return cls(rates.rate, rates.n, effective_n, rates.df, rates.se, high - low)

    @property
    def certain(self) -> BoolArray:
        """Rates of exactly 0 or 1."""
        return np.isin(self.rate, (0.0, 1.0))

    @property
    def rse(self) -> FloatArray:
        """Relative standard error; 0 for certain rates, whose rule is another one."""
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.where(self.certain, 0.0, self.se / self.rate)


def judge_presentation(
    rates: RateTable, standard: str | Standard = "nchs-proportions"
) -> Presentation:
    """Judge which rates of a table are precise enough to be shown.

    Parameters
    ----------
    rates : RateTable
    standard : {"nchs-proportions", "relative-standard-error", "coefficient-of-variation"} \
or Standard
        A published standard by name, or thresholds of your own.

    Returns
    -------
    Presentation

    Raises
    ------
    QuestionError
        There is no standard of this name.

    Notes
    -----
    "nchs-proportions" in short: `n` and effective `n` of 30; 95% limits narrower than 0.30; wider
    than 0.05 only up to 1.3 times the rate; fewer than 8 degrees of freedom, no events or nothing
    but events: review; a complement that fails where the rate passes: a note. The standard allows
    departures that are justified. "coefficient-of-variation" shows up to 16.5%, adds a note up to
    33.3% and withholds beyond; "relative-standard-error" withholds beyond 30%.

    A value within one part in 10⁹ of a threshold lies on it, so that the last bit of a floating
    number decides nothing.

    A standard says nothing of disclosure: a rate can be precise and still identify people.

    Examples
    --------
    >>> import svyrates as sr
    >>> survey = sr.demo_survey(wave="2024")
    >>> design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    >>> rates = sr.estimate_rates(
    ...     design, outcome="cold_home", success=["often", "always"], by="sex"
    ... )
    >>> sr.judge_presentation(rates).status.tolist()
    ['show', 'show']

    Both rates meet the standard of the National Center for Health Statistics.
    """
    if isinstance(standard, str):
        if standard not in STANDARDS:
            raise QuestionError(
                f"There is no standard {standard!r}. Choose one of {some(tuple(STANDARDS))}, or "
                "give a Standard with thresholds of your own."
            )
        standard = STANDARDS[standard]
    elif not isinstance(standard, Standard):
        raise QuestionError(
            f"standard must be a name or a Standard; got {type(standard).__name__}."
        )
    status, reason = apply_standard(Precision.of(rates), standard)
    return Presentation(standard, status, reason)


def apply_standard(
    precision: Precision, standard: Standard
) -> tuple[NDArray[np.object_], NDArray[np.object_]]:
    """Status and reason of each row; arguments already checked."""
    rules = list(_rules(precision, standard))
    rank = np.zeros(precision.n.size, dtype=np.intp)
    for level, failed, _ in rules:
        rank = np.where(failed, np.maximum(rank, level), rank)
    # Few combinations occur among many rows: each is worded once.
    spoken = [failed & ((rank < _WITHHOLD) | (level == _WITHHOLD)) for level, failed, _ in rules]
    patterns, which = np.unique(np.stack(spoken, axis=1), axis=0, return_inverse=True)
    texts = [
        "; ".join(
            dict.fromkeys(text for (_, _, text), said in zip(rules, row, strict=True) if said)
        )
        for row in patterns.tolist()
    ]
    return (
        np.array(_RANKS, dtype=object)[rank],
        np.array(texts, dtype=object)[which.reshape(-1)],
    )


def _rules(precision: Precision, standard: Standard) -> Iterator[tuple[int, BoolArray, str]]:
    """Severity, rows that fail, and why, gravest first."""
    members = precision.n > 0
    certain = precision.certain & members
    unknown = members & ~certain & np.isnan(precision.se)
    yield _WITHHOLD, ~members, "no member with a known answer"
    for failed, text in _failures(precision, standard.withhold):
        yield _WITHHOLD, failed & members, text
    for failed, text in _failures(precision, standard.review):
        yield _REVIEW, failed & members, text
    yield _REVIEW, certain, "a rate of exactly 0 or 1 has no variance"
    yield _REVIEW, unknown, _NO_VARIANCE
    yield _REVIEW, members & ~certain & (precision.se == 0.0), "the standard error is zero"
    complement = _wide(precision, 1.0 - precision.rate, standard.withhold)
    yield _NOTE, complement & members & ~certain, "the complement may be unreliable"
    for failed, text in _failures(precision, standard.note):
        yield _NOTE, failed & members, text


def _failures(precision: Precision, asked: Thresholds) -> Iterator[tuple[BoolArray, str]]:
    """Rows that do not pass each threshold, and why."""
    if asked.least_n is not None:
        yield _below(precision.n, asked.least_n), f"sample size below {asked.least_n:g}"
    if asked.least_effective_n is not None:
        yield np.isnan(precision.effective_n), _NO_VARIANCE
        yield (
            # Where the sample itself is too small there is no more to say.
            _below(precision.effective_n, asked.least_effective_n)
            & ~_below(precision.n, asked.least_n or 0.0),
            f"effective sample size below {asked.least_effective_n:g}",
        )
    if asked.large_width is not None:
        points = significant(100.0 * asked.large_width, 4)
        yield (
            ~(np.isnan(precision.width) | _below(precision.width, asked.large_width)),
            f"95% interval {points} percentage points wide or more",
        )
    if asked.largest_relative_width is not None:
        percent = significant(100.0 * asked.largest_relative_width, 4)
        yield (
            _wide(precision, precision.rate, asked),
            f"95% interval wider than {percent}% of the rate",
        )
    if asked.large_width is not None or asked.largest_relative_width is not None:
        no_limits, no_variance = np.isnan(precision.width), np.isnan(precision.se)
        yield no_limits & no_variance, _NO_VARIANCE
        yield no_limits & ~no_variance, "its 95% interval cannot be computed"
    if asked.largest_rse is not None:
        percent = significant(100.0 * asked.largest_rse, 4)
        yield np.isnan(precision.rse), _NO_VARIANCE
        yield (
            _above(precision.rse, asked.largest_rse),
            f"relative standard error above {percent}%",
        )
    if asked.least_df is not None:
        yield np.isnan(precision.df), "its degrees of freedom are unknown"
        yield (
            _below(precision.df, asked.least_df),
            (f"fewer than {asked.least_df:g} degrees of freedom"),
        )


def _wide(precision: Precision, rate: FloatArray, asked: Thresholds) -> BoolArray:
    """Whether the width is too large for the rate, or for its complement."""
    if asked.largest_relative_width is None:
        return np.zeros(rate.size, dtype=np.bool_)
    # At a rate of 0 there is no relative width.
    with np.errstate(invalid="ignore", divide="ignore"):
        relative = np.where(rate == 0.0, 0.0, precision.width / rate)
    return _above(relative, asked.largest_relative_width) & _above(
        precision.width, asked.small_width or 0.0
    )


def _below(value: FloatArray, threshold: float) -> BoolArray:
    """Below the threshold and not on it; never so where unknown."""
    return np.asarray(value < threshold * (1.0 - _ON_THRESHOLD))


def _above(value: FloatArray, threshold: float) -> BoolArray:
    """Above the threshold and not on it; never so where unknown."""
    return np.asarray(value > threshold * (1.0 + _ON_THRESHOLD))
