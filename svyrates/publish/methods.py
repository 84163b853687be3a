"""A methods paragraph with its references, made of what was used."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from svyrates.compare.decomposition_table import DecompositionTable
from svyrates.compare.homogeneity_table import HomogeneityTable
from svyrates.compare.layout import METHOD_NAMES
from svyrates.compare.measures import MEASURES
from svyrates.compare.table import ComparisonTable
from svyrates.rates.layout import INTERVAL_NAMES
from svyrates.rates.table import RateTable
from svyrates.words import Tabular, join_words, rule_or_number

__all__ = ["methods_of"]

REFERENCES = {
    "wolter": "Wolter, K. M. (2007). Introduction to Variance Estimation, 2nd ed. Springer.",
    "korn-graubard": "Korn, E. L. & Graubard, B. I. (1998). Survey Methodology 24, 193–201.",
    "dean-pagano": "Dean, N. & Pagano, M. (2015). Journal of Survey Statistics and Methodology 3, "
    "484–503.",
    "zou-donner": "Zou, G. Y. & Donner, A. (2008). Statistics in Medicine 27, 1693–1702.",
    "benjamini-hochberg": "Benjamini, Y. & Hochberg, Y. (1995). Journal of the Royal Statistical "
    "Society B 57, 289–300.",
    "benjamini-yekutieli": "Benjamini, Y. & Yekutieli, D. (2001). Annals of Statistics 29, "
    "1165–1188.",
    "max-t": "Hothorn, T., Bretz, F. & Westfall, P. (2008). Biometrical Journal 50, 346–363.",
    "schuirmann": "Schuirmann, D. J. (1987). Journal of Pharmacokinetics and Biopharmaceutics 15, "
    "657–680.",
    "rao-scott": "Rao, J. N. K. & Scott, A. J. (1984). Annals of Statistics 12, 46–60.",
    "graubard-korn": "Graubard, B. I. & Korn, E. L. (1999). Biometrics 55, 652–659.",
    "klein": "Klein, R. J. & Schoenborn, C. A. (2001). Healthy People Statistical Notes 20, "
    "National Center for Health Statistics.",
    "kitagawa": "Kitagawa, E. M. (1955). Journal of the American Statistical Association 50, "
    "1168–1194.",
}
Used = tuple[RateTable, ComparisonTable | None, Sequence[Tabular]]


def methods_of(used: Iterable[Used]) -> tuple[str, list[str]]:
    """A paragraph about the methods of some tables, and the references it needs."""
    said: list[str] = []
    cited: list[str] = ["wolter"]
    for rates, gaps, others in used:
        for text, keys in (*_of_rates(rates), *_of_gaps(gaps), *_of_others(others)):
            if text not in said:
                said.append(text)
            cited += keys
    references = sorted({REFERENCES[key] for key in cited})
    return " ".join(said), references


def _of_rates(rates: RateTable) -> Iterable[tuple[str, list[str]]]:
    variance = "linearized over the survey's sampling units, within strata"
    if rates.df_rule == "scheme":
        variance = "those of the survey's replicate weights"
    elif rates.df_rule == "published":
        variance = "as published"
    yield f"Rates are weighted; their variances are {variance}.", []
    level, method = f"{100 * rates.level:g}%", INTERVAL_NAMES[rates.interval]
    keys = ["korn-graubard" if rates.interval == "korn-graubard" else "dean-pagano"]
    yield (
        f"{level} limits of rates: {method}; degrees of freedom: {rule_or_number(rates.df_rule)}.",
        keys,
    )
    if rates.kind.startswith("standardised"):
        yield f"Rates are directly {rates.kind}.", ["klein"]
    if rates.kind.startswith("adjusted"):
        margins = "predictive margins of a survey-weighted logistic regression"
        yield f"Adjusted rates are {margins}.", ["graubard-korn"]


def _of_gaps(gaps: ComparisonTable | None) -> Iterable[tuple[str, list[str]]]:
    if gaps is None:
        return
    recovered = gaps.limits == "recovered"
    limits = "recovered from the groups' own limits" if recovered else "linear"
    compared = (
        f"Groups are compared by the {MEASURES[gaps.measure].name} of their rates, with the "
        f"covariance of the groups and Student's t; limits are {limits}."
    )
    yield compared, ["zou-donner"] if recovered else []
    if gaps.margin is not None:
        low, high = (MEASURES[gaps.measure].show(end) for end in gaps.margin)
        yield f"The margin of equivalence is {low} to {high}.", ["schuirmann"]
    if gaps.multiplicity != "none":
        key = [gaps.multiplicity] if gaps.multiplicity in REFERENCES else []
        yield f"P-values are adjusted by {METHOD_NAMES[gaps.multiplicity]}.", key
    simple = (
        "The simple formula takes two independent simple random samples; how it would behave under "
        "this design follows from the design-based covariance of the unweighted rates."
    )
    yield simple, []


def _of_others(others: Sequence[Tabular]) -> Iterable[tuple[str, list[str]]]:
    kinds = [type(other) for other in others]
    if HomogeneityTable in kinds:
        yield "Equality of all rates is tested by Rao and Scott's corrections.", ["rao-scott"]
    if DecompositionTable in kinds:
        factors = join_words(
            [
                name
                for other in others
                if isinstance(other, DecompositionTable)
                for name in other.adjust_for
            ]
        )
        yield f"Gaps are split into composition by {factors} and rates.", ["kitagawa"]
