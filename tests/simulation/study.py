"""A simulation study: surveys drawn again and again from populations whose rates are known.

Run `python -m tests.simulation.study 4000` from the checkout for the table in the docs.

Each survey draws clusters with replacement within strata. A cluster moves the rates of all its
people by the same random amount, so that the true rate of every group is known exactly.
"""

from __future__ import annotations

import sys
import warnings
from collections import Counter
from collections.abc import Mapping
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from scipy import stats

import svyrates as sr
from svyrates.rates import INTERVALS, rate_limits

__all__ = ["SETTINGS", "Outcome", "Setting", "simulate"]


@dataclass(frozen=True)
class Setting:
    """A population and the design that samples it.

    Attributes
    ----------
    strata, clusters, people : strata, clusters in each, people sampled in each cluster
    rates : population rates of group A and group B
    spread : a cluster moves all rates by a uniform amount within ± this
    heavy : weight of the second half of the strata, relative to the first
    tilt : how much higher group A's rate is in the light strata (balanced in the heavy ones)
    in_few : group B lives only in the first two clusters of this many strata
    versus : what group A is compared with
    promised : whether theory promises the nominal error rate here
    """

    title: str
    strata: int
    clusters: int
    people: int
    rates: tuple[float, float] = (0.3, 0.3)
    spread: float = 0.2
    heavy: float = 1.0
    tilt: float = 0.0
    in_few: int | None = None
    versus: Any = "B"
    promised: bool = True


SETTINGS: Mapping[str, Setting] = {
    "df15": Setting("groups spread, 15 df", 15, 2, 24, promised=False),
    "df30": Setting("groups spread, 30 df", 15, 3, 24),
    "df72": Setting("groups spread, 72 df", 24, 4, 24),
    "weights": Setting("unequal weights", 18, 3, 24, heavy=4.0),
    "informative": Setting("informative weights", 18, 3, 30, heavy=4.0, tilt=0.12),
    "simple": Setting("equal weights, no clustering", 24, 4, 20, spread=0.0),
    "rare": Setting("rare outcome (2%)", 24, 4, 60, rates=(0.02, 0.02), spread=0.015),
    "unequal": Setting("unequal rates", 18, 3, 24, rates=(0.3, 0.42)),
    "few": Setting("group B in few clusters", 20, 3, 24, in_few=6, promised=False),
    "whole": Setting("part against whole", 18, 3, 24, versus=sr.EVERYONE),
}


@dataclass
class Outcome:
    """What happened over the replications of a setting; rates are proportions of them."""

    design_error: dict[str, float]
    coverage: dict[str, float]
    difference_coverage: float
    simple_error: float
    predicted_error: float
    simple_coverage: float
    predicted_coverage: float
    verdicts: Counter[str]
    replications: int


def _draw(setting: Setting, rng: np.random.Generator) -> pd.DataFrame:
    n_clusters = setting.strata * setting.clusters
    stratum = np.repeat(np.arange(setting.strata), setting.clusters)
    heavy = stratum >= setting.strata // 2
    effect = rng.uniform(-setting.spread, setting.spread, n_clusters)
    cluster = np.repeat(np.arange(n_clusters), setting.people)
    in_b = rng.random(cluster.size) < 0.5
    if setting.in_few is not None:
        houses_b = (np.arange(n_clusters) % setting.clusters < 2) & (stratum < setting.in_few)
        in_b &= houses_b[cluster]
    # The tilt is undone in the heavy strata in proportion to their weight.
    tilt = np.where(heavy, -setting.tilt / setting.heavy, setting.tilt)
    rate = np.where(in_b, setting.rates[1], setting.rates[0] + tilt[cluster])
    y = rng.random(cluster.size) < rate + effect[cluster]
    return pd.DataFrame(
        {
            "stratum": stratum[cluster],
            "cluster": cluster,
            "w": np.where(heavy, setting.heavy, 1.0)[cluster] * 50.0,
            "group": np.where(in_b, "B", "A"),
            "y": y.astype(np.int64),
        }
    )


def simulate(setting: Setting, replications: int, seed: int) -> Outcome:
    """Draw, estimate and compare many times."""
    rng = np.random.default_rng(seed)
    truth = setting.rates[0] - setting.rates[1]
    if setting.versus is sr.EVERYONE:
        truth /= 2.0
    rejected = dict.fromkeys(("smallest group", "union", "Satterthwaite"), 0)
    covered = dict.fromkeys(INTERVALS, 0)
    verdicts: Counter[str] = Counter()
    sums = np.zeros(5)
    for _ in range(replications):
        data = _draw(setting, rng)
        design = sr.SampleDesign(data, weight="w", strata="stratum", clusters="cluster")
        rates = sr.estimate_rates(design, "y", by="group")
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
            gaps = sr.compare_rates(rates, setting.versus)
            again = sr.compare_rates(
                sr.estimate_rates(design, "y", by="group", df="satterthwaite"), setting.versus
            )
        # The design test is tried at the truth, so that unequal rates give an error rate too.
        t = abs(gaps.estimate[0] - truth) / gaps.se[0]
        union = design.n_units - design.n_strata
        for rule, df in zip(rejected, (gaps.df[0], union, again.df[0]), strict=True):
            rejected[rule] += bool(2 * stats.t.sf(t, df) < 0.05)
        first = [
            np.array([column[0]]) for column in (rates.rate, rates.n, rates.n_effective, rates.df)
        ]
        for method in INTERVALS:
            low, high = rate_limits(*first, method, 0.95)
            covered[method] += bool(low[0] <= setting.rates[0] <= high[0])
        inside = gaps.simple_low[0] <= truth <= gaps.simple_high[0]
        holds = gaps.low[0] <= truth <= gaps.high[0]
        error = gaps.simple_p[0] < 0.05
        sums += (holds, error, inside, gaps.simple_error_rate[0], gaps.simple_coverage[0])
        verdicts[str(gaps.verdict[0])] += 1
    mean = sums / replications
    return Outcome(
        {rule: count / replications for rule, count in rejected.items()},
        {method: count / replications for method, count in covered.items()},
        difference_coverage=mean[0],
        simple_error=mean[1],
        predicted_error=mean[3],
        simple_coverage=mean[2],
        predicted_coverage=mean[4],
        verdicts=verdicts,
        replications=replications,
    )


def _percent(value: float) -> str:
    return f"{100 * value:.1f}"


def tables(results: dict[str, Outcome]) -> str:
    """Three Markdown tables: the tests, the limits and the verdicts."""
    heads = ["population", "smallest group", "union", "Satterthwaite", "simple: real"]
    heads += ["simple: predicted", "simple coverage: real", "predicted"]
    lines = [f"| {' | '.join(heads)} |", "|:--" + "|--:" * (len(heads) - 1) + "|"]
    for key, found in results.items():
        equal = SETTINGS[key].rates[0] == SETTINGS[key].rates[1]
        cells = [_percent(found.design_error[rule]) for rule in found.design_error]
        cells += (
            [_percent(found.simple_error), _percent(found.predicted_error)] if equal else ["–", "–"]
        )
        cells += [_percent(found.simple_coverage), _percent(found.predicted_coverage)]
        lines.append(f"| {SETTINGS[key].title} | {' | '.join(cells)} |")
    lines += [
        "",
        f"| population | {' | '.join(INTERVALS)} |",
        "|:--" + "|--:" * len(INTERVALS) + "|",
    ]
    for key, found in results.items():
        cells = [_percent(found.coverage[method]) for method in INTERVALS]
        lines.append(f"| {SETTINGS[key].title} | {' | '.join(cells)} |")
    names = sorted({name for found in results.values() for name in found.verdicts})
    lines += ["", f"| population | {' | '.join(names)} |", "|:--" + "|--:" * len(names) + "|"]
    for key, found in results.items():
        cells = [_percent(found.verdicts[name] / found.replications) for name in names]
        lines.append(f"| {SETTINGS[key].title} | {' | '.join(cells)} |")
    return "\n".join(lines)


if __name__ == "__main__":
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    with ProcessPoolExecutor() as pool:
        asked = [
            (setting, count, 20261201 + place) for place, setting in enumerate(SETTINGS.values())
        ]
        found = dict(zip(SETTINGS, pool.map(simulate, *zip(*asked, strict=True)), strict=True))
    sys.stdout.write(tables(found) + "\n")
