"""Many alphas at once: p-values adjusted for how many were tried, hurdles, and the share of true zeros.

The number of tests is ``m = max(N, trials)``: N p-values are at hand, and where more strategies or
specifications were tried than are shown, the unseen ones enter every method as p-values of one. That is the
cautious reading: no other values of the unseen p-values would make the adjusted ones larger.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from enum import StrEnum

import numpy as np
import numpy.typing as npt
from scipy import special, stats
from statsmodels.stats.multitest import multipletests

from soffit.errors import InputError, SettingError
from soffit.estimate.statistic import NotApplicable

__all__ = [
    "Adjustment",
    "Hurdle",
    "ManyTests",
    "NullShare",
    "adjusted_pvalues",
    "many_tests",
    "null_share",
    "null_share_at",
    "single_test_level",
    "stepwise_t_hurdles",
    "t_hurdle",
]

Floats = npt.NDArray[np.float64]

# With fewer p-values the share of true nulls cannot be told from noise (common practice, no source).
_FEWEST = 20


class Adjustment(StrEnum):
    """How p-values are adjusted for the number of tests."""

    BONFERRONI = "Bonferroni"
    HOLM = "Holm"
    HOCHBERG = "Hochberg"
    HOMMEL = "Hommel"
    BENJAMINI_HOCHBERG = "Benjamini–Hochberg"
    BENJAMINI_YEKUTIELI = "Benjamini–Yekutieli"

    @property
    def controls(self) -> str:
        """What the method keeps below the chosen size."""
        if self in (Adjustment.BENJAMINI_HOCHBERG, Adjustment.BENJAMINI_YEKUTIELI):
            return "false discovery rate"
        return "probability of any false rejection"

    @property
    def source(self) -> str:
        """Key of the published source in :mod:`soffit.present.sources`."""
        return _SOURCES[self]


class Hurdle(StrEnum):
    """How the size of one test follows from that of all."""

    BONFERRONI = "Bonferroni"
    SIDAK = "Šidák"


_SOURCES = {
    Adjustment.BONFERRONI: "bonferroni-1936",
    Adjustment.HOLM: "holm-1979",
    Adjustment.HOCHBERG: "hochberg-1988",
    Adjustment.HOMMEL: "hommel-1988",
    Adjustment.BENJAMINI_HOCHBERG: "benjamini-hochberg-1995",
    Adjustment.BENJAMINI_YEKUTIELI: "benjamini-yekutieli-2001",
}

USUAL = (
    Adjustment.BONFERRONI,
    Adjustment.HOLM,
    Adjustment.BENJAMINI_HOCHBERG,
    Adjustment.BENJAMINI_YEKUTIELI,
)


@dataclass(frozen=True)
class NullShare:
    """Estimated share of tests whose null is true.

    Parameters
    ----------
    value : float
        π₀, between 0 and 1.
    cut : float
        λ: p-values above it are taken to come from true nulls.
    count : int
        p-values used.
    """

    value: float
    cut: float
    count: int


@dataclass(frozen=True, eq=False)
class ManyTests:
    """N p-values adjusted for m tests.

    Parameters
    ----------
    pvalues : ndarray, shape (N,)
        Unadjusted; NaN where there is no test.
    adjusted : dict of Adjustment to ndarray, shape (N,)
        Adjusted p-values of each method.
    tests : int
        m, the larger of the number of p-values and the number of trials.
    level : float
        1 − size.
    share : NullShare or NotApplicable
        Share of true nulls among the p-values at hand (Storey 2002). Trials that are not at hand have no p-value
        and do not enter it.
    """

    pvalues: Floats
    adjusted: dict[Adjustment, Floats]
    tests: int
    level: float
    share: NullShare | NotApplicable

    @property
    def size(self) -> float:
        """Size of the tests, 1 − level."""
        return 1.0 - self.level

    @property
    def count(self) -> int:
        """How many p-values there are."""
        return int(np.isfinite(self.pvalues).sum())

    def rejected(self, method: Adjustment | None = None) -> npt.NDArray[np.bool_]:
        """Which tests reject at the size, unadjusted if no method is named; shape (N,)."""
        values = self.pvalues if method is None else self.adjusted[method]
        # Adjusted values are sums and products: a tie with the size rejects, as the methods define it.
        return np.asarray(values <= self.size * (1.0 + 1e-12))

    def hurdle(self, kind: Hurdle = Hurdle.BONFERRONI, *, df: float | None = None) -> float:
        """Absolute t ratio that a single test must pass; see :func:`t_hurdle`."""
        return t_hurdle(self.tests, self.level, kind, df=df)


def many_tests(
    pvalues: npt.ArrayLike,
    *,
    trials: int = 1,
    level: float = 0.95,
    methods: Iterable[Adjustment] = USUAL,
) -> ManyTests:
    """Adjust p-values for the number of tests, with the share of true nulls.

    Parameters
    ----------
    pvalues : array_like, shape (N,)
        p-values; NaN where there is no test.
    trials : int
        Strategies or specifications tried in all; below N it has no effect.
    level : float
        1 − size.
    methods : iterable of Adjustment
        Which adjustments.

    Returns
    -------
    ManyTests

    Raises
    ------
    InputError
        If a p-value is outside 0 and 1, or the level is.
    SettingError
        If the number of trials is below one.
    """
    p = _checked(pvalues)
    _refuse_bad_level(level)
    return ManyTests(
        pvalues=p,
        adjusted={method: adjusted_pvalues(p, method, trials=trials) for method in methods},
        tests=_tests(p, trials),
        level=level,
        share=null_share(p),
    )


def adjusted_pvalues(pvalues: npt.ArrayLike, method: Adjustment, *, trials: int = 1) -> Floats:
    """Adjust p-values by one method.

    Parameters
    ----------
    pvalues : array_like, shape (N,)
        p-values; NaN where there is no test, which does not count as one.
    method : Adjustment
        Which method.
    trials : int
        Strategies or specifications tried in all. With ``m = max(N, trials)``, the i-th smallest p-value is
        multiplied by m (Bonferroni), ``m − i + 1`` (Holm, Hochberg), ``m/i`` (Benjamini-Hochberg) or ``m/i`` times
        ``1 + 1/2 + … + 1/m`` (Benjamini-Yekutieli) and made monotone, with p-values of one for the unseen
        trials. Hommel's takes time of the order of m².

    Returns
    -------
    ndarray, shape (N,)

    Raises
    ------
    InputError
        If a p-value is outside 0 and 1.
    SettingError
        If the number of trials is below one.

    References
    ----------
    Holm (1979), Scandinavian Journal of Statistics 6; Hochberg (1988) and Hommel (1988), Biometrika 75;
    Benjamini and Hochberg (1995), Journal of the Royal Statistical Society B 57; Benjamini and Yekutieli
    (2001), Annals of Statistics 29.
    """
    p = _checked(pvalues)
    there = np.flatnonzero(np.isfinite(p))
    out = np.full(p.shape, np.nan)
    tests = _tests(p, trials)
    if there.size:
        order = there[np.argsort(p[there], kind="stable")]
        out[order] = np.minimum(_adjusted_sorted(p[order], method, tests), 1.0)
    return out


def _adjusted_sorted(p: Floats, method: Adjustment, tests: int) -> Floats:
    """Adjust ascending p-values; the unseen ones, all of them one, come last and bind nothing but the factor."""
    # Not statsmodels' multipletests: it collects garbage at each call, which takes longer than a slider may.
    if method is Adjustment.HOMMEL:
        padded = np.concatenate([p, np.ones(tests - len(p))])
        return np.asarray(multipletests(padded, method="hommel", is_sorted=True)[1][: len(p)], dtype=float)
    rank = np.arange(1.0, len(p) + 1.0)
    if method is Adjustment.BONFERRONI:
        return tests * p
    if method is Adjustment.HOLM:
        return np.maximum.accumulate((tests - rank + 1.0) * p)
    factor = tests - rank + 1.0 if method is Adjustment.HOCHBERG else tests / rank
    if method is Adjustment.BENJAMINI_YEKUTIELI:
        factor = factor * (special.digamma(tests + 1.0) + np.euler_gamma)
    return np.minimum.accumulate((factor * p)[::-1])[::-1]


def single_test_level(tests: int, level: float, kind: Hurdle = Hurdle.BONFERRONI) -> float:
    """Size that each of m tests may have if all together are to keep ``1 − level``.

    Parameters
    ----------
    tests : int
        m.
    level : float
        1 − size of all.
    kind : Hurdle
        ``size/m`` (Bonferroni), or ``1 − (1 − size)^{1/m}`` (Šidák 1967, exact for independent tests).

    Returns
    -------
    float

    Raises
    ------
    InputError
        If the level is not between 0 and 1.
    SettingError
        If there is no test.
    """
    _refuse_bad_level(level)
    if tests < 1:
        raise SettingError(f"{tests} tests were named", allowed="one or more")
    if kind is Hurdle.BONFERRONI:
        return (1.0 - level) / tests
    return float(-np.expm1(np.log(level) / tests))


def t_hurdle(tests: int, level: float, kind: Hurdle = Hurdle.BONFERRONI, *, df: float | None = None) -> float:
    """Absolute t ratio that one of m two-sided tests must pass.

    Parameters
    ----------
    tests : int
        m.
    level : float
        1 − size of all tests together.
    kind : Hurdle
        Bonferroni or Šidák.
    df : float, optional
        Degrees of freedom; the normal distribution if not given.

    Returns
    -------
    float

    Raises
    ------
    InputError, SettingError
        As :func:`single_test_level`; also for degrees of freedom that are not positive.
    """
    if df is not None and not df > 0.0:
        raise InputError(f"The degrees of freedom are {df!r}", allowed="a number above zero")
    tail = 0.5 * single_test_level(tests, level, kind)
    return float(stats.norm.isf(tail) if df is None else stats.t.isf(tail, df))


def stepwise_t_hurdles(count: int, tests: int, level: float, *, df: float | None = None) -> Floats:
    """Absolute t ratios that the 1st, 2nd, … largest must pass under Benjamini and Hochberg (1995).

    Parameters
    ----------
    count : int
        How many of them.
    tests : int
        m, at least `count`.
    level : float
        1 − false discovery rate.
    df : float, optional
        Degrees of freedom; the normal distribution if not given.

    Returns
    -------
    ndarray, shape (count,)
        The two-sided quantile at ``size·i/m``. All up to the last ratio that passes its own hurdle are rejected.

    Raises
    ------
    InputError
        If the level is not between 0 and 1.
    SettingError
        If there are more ratios than tests.
    """
    _refuse_bad_level(level)
    if not 0 <= count <= tests:
        raise SettingError(
            f"{count} ratios came for {tests} tests", allowed="as many tests as ratios, or more"
        )
    tail = 0.5 * (1.0 - level) * np.arange(1.0, count + 1.0) / tests
    return np.asarray(stats.norm.isf(tail) if df is None else stats.t.isf(tail, df), dtype=float)


def null_share_at(pvalues: npt.ArrayLike, cut: float) -> float:
    """Share of true nulls from the p-values above a cut: ``#{p > λ}/((1 − λ) N)``, at most one.

    Parameters
    ----------
    pvalues : array_like, shape (N,)
        p-values; NaN where there is no test.
    cut : float
        λ, from 0 to below 1.

    Returns
    -------
    float

    Raises
    ------
    InputError
        If the cut or a p-value is out of range, or there is no p-value.

    References
    ----------
    Storey (2002), Journal of the Royal Statistical Society B 64, 479-498, equation 6.
    """
    if not 0.0 <= cut < 1.0:
        raise InputError(f"The cut is {cut!r}", allowed="zero or above, and below one")
    p = _checked(pvalues)
    p = p[np.isfinite(p)]
    if not p.size:
        raise InputError("No p-value came", allowed="at least one")
    return min(float((p > cut).mean()) / (1.0 - cut), 1.0)


def null_share(pvalues: npt.ArrayLike) -> NullShare | NotApplicable:
    """Share of true nulls with the cut chosen from the data.

    Parameters
    ----------
    pvalues : array_like, shape (N,)
        p-values; NaN where there is no test.

    Returns
    -------
    NullShare or NotApplicable
        Not applicable for fewer than 20 p-values.

    Raises
    ------
    InputError
        If a p-value is outside 0 and 1.

    Notes
    -----
    The cut is the one among 0.05, 0.10, …, 0.95 with the least estimated mean squared error: binomial variance plus
    the squared distance from the lowest decile of the estimates. That is the bootstrap choice of Storey (2002,
    section 9) in closed form (Robinson's, used by the qvalue package), so that no draw is involved.
    """
    p = _checked(pvalues)
    p = p[np.isfinite(p)]
    name = "The share of true zero alphas"
    if p.size < _FEWEST:
        return NotApplicable(name, f"{p.size} p-values are too few to tell it; {_FEWEST} are needed")
    cuts = np.arange(1, 20) / 20.0
    above = (p[None, :] > cuts[:, None]).sum(axis=1)
    estimates = above / (p.size * (1.0 - cuts))
    floor = np.quantile(estimates, 0.1)
    variance = above / (p.size * (1.0 - cuts)) ** 2 * (1.0 - above / p.size)
    best = int(np.argmin(variance + (estimates - floor) ** 2))
    return NullShare(min(float(estimates[best]), 1.0), float(cuts[best]), int(p.size))


def _checked(pvalues: npt.ArrayLike) -> Floats:
    p = np.asarray(pvalues, dtype=float)
    if p.ndim != 1:
        raise InputError(f"p-values of shape {p.shape} came", allowed="one list of p-values")
    wrong = np.flatnonzero((p < 0.0) | (p > 1.0))
    if wrong.size:
        raise InputError(f"p-value {wrong[0] + 1} is {p[wrong[0]]:g}", allowed="numbers from 0 to 1")
    return p


def _tests(p: Floats, trials: int) -> int:
    if trials < 1:
        raise SettingError(f"The number of trials is {trials}", allowed="one or more")
    return max(int(np.isfinite(p).sum()), trials)


def _refuse_bad_level(level: float) -> None:
    if not 0.0 < level < 1.0:
        raise InputError(f"The level is {level!r}", allowed="a number strictly between 0 and 1")
