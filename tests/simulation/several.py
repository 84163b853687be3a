"""A simulation study of tests of several rates: how often they reject what is true.

Run `python -m tests.simulation.several 2000` from the checkout for the table in the docs. Surveys
are drawn as in `study.py`, from populations in which four groups have the same rate.
"""

from __future__ import annotations

import sys
import warnings
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd

import svyrates as sr
from svyrates.compare import multiplicity

__all__ = ["SETTINGS", "TESTS", "Setting", "simulate"]


@dataclass(frozen=True)
class Setting:
    """Clusters in strata, and whether a cluster holds one group or people of all four."""

    title: str
    strata: int
    clusters: int
    people: int
    spread: float
    apart: bool = False


SETTINGS: Mapping[str, Setting] = {
    "spread": Setting("groups spread, 48 df", 12, 5, 24, 0.2),
    "apart": Setting("groups in clusters of their own, 36 df", 12, 16, 12, 0.15, apart=True),
    "few": Setting("the same, 8 df", 4, 12, 16, 0.15, apart=True),
    "simple": Setting("equal weights, no clustering", 24, 4, 20, 0.0),
}
TESTS = (
    "Rao–Scott, second order", "Rao–Scott, first order", "adjusted Wald", "trend, linear",
    "any of 6 pairs, unadjusted", "any, Bonferroni", "any, Holm", "any, Benjamini–Hochberg",
    "any, max-t", "equivalence at the margin", "Pearson", "Pearson, predicted",
)  # fmt: skip
_RATE, _MARGIN = 0.35, 0.08


def _draw(setting: Setting, rng: np.random.Generator, *, shifted: bool) -> pd.DataFrame:
    n_clusters = setting.strata * setting.clusters
    cluster = np.repeat(np.arange(n_clusters), setting.people)
    group = cluster % 4 if setting.apart else rng.integers(0, 4, cluster.size)
    effect = rng.uniform(-setting.spread, setting.spread, n_clusters)
    rate = _RATE + effect[cluster] + (_MARGIN * (group == 3) if shifted else 0.0)
    return pd.DataFrame(
        {
            "stratum": (cluster // setting.clusters),
            "cluster": cluster,
            "g": group,
            "y": (rng.random(cluster.size) < rate).astype(np.int64),
        }
    )


def _rates(data: pd.DataFrame) -> sr.RateTable:
    design = sr.SampleDesign(data, strata="stratum", clusters="cluster")
    return sr.estimate_rates(design, "y", by="g")


def simulate(setting: Setting, replications: int, seed: int) -> dict[str, float]:
    """Share of the samples in which each test rejects."""
    rng = np.random.default_rng(seed)
    # A study needs no more draws than it has samples.
    multiplicity._DRAWS = 5_000
    found = dict.fromkeys(TESTS, 0.0)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
        for _ in range(replications):
            rates = _rates(_draw(setting, rng, shifted=False))
            test = sr.homogeneity_test(rates)
            p = {
                "Rao–Scott, second order": test.second_order_p[0],
                "Rao–Scott, first order": test.first_order_p[0],
                "adjusted Wald": test.wald_p[0],
                "trend, linear": sr.trend_test(rates).p[0],
                "Pearson": test.simple_p[0],
            }
            found["Pearson, predicted"] += test.simple_error_rate[0]
            for name, method in (
                ("any of 6 pairs, unadjusted", "none"),
                ("any, Bonferroni", "bonferroni"),
                ("any, Holm", "holm"),
                ("any, Benjamini–Hochberg", "benjamini-hochberg"),
                ("any, max-t", "max-t"),
            ):
                gaps = sr.compare_rates(rates, multiplicity=method)  # type: ignore[arg-type]
                p[name] = gaps.p_adjusted.min()
            at_margin = _rates(_draw(setting, rng, shifted=True))
            near = sr.compare_rates(at_margin, 0, alternative="equivalent", margin=_MARGIN)
            p["equivalence at the margin"] = near.p[near.find("3", "0")]
            for name, value in p.items():
                found[name] += value < 0.05
    return {name: count / replications for name, count in found.items()}


def main(replications: int) -> None:
    """Print the table of the docs."""
    results = [simulate(setting, replications, seed=21) for setting in SETTINGS.values()]
    heads = " | ".join(setting.title for setting in SETTINGS.values())
    lines = [f"| test | {heads} |", "|:--|" + "--:|" * len(results)]
    lines += [
        f"| {name} | " + " | ".join(f"{100 * one[name]:.1f}" for one in results) + " |"
        for name in TESTS
    ]
    sys.stdout.write("\n".join(lines) + "\n")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 500)
