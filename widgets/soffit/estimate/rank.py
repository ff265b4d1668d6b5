"""Can betas tell the factors apart: rank tests and the cross-sectional spread of each factor's betas.

A price of risk is identified only if betas differ across assets. A factor unrelated to the assets (a useless
factor) has betas that are all noise, and ordinary t ratios of its price mean nothing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import linalg

from soffit.errors import EstimationError
from soffit.estimate.regression import regress
from soffit.estimate.second_pass import covariance_root
from soffit.estimate.statistic import Distribution, Family, NotApplicable, TestStatistic

__all__ = ["Identification", "identification"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Identification:
    """Whether a sample identifies the prices of risk.

    Parameters
    ----------
    spread : tuple of TestStatistic or NotApplicable
        For each factor: its betas do not differ across assets (or, without a constant, are all zero).
    cragg_donald : TestStatistic or NotApplicable
        The betas do not tell the factors apart, under iid residuals.
    kleibergen_paap : TestStatistic or NotApplicable
        The same, allowing for heteroskedasticity.
    """

    spread: tuple[TestStatistic | NotApplicable, ...]
    cragg_donald: TestStatistic | NotApplicable
    kleibergen_paap: TestStatistic | NotApplicable

    def useless(self, size: float = 0.05) -> tuple[int, ...]:
        """Positions of factors whose betas show no spread beyond noise at this test size."""
        return tuple(
            k for k, test in enumerate(self.spread) if isinstance(test, TestStatistic) and test.pvalue > size
        )

    def identified(self, size: float = 0.05) -> bool | NotApplicable:
        """Whether both rank tests that exist reject that the betas do not tell the factors apart."""
        tests = [t for t in (self.cragg_donald, self.kleibergen_paap) if isinstance(t, TestStatistic)]
        if not tests:
            assert isinstance(self.cragg_donald, NotApplicable)
            return NotApplicable("Rank of the betas", self.cragg_donald.reason)
        return all(test.pvalue <= size for test in tests)


def identification(
    returns: Floats, factors: Floats, *, constant: bool = True, names: tuple[str, ...] = ()
) -> Identification:
    """Test whether the betas of these assets identify the prices of these factors.

    Parameters
    ----------
    returns : ndarray, shape (T, N)
        Excess returns.
    factors : ndarray, shape (T, K)
        Factors; at least one.
    constant : bool
        Whether the cross-section has a constant: then only differences between betas count.
    names : tuple of str
        Factor names, for messages.

    Returns
    -------
    Identification

    Raises
    ------
    EstimationError
        If no factor came, there are fewer assets than premia, or the first pass cannot be estimated.

    Notes
    -----
    With B the betas (or their q = N − 1 contrasts across assets when there is a constant) and Σ the residual
    covariance: the spread test is Hotelling's ``B_k'Σ⁻¹B_k``, exact F(q, T − K − q) under normal residuals; Cragg
    and Donald's (1997) statistic is the smallest squared singular value of ``Σ^{-1/2} B (F'F)^{1/2}``; Kleibergen
    and Paap's (2006) weighs the same singular vector by the White covariance of the betas. Both are χ²(q − K + 1)
    if the rank is K − 1.
    """
    factors = np.asarray(factors, dtype=float)
    if factors.ndim != 2 or factors.shape[1] == 0:
        raise EstimationError("A rank test needs a factor; none came", remedy="name at least one factor")
    first_pass = regress(returns, factors, names=names)
    N, K = first_pass.beta.shape
    q = N - int(constant)
    if q < K:
        raise EstimationError(
            f"{K + int(constant)} premia cannot be identified by {N} assets",
            remedy="add test assets, use fewer factors" + (" or leave the constant out" if constant else ""),
        )
    df = first_pass.fit.df
    if q > df:
        return _nothing(
            K, f"{N} assets are too many for {first_pass.periods} periods; form portfolios of them"
        )
    betas, residuals = first_pass.beta, first_pass.residuals
    if constant:
        across = _contrasts(N)
        betas, residuals = across.T @ betas, residuals @ across
    root = covariance_root(residuals.T @ residuals / df)
    if root is None:
        return _nothing(K, "some combination of the assets is replicated by the factors without a residual")
    centred = factors - factors.mean(axis=0)
    half = np.asarray(np.linalg.qr(centred, mode="r")).T  # half half' = F'F
    whitened = linalg.solve_triangular(root, betas, lower=True)
    noise = linalg.solve_triangular(root, residuals.T, lower=True).T
    scores = linalg.solve_triangular(half, centred.T, lower=True).T  # orthonormal columns
    spread = _spread(whitened, half, df, q, constant)
    cragg_donald, kleibergen_paap = _rank(whitened @ half, noise, scores)
    return Identification(spread, cragg_donald, kleibergen_paap)


def _contrasts(count: int) -> Floats:
    """Orthonormal contrasts across assets, shape (N, N − 1)."""
    return np.asarray(np.linalg.qr(np.ones((count, 1)), mode="complete")[0][:, 1:])


def _spread(
    whitened: Floats, half: Floats, df: int, q: int, constant: bool
) -> tuple[TestStatistic | NotApplicable, ...]:
    null = "its betas are the same for every asset" if constant else "its betas are zero for every asset"
    unit = (np.linalg.inv(half) ** 2).sum(axis=0)  # diagonal of (F'F)⁻¹
    law = Distribution(Family.F, (float(q), df - q + 1.0))
    values = (whitened**2).sum(axis=0) / unit * (df - q + 1.0) / (df * q)
    return tuple(
        TestStatistic("Spread of betas, F", float(v), null, law, law.sf(float(v)), "hotelling-1931")
        for v in values
    )


def _rank(
    theta: Floats, noise: Floats, scores: Floats
) -> tuple[TestStatistic | NotApplicable, TestStatistic | NotApplicable]:
    q, K = theta.shape
    null = "the betas do not tell the factors apart (their rank is below the number of factors)"
    law = Distribution(Family.CHI2, (float(q - K + 1),))
    left, singular, right = np.linalg.svd(theta, full_matrices=True)
    smallest = float(singular[-1])
    plain = smallest**2
    cragg_donald = TestStatistic(
        "Rank of betas, Cragg-Donald", plain, null, law, law.sf(plain), "cragg-donald-1997"
    )
    # The last singular value, seen in the directions that a lower rank would leave empty, is (smallest, 0, ..., 0).
    moments = (noise @ left[:, K - 1 :]) * (scores @ right[-1])[:, None]
    root = covariance_root(moments.T @ moments)
    name = "Rank of betas, Kleibergen-Paap"
    if root is None:
        return cragg_donald, NotApplicable(name, "the White covariance of the betas has no inverse")
    target = np.zeros(q - K + 1)
    target[0] = smallest
    scaled = linalg.solve_triangular(root, target, lower=True)
    robust = float(scaled @ scaled)
    return cragg_donald, TestStatistic(name, robust, null, law, law.sf(robust), "kleibergen-paap-2006")


def _nothing(width: int, reason: str) -> Identification:
    rank = NotApplicable("Rank of betas", reason)
    return Identification((NotApplicable("Spread of betas", reason),) * width, rank, rank)
