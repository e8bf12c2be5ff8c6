"""How much of a region's variance lies between sites: one-way analysis of variance with sites as groups."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy import optimize, stats

LEVEL = 0.95


@dataclass(frozen=True)
class SiteVariance:
    """What differs between sites in one quantity.

    Attributes
    ----------
    sites, scans
        How many of each.
    variation
        Coefficient of variation of the site means: their standard deviation (n - 1) over their mean.
    eta_squared, eta_interval
        Share of the scans' sum of squares that lies between the sites, and its 95 % interval; None where every site
        has one scan.
    share, share_interval
        Between-site share of the variance by one-way random effects (intraclass correlation), and its 95 % interval.
    f, p
        The test that all sites have one mean.
    """

    sites: int
    scans: int
    variation: float
    eta_squared: float | None
    eta_interval: tuple[float, float] | None
    share: float | None
    share_interval: tuple[float, float] | None
    f: float | None
    p: float | None


def site_variance(values: Mapping[str, Sequence[float]]) -> SiteVariance:
    """Between-site share of the variance, its interval, and the coefficient of variation across sites.

    Parameters
    ----------
    values
        Values by site, any one unit; two sites at least.

    Raises
    ------
    ValueError
        If there are fewer than two sites, or a site without a value.

    Notes
    -----
    Mean squares between (B) and within (W) sites give F = B / W. Random effects: between-site variance (B - W) / n0,
    n0 = (N - sum n_i^2 / N) / (k - 1), share = between / (between + W), not below 0 (Searle 1971). Its interval follows
    from that of F; with unequal numbers of scans it is approximate. Eta squared is SS_between / SS_total; its interval
    comes from the limits of the non-central F distribution's parameter l: l / (l + N) (Steiger 2004).

    >>> found = site_variance({"quay": [1.0, 2.0], "mill": [5.0, 6.0]})
    >>> round(found.f, 3), round(found.eta_squared, 3), round(found.share, 3)
    (32.0, 0.941, 0.939)
    """
    groups = [np.asarray(group, dtype=np.float64) for group in values.values()]
    if len(groups) < 2 or any(group.size == 0 for group in groups):
        raise ValueError("at least two sites with a value each are needed")
    means = np.array([group.mean() for group in groups])
    counts = np.array([group.size for group in groups])
    total, k = int(counts.sum()), len(groups)
    variation = float(means.std(ddof=1) / abs(means.mean())) if means.mean() != 0 else float("nan")
    none = SiteVariance(k, total, variation, None, None, None, None, None, None)
    if total == k:
        return none
    grand = float(np.concatenate(groups).mean())
    between = float(np.sum(counts * (means - grand) ** 2))
    within = float(sum(np.sum((group - mean) ** 2) for group, mean in zip(groups, means, strict=True)))
    if within <= 0.0:
        return none
    f = (between / (k - 1)) / (within / (total - k))
    size = (total - float(np.sum(counts.astype(float) ** 2)) / total) / (k - 1)
    low, high = (stats.f.ppf(q, k - 1, total - k) for q in ((1 + LEVEL) / 2, (1 - LEVEL) / 2))
    return SiteVariance(
        sites=k,
        scans=total,
        variation=variation,
        eta_squared=between / (between + within),
        eta_interval=_eta_interval(f, k - 1, total - k),
        share=_share(f, size),
        share_interval=(_share(f / float(low), size), _share(f / float(high), size)),
        f=f,
        p=float(stats.f.sf(f, k - 1, total - k)),
    )


def _share(f: float, size: float) -> float:
    return max((f - 1.0) / (f - 1.0 + size), 0.0) if f > 1.0 else 0.0


def _eta_interval(f: float, between: int, within: int) -> tuple[float, float]:
    total = between + within + 1
    limits = [_noncentrality(f, between, within, quantile) for quantile in ((1 + LEVEL) / 2, (1 - LEVEL) / 2)]
    return limits[0] / (limits[0] + total), limits[1] / (limits[1] + total)


def _noncentrality(f: float, between: int, within: int, quantile: float) -> float:
    """The non-centrality under which an F up to the observed one has this probability; 0 where none is so unlikely."""

    def excess(value: float) -> float:
        return float(stats.ncf.cdf(f, between, within, value)) - quantile

    if excess(0.0) <= 0.0:
        return 0.0
    high = 10.0 * (f * between + 10.0)
    while excess(high) > 0.0:
        high *= 2.0
    return float(optimize.brentq(excess, 0.0, high, xtol=1e-9))
