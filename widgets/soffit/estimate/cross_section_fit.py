"""How well betas line up with average returns: cross-sectional R², its interval, and pricing errors.

All quantities are decimal per period.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import linalg

from soffit.errors import EstimationError
from soffit.estimate.second_pass import SecondPassParts, covariance_root
from soffit.estimate.statistic import Distribution, Family, Interval, NotApplicable, TestStatistic

__all__ = ["R2Interval", "cross_sectional_r2", "pricing_error_tests", "r2_interval"]

Floats = npt.NDArray[np.float64]

_GRID = 21  # true R² from 0 to 1 at which the sampling distribution is drawn
_BATCH_BYTES = 64_000_000
_DISTINCT = 0.6  # share of distinct periods in a resample (63% expected) that a covariance may rely on


def cross_sectional_r2(
    mean: Floats, betas: Floats, *, constant: bool, root: Floats | None = None
) -> float | NotApplicable:
    """Share of the cross-section of mean returns that betas explain.

    Parameters
    ----------
    mean : ndarray, shape (N,)
        Mean excess returns.
    betas : ndarray, shape (N, K)
        Betas.
    constant : bool
        With a constant the yardstick is one mean for all the assets, without it zero for each.
    root : ndarray, shape (N, N), optional
        Lower Cholesky factor of the returns' covariance for the GLS R²; the OLS R² without it.

    Returns
    -------
    float or NotApplicable
        ``1 − e'We/e₀'We₀``, between 0 and 1; not applicable where mean returns do not differ from
        the yardstick.

    References
    ----------
    Lewellen, Nagel and Shanken (2010), Journal of Financial Economics 96; Kandel and Stambaugh (1995).
    """
    ones = np.ones((len(mean), int(constant)))
    design, target = np.column_stack([ones, betas]), mean[:, None]
    if root is not None:
        solved = linalg.solve_triangular(root, np.column_stack([design, target]), lower=True)
        design, target = solved[:, :-1], solved[:, -1:]
    total = _left(design[:, : int(constant)], target) if constant else float((target**2).sum())
    if total <= 1e-26 * float((target**2).sum()) or total == 0.0:
        yardstick = "they do not differ from one another" if constant else "they are zero"
        return NotApplicable("Cross-sectional R²", f"mean returns leave nothing to explain: {yardstick}")
    return max(0.0, 1.0 - _left(design, target) / total)


def _left(design: Floats, target: Floats) -> float:
    q = _orthonormal(design)
    rest = target - q @ (q.T @ target)
    return float((rest**2).sum())


def _orthonormal(design: Floats, mode: Literal["reduced", "complete"] = "reduced") -> Floats:
    scale = np.linalg.norm(design, axis=0)
    return np.asarray(np.linalg.qr(design / np.where(scale > 0.0, scale, 1.0), mode=mode)[0])


def pricing_error_tests(
    parts: SecondPassParts, betas: Floats, mean: Floats
) -> tuple[TestStatistic | NotApplicable, TestStatistic | NotApplicable]:
    """Test that all pricing errors are zero, allowing for betas being estimates.

    Parameters
    ----------
    parts : SecondPassParts
        The two-pass estimate.
    betas : ndarray, shape (N, K)
        Full-sample betas.
    mean : ndarray, shape (N,)
        Mean excess returns.

    Returns
    -------
    chi2, f : TestStatistic or NotApplicable
        ``T e'V⁺e/(1 + c)`` against χ²(N − P), and its small-sample form
        ``(T − K − N + P)/(N − P) · e'V⁺e/(1 + c)`` against F(N − P, T − K − N + P). V is the covariance of
        the errors of the cross-section; the quadratic form is the same for OLS, WLS and GLS, the correction c
        is not.

    References
    ----------
    Shanken (1985), Journal of Financial Economics 14, 327-348; Shanken (1992), Review of Financial Studies 5,
    1-33.
    """
    null = "all pricing errors are zero"
    names = "Pricing errors, χ² with Shanken's correction", "Pricing errors, F with Shanken's correction"
    count, width = betas.shape
    design = np.column_stack([np.ones((count, int(parts.constant))), betas])
    spare, df = count - design.shape[1], parts.periods - width - 1
    reason = ""
    if spare == 0:
        reason = f"{count} assets are priced exactly by {design.shape[1]} premia, whatever the data"
    elif spare > df:
        reason = (
            f"{count} assets are too many for {parts.periods} periods: the covariance of the pricing errors "
            f"has no inverse. Use fewer assets, or portfolios of them"
        )
    if reason:
        return NotApplicable(names[0], reason), NotApplicable(names[1], reason)
    scale = np.linalg.norm(design, axis=0)
    across = np.linalg.qr(design / np.where(scale > 0.0, scale, 1.0), mode="complete")[0][
        :, design.shape[1] :
    ]
    left = parts.residuals @ across
    root = covariance_root(left.T @ left / parts.periods)
    if root is None:
        reason = "some combination of the assets is replicated by the factors without a residual"
        return NotApplicable(names[0], reason), NotApplicable(names[1], reason)
    scaled = linalg.solve_triangular(root, across.T @ mean, lower=True)
    quadratic = float(scaled @ scaled) / (1.0 + parts.inflation)
    chi2, f = Distribution(Family.CHI2, (float(spare),)), Distribution(Family.F, (spare, df - spare + 1.0))
    wald, small = parts.periods * quadratic, (df - spare + 1.0) / spare * quadratic
    return (
        TestStatistic(names[0], wald, null, chi2, chi2.sf(wald), "shanken-1992"),
        TestStatistic(names[1], small, null, f, f.sf(small), "shanken-1985"),
    )


@dataclass(frozen=True, eq=False)
class R2Interval:
    """Interval of the true cross-sectional R².

    Parameters
    ----------
    sample : float
        The sample's R².
    interval : Interval or NotApplicable
        True values of R² for which the sample's lies in the middle of its bootstrap distribution; not
        applicable where no true value would give such a sample.
    grid : ndarray, shape (G,)
        True values of R² tried.
    low, high : ndarray, shape (G,)
        Ends of the middle part of the sample R²'s distribution at each.
    draws : int
        Number of bootstrap samples.
    """

    sample: float
    interval: Interval | NotApplicable
    grid: Floats
    low: Floats
    high: Floats
    draws: int


def r2_interval(
    returns: Floats,
    factors: Floats,
    betas: Floats,
    *,
    constant: bool,
    generalised: bool = False,
    draws: int = 2000,
    level: float = 0.95,
    seed: int = 0,
) -> R2Interval | NotApplicable:
    """Invert the bootstrap distribution of the sample R² into an interval of the true one.

    Parameters
    ----------
    returns : ndarray, shape (T, N)
        Excess returns.
    factors : ndarray, shape (T, K)
        Factors.
    betas : ndarray, shape (N, K)
        Their full-sample betas.
    constant : bool
        Whether the cross-section has a constant.
    generalised : bool
        The GLS R² instead of the OLS one.
    draws : int
        Bootstrap samples.
    level : float
        Coverage of the interval.
    seed : int
        Seed of the draws.

    Returns
    -------
    R2Interval or NotApplicable
        Not applicable where there are as many premia as assets, or too many assets for a GLS R².

    Raises
    ------
    EstimationError
        If fewer than 99 draws were asked for.

    Notes
    -----
    For each true R² on a grid, mean returns are set to ``h · fitted + error`` with the error drawn at random
    across the fitted direction, its size and h chosen so that the true R² holds and the dispersion of mean
    returns is the sample's. Periods of returns and factors are resampled together, betas and R² estimated
    anew. The interval holds the true values at which the sample's R² lies between the tail quantiles.
    Shifting the means moves no covariance, so one set of resampled moments serves the whole grid.

    References
    ----------
    Lewellen, Nagel and Shanken (2010), Journal of Financial Economics 96, 175-194, after Stock (1991).
    """
    name = "Interval of the cross-sectional R²"
    T, N = returns.shape
    P = betas.shape[1] + int(constant)
    if draws < 99:
        raise EstimationError(f"{draws} bootstrap draws came", allowed="99 or more")
    if P >= N:
        return NotApplicable(name, f"{N} assets are fitted exactly by {P} premia in every sample")
    if generalised and _DISTINCT * T <= N + 1:
        return NotApplicable(
            name, f"{N} assets are too many for {T} periods: resampled covariances have no inverse"
        )
    mean = returns.mean(axis=0)
    centred = returns - mean
    root = covariance_root(centred.T @ centred / T) if generalised else None
    if generalised and root is None:
        return NotApplicable(name, "the covariance of returns has no inverse: some assets repeat others")
    sample = cross_sectional_r2(mean, betas, constant=constant, root=root)
    if isinstance(sample, NotApplicable):
        return NotApplicable(name, sample.reason)
    world = _World.of(mean, betas, constant, root)
    if world is None:
        return NotApplicable(name, "the betas explain none of the cross-section of mean returns")
    grid = np.linspace(0.0, 1.0, _GRID)
    drawn = _draw(centred, factors, world, grid, draws, np.random.default_rng(seed), constant, generalised)
    tail = (1.0 - level) / 2.0
    low, high = np.quantile(drawn, [tail, 1.0 - tail], axis=0)
    interval = _inverted(sample, grid, low, high, level, name)
    return R2Interval(sample, interval, grid, low, high, draws)


@dataclass(frozen=True, eq=False)
class _World:
    """What mean returns are made of for a given true R², in units where the metric is the identity."""

    root: Floats | None
    level: Floats  # (N,) the part along the constant
    direction: Floats  # (N,) unit vector along the fitted values
    span: Floats  # (N, P) orthonormal columns of the betas and the constant
    size: float  # root of the total sum of squares

    @classmethod
    def of(cls, mean: Floats, betas: Floats, constant: bool, root: Floats | None) -> _World | None:
        columns = np.column_stack([np.ones((len(mean), int(constant))), betas, mean])
        if root is not None:
            columns = linalg.solve_triangular(root, columns, lower=True)
        span = _orthonormal(columns[:, :-1])
        target, first = columns[:, -1], span[:, : int(constant)]
        level = first @ (first.T @ target)
        fitted = span @ (span.T @ target) - level
        length = float(np.linalg.norm(fitted))
        size = float(np.linalg.norm(target - level))
        return cls(root, level, fitted / length, span, size) if length > 1e-9 * size else None

    def ingredients(self, draw: np.random.Generator, count: int) -> Floats:
        """Level, fitted direction and a random direction across it, shape (count, 3, N).

        Mean returns at a true R² of ρ are the first plus √ρ times the second plus √(1 − ρ) times the third.
        """
        noise = draw.standard_normal((count, len(self.level)))
        noise -= (noise @ self.span) @ self.span.T
        noise /= np.linalg.norm(noise, axis=1)[:, None]
        fixed = np.broadcast_to(
            np.stack([self.level, self.size * self.direction]), (count, 2, noise.shape[1])
        )
        parts = np.concatenate([fixed, self.size * noise[:, None, :]], axis=1)
        return parts if self.root is None else parts @ self.root.T


def _draw(
    centred: Floats,
    factors: Floats,
    world: _World,
    grid: Floats,
    draws: int,
    draw: np.random.Generator,
    constant: bool,
    generalised: bool,
) -> Floats:
    """Sample R² of each draw at each true value, shape (draws, G)."""
    (T, N), K = centred.shape, factors.shape[1]
    # Scaling the factors changes no R² and keeps their moments well conditioned.
    scaled = (factors - factors.mean(axis=0)) / factors.std(axis=0)
    both = np.column_stack([scaled, centred])
    rows = both if generalised else scaled
    width = rows.shape[1]
    batch = max(1, _BATCH_BYTES // (8 * (width * (T + K + N) + 10 * N)))
    mixture = np.stack([np.ones(len(grid)), np.sqrt(grid), np.sqrt(1.0 - grid)], axis=1)
    out = np.empty((draws, len(grid)))
    for start in range(0, draws, batch):
        count = min(batch, draws - start)
        weights = draw.multinomial(T, np.full(T, 1.0 / T), size=count) / T
        means = weights @ both
        second = (weights[:, None, :] * rows.T) @ both - means[:, :width, None] * means[:, None, :]
        design = np.linalg.solve(second[:, :K, :K], second[:, :K, K:]).transpose(0, 2, 1)
        if constant:
            design = np.concatenate([np.ones((count, N, 1)), design], axis=2)
        vectors = world.ingredients(draw, count).transpose(0, 2, 1)
        vectors[:, :, 0] += means[:, K:]
        whole, explained = _quadratics(design, vectors, constant, second[:, K:, K:] if generalised else None)
        up, down = (np.einsum("gi,bij,gj->bg", mixture, form, mixture) for form in (explained, whole))
        out[start : start + count] = up / down
    return out


def _quadratics(
    design: Floats, vectors: Floats, constant: bool, covariance: Floats | None
) -> tuple[Floats, Floats]:
    """Quadratic forms of total and explained sums of squares of combinations of vectors, each (B, 3, 3).

    Designs are (B, N, P), vectors (B, N, 3), covariances (B, N, N); sums of squares are weighted by the inverse
    covariance if there is one.
    """
    scaled = design / np.linalg.norm(design, axis=1)[:, None, :]
    if covariance is None:
        loads = np.linalg.qr(scaled)[0].transpose(0, 2, 1) @ vectors
        within = vectors.transpose(0, 2, 1) @ vectors
    else:
        joined = np.concatenate([scaled, vectors], axis=2)
        gram = joined.transpose(0, 2, 1) @ np.linalg.solve(covariance, joined)
        P = design.shape[2]
        loads = np.linalg.solve(np.linalg.cholesky(gram[:, :P, :P]), gram[:, :P, P:])
        within = gram[:, P:, P:]
    level, rest = loads[:, : int(constant)], loads[:, int(constant) :]
    total = within - level.transpose(0, 2, 1) @ level
    return total, rest.transpose(0, 2, 1) @ rest


def _inverted(
    sample: float, grid: Floats, low: Floats, high: Floats, level: float, name: str
) -> Interval | NotApplicable:
    """True values at which the sample's R² lies between the quantiles, read off between grid points."""
    fine = np.linspace(0.0, 1.0, 1001)
    inside = (np.interp(fine, grid, low) <= sample) & (sample <= np.interp(fine, grid, high))
    if not inside.any():
        return NotApplicable(
            name, f"no true R² makes a sample R² of {sample:.2f} likely at the {100 * level:g}% level"
        )
    accepted = fine[inside]
    return Interval(float(accepted[0]), float(accepted[-1]), level)
