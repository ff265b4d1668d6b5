"""The second pass: one cross-section of returns on betas, under any weighting, for one period or many."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import linalg

from soffit.errors import EstimationError
from soffit.settings import SecondPass

__all__ = [
    "SecondPassParts",
    "covariance_root",
    "design_of",
    "inverse_risk",
    "no_inverse",
    "project",
    "returns_root",
]

Floats = npt.NDArray[np.float64]

_COLLINEAR = 1e-10  # as in soffit.estimate.regression
_SINGULAR = 1e-7  # smallest root of an unexplained share of variance that is not taken for rounding


@dataclass(frozen=True, eq=False)
class SecondPassParts:
    """What the errors of a full-sample two-pass estimate are made of; P premia, the constant's first.

    Parameters
    ----------
    second_pass : SecondPass
        Weighting of the cross-section.
    constant : bool
        Whether the first premium is the zero-beta return.
    slopes : ndarray, shape (T, P)
        Period-by-period premia.
    projection : ndarray, shape (P, N)
        A, with ``slopes = returns A'``.
    inverse : ndarray, shape (P, P)
        ``(Z'WZ)⁻¹`` with Z the betas, after a column of ones if there is a constant.
    weighted_errors : ndarray, shape (N,)
        W times the pricing errors.
    residuals : ndarray, shape (T, N)
        First-pass residuals.
    centred_returns : ndarray, shape (T, N)
        Returns less their means.
    centred_factors : ndarray, shape (T, K)
        Factors less their means.
    """

    second_pass: SecondPass
    constant: bool
    slopes: Floats
    projection: Floats
    inverse: Floats
    weighted_errors: Floats
    residuals: Floats
    centred_returns: Floats
    centred_factors: Floats

    @property
    def periods(self) -> int:
        """T."""
        return len(self.slopes)

    @property
    def premia(self) -> Floats:
        """Mean slopes, shape (P,)."""
        return np.asarray(self.slopes.mean(axis=0))

    @property
    def factor_covariance(self) -> Floats:
        """Ω, divisor T, shape (K, K)."""
        return self.centred_factors.T @ self.centred_factors / self.periods

    @property
    def residual_part(self) -> Floats:
        """``A Σ A'``, divisor T, without forming the N×N matrix Σ; shape (P, P)."""
        mapped = self.residuals @ self.projection.T
        return mapped.T @ mapped / self.periods

    @property
    def inflation(self) -> float:
        """Shanken's ``c = λ'Ω⁻¹λ``, of the premia without the constant."""
        prices = self.premia[int(self.constant) :]
        return float(prices @ np.linalg.solve(self.factor_covariance, prices))


def covariance_root(covariance: Floats) -> Floats | None:
    """Lower Cholesky factor of a covariance, or None if it is singular to working precision.

    Parameters
    ----------
    covariance : ndarray, shape (N, N)
        Any scale.

    Returns
    -------
    ndarray, shape (N, N), or None
    """
    spread = np.sqrt(np.diag(covariance))
    if not (spread > 0.0).all():
        return None
    try:
        root = np.asarray(linalg.cholesky(covariance / np.outer(spread, spread), lower=True))
    except linalg.LinAlgError:
        return None
    return root * spread[:, None] if np.diag(root).min() > _SINGULAR else None


def project(
    design: Floats,
    constant: bool,
    names: Sequence[str],
    *,
    weights: Floats | None = None,
    root: Floats | None = None,
    after: int | None = None,
) -> tuple[Floats, Floats]:
    """Solve cross-sections: the weights that turn returns into premia, and ``(Z'WZ)⁻¹``.

    Parameters
    ----------
    design : ndarray, shape (S, N, P)
        Z of each cross-section.
    constant : bool
        Whether its first column is the constant.
    names : sequence of str
        Factor names, for messages.
    weights : ndarray, shape (S, N), optional
        Roots of the diagonal of W.
    root : ndarray, shape (N, N), optional
        Lower Cholesky factor of the inverse of W, for a single cross-section. W is the
        identity without either.
    after : int, optional
        Position of a single cross-section, for messages.

    Returns
    -------
    projection : ndarray, shape (S, P, N)
    inverse : ndarray, shape (S, P, P)

    Raises
    ------
    EstimationError
        If the betas do not tell the factors apart.
    """
    z = design
    if weights is not None:
        z = design * weights[:, :, None]
    elif root is not None:
        z = linalg.solve_triangular(root, design[0], lower=True)[None]
    scale = np.linalg.norm(z, axis=1)
    safe = np.where(scale > 0.0, scale, 1.0)
    q, r = np.linalg.qr(z / safe[:, None, :])
    bad = (np.abs(np.diagonal(r, axis1=1, axis2=2)) < _COLLINEAR) | (scale == 0.0)
    if bad.any():
        s, column = (int(place[0]) for place in np.nonzero(bad))
        when = s if after is None and len(design) > 1 else after
        raise _alike(column - int(constant), constant, names, when)
    bread = np.linalg.inv(r) / safe[:, :, None]
    back = q.transpose(0, 2, 1)
    if weights is not None:
        back = back * weights[:, None, :]
    elif root is not None:
        back = linalg.solve_triangular(root, q[0], lower=True, trans="T").T[None]
    return bread @ back, bread @ bread.transpose(0, 2, 1)


def _alike(factor: int, constant: bool, names: Sequence[str], when: int | None) -> EstimationError:
    label = f"'{names[factor]}'" if 0 <= factor < len(names) else f"factor {factor + 1}"
    alike = "are the same for every asset" if constant else "are zero for every asset"
    where = "" if when is None else f" in cross-section {when + 1}"
    return EstimationError(
        f"The betas on {label} {alike}, or a combination of the betas on the other factors{where}: "
        f"its price of risk is not identified",
        remedy=f"leave {label} out, add assets with other betas on it"
        + (", or leave the constant out" if constant else ""),
    )


def design_of(betas: Floats, constant: bool) -> Floats:
    """Betas, shape (S, N, K), after a column of ones if there is a constant."""
    S, N, _ = betas.shape
    return np.concatenate([np.ones((S, N, int(constant))), betas], axis=2)


def inverse_risk(sigma: Floats) -> Floats:
    """Roots of WLS weights from residual volatilities, shape (S, N); an error where one is zero."""
    if (sigma == 0.0).any():
        asset = int(np.nonzero(sigma == 0.0)[1][0])
        raise EstimationError(
            f"Asset {asset + 1} is replicated by the factors, so that its WLS weight is infinite",
            remedy="use OLS or GLS, or leave this asset out",
        )
    return np.asarray(1.0 / sigma)


def returns_root(centred: Floats) -> Floats | None:
    """Lower Cholesky factor of the covariance of centred returns, shape (T, N), or None if singular."""
    T, N = centred.shape
    return covariance_root(centred.T @ centred / T) if N < T else None


def no_inverse(count: int, periods: int) -> str:
    """Say why the covariance of this many returns over this many periods has no inverse."""
    if count >= periods:
        return f"{count} assets are too many for {periods} periods"
    return "one of the assets does not move or repeats a combination of others"
