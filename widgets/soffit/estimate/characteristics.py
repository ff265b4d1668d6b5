"""Premia of characteristics: a cross-section of returns on what is known of each asset, each period.

The cross-sections run through linearmodels' FamaMacBeth. Returns are decimal per period; characteristics are in
whatever unit they came.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from soffit.errors import EstimationError
from soffit.estimate.cross_section_errors import (
    PremiumError,
    fama_macbeth_covariance,
    newey_west_covariance,
    premium_lags,
    premium_tests,
)
from soffit.estimate.statistic import NotApplicable, TestStatistic
from soffit.settings import LagRule, Reference

__all__ = ["CharacteristicPremia", "SkippedPeriod", "characteristic_premia"]

Floats = npt.NDArray[np.float64]
Codes = npt.NDArray[np.int64]

_COLLINEAR = 1e-9
_STILL = 1e-12  # spread within a period, relative to size, below which a characteristic does not vary


@dataclass(frozen=True)
class SkippedPeriod:
    """A period without a cross-section, and why."""

    period: int
    reason: str


@dataclass(frozen=True, eq=False)
class CharacteristicPremia:
    """Premia of characteristics; P counts the constant, which comes first.

    Parameters
    ----------
    constant : bool
        Whether there is a constant.
    slopes : ndarray, shape (S, P)
        Premia of each period that has a cross-section.
    periods : ndarray of int, shape (S,)
        Which periods these are.
    counts : ndarray of int, shape (S,)
        Assets in each.
    average_r2 : float or NotApplicable
        Mean R² of the cross-sections.
    skipped : tuple of SkippedPeriod
        Periods without a cross-section.
    incomplete : int
        Rows left out because the return, a characteristic or the weight is missing.
    lags : int
        Lags of the Newey-West errors.
    """

    constant: bool
    slopes: Floats
    periods: Codes
    counts: Codes
    average_r2: float | NotApplicable
    skipped: tuple[SkippedPeriod, ...]
    incomplete: int
    lags: int

    @property
    def premia(self) -> Floats:
        """Mean slopes, the constant's first, shape (P,)."""
        return np.asarray(self.slopes.mean(axis=0))

    def covariance(self, kind: PremiumError) -> Floats | NotApplicable:
        """Covariance of the premia, shape (P, P); Fama-MacBeth and Newey-West errors exist."""
        if kind is PremiumError.FAMA_MACBETH:
            return fama_macbeth_covariance(self.slopes)
        if kind is PremiumError.NEWEY_WEST:
            return newey_west_covariance(self.slopes, self.lags)
        return NotApplicable(f"{kind} errors", "characteristics are observed, not estimated like betas")

    def standard_errors(self, kind: PremiumError) -> Floats | NotApplicable:
        """Standard errors of the premia, shape (P,)."""
        covariance = self.covariance(kind)
        return covariance if isinstance(covariance, NotApplicable) else np.sqrt(np.diag(covariance))

    def tests(
        self, kind: PremiumError, reference: Reference = Reference.NORMAL
    ) -> tuple[TestStatistic | NotApplicable, ...]:
        """Tests that each premium is zero, P of them."""
        covariance = self.covariance(kind)
        if isinstance(covariance, NotApplicable):
            return (covariance,) * len(self.premia)
        return premium_tests(
            self.premia, covariance, kind, len(self.slopes), reference, "the premium is zero"
        )


def characteristic_premia(
    returns: Floats,
    characteristics: Floats,
    period: Codes,
    asset: Codes,
    *,
    constant: bool = True,
    weights: Floats | None = None,
    lags: int | LagRule = LagRule.RULE_OF_THUMB,
    names: Sequence[str] = (),
) -> CharacteristicPremia:
    """Regress returns on characteristics in each period and average the slopes.

    Parameters
    ----------
    returns : ndarray, shape (M,)
        One row an asset and period; decimal per period. NaN marks a missing return.
    characteristics : ndarray, shape (M, C)
        What was known of the asset before the period; NaN marks a missing value.
    period, asset : ndarray of int, shape (M,)
        Codes of the period, in order of time, and of the asset. The panel need not be balanced.
    constant : bool
        Whether each cross-section has a constant.
    weights : ndarray, shape (M,), optional
        Positive weights of a WLS cross-section.
    lags : int or LagRule
        Newey-West lags, or the rule that chooses them.
    names : sequence of str
        Names of the characteristics, for messages.

    Returns
    -------
    CharacteristicPremia

    Raises
    ------
    EstimationError
        If a characteristic is the same for all assets in every period (a common factor), an asset comes twice in a
        period, a weight is not positive, or fewer than two periods have a cross-section.

    References
    ----------
    Fama and MacBeth (1973), Journal of Political Economy 81, 607-636.
    """
    y, x = np.asarray(returns, dtype=float), np.asarray(characteristics, dtype=float)
    _refuse_shapes(y, x, period, asset, weights)
    _refuse_repeats(period, asset)
    whole = np.isfinite(y) & np.isfinite(x).all(axis=1)
    if weights is not None:
        whole &= np.isfinite(weights)
        if (weights[whole] <= 0.0).any():
            raise EstimationError("A cross-sectional weight is zero or negative", allowed="positive weights")
    order = np.flatnonzero(whole)[np.lexsort((asset[whole], period[whole]))]
    y, x, when, who = y[order], x[order], period[order], asset[order]
    kept_weights = None if weights is None else np.asarray(weights, dtype=float)[order]
    _refuse_common_factors(x, when, constant, names)
    usable, skipped = _sort_periods(x, when, constant, kept_weights, names)
    missing = sorted(set(np.unique(period)) - set(np.unique(when)))
    skipped += [SkippedPeriod(int(t), "no asset has all its values") for t in missing]
    if len(usable) < 2:
        why = f"; the first: {skipped[0].reason}" if skipped else ""
        raise EstimationError(
            f"{len(usable)} of {len(np.unique(period))} periods have a cross-section{why}",
            allowed="two or more",
            remedy="use fewer characteristics, more assets, or a longer sample",
        )
    kept = np.isin(when, usable)
    slopes, r2 = _through_linearmodels(
        y[kept],
        x[kept],
        when[kept],
        who[kept],
        constant,
        None if kept_weights is None else kept_weights[kept],
    )
    counts = np.unique(when[kept], return_counts=True)[1]
    return CharacteristicPremia(
        constant=constant,
        slopes=slopes,
        periods=usable,
        counts=counts.astype(np.int64),
        average_r2=r2,
        skipped=tuple(sorted(skipped, key=lambda s: s.period)),
        incomplete=int((~whole).sum()),
        lags=premium_lags(slopes, lags, constant),
    )


def _through_linearmodels(
    y: Floats, x: Floats, when: Codes, who: Codes, constant: bool, weights: Floats | None
) -> tuple[Floats, float | NotApplicable]:
    import pandas as pd
    from linearmodels.panel import FamaMacBeth

    # One scale for all columns, so that a company's value beside its yield is not taken for collinearity.
    scale = np.sqrt((x**2).mean(axis=0))
    columns = np.column_stack([np.ones((len(y), int(constant))), x / scale])
    index = pd.MultiIndex.from_arrays([who, when])
    frame = pd.DataFrame(columns, index=index, columns=[f"x{i}" for i in range(columns.shape[1])])
    fit = FamaMacBeth(
        pd.DataFrame({"y": y}, index=index),
        frame,
        weights=None if weights is None else pd.DataFrame({"w": weights}, index=index),
        check_rank=False,  # every period has been checked on its own
    ).fit()
    slopes = np.array(fit.all_params.sort_index(), dtype=float)
    slopes[:, int(constant) :] /= scale
    r2 = float(fit.avg_rsquared)
    if np.isnan(r2):
        return slopes, NotApplicable("Average R²", "returns do not differ within any period")
    return slopes, r2


def _refuse_shapes(y: Floats, x: Floats, period: Codes, asset: Codes, weights: Floats | None) -> None:
    lengths = {len(y), len(x), len(period), len(asset), len(y) if weights is None else len(weights)}
    if y.ndim != 1 or x.ndim != 2 or len(lengths) != 1:
        raise EstimationError(
            f"Returns of shape {y.shape} and characteristics of shape {x.shape} came",
            allowed="one row an asset and period in every array",
        )
    if x.shape[1] == 0 or not len(y):
        raise EstimationError("No characteristic came", remedy="name at least one, with its values")
    if np.isinf(y).any() or np.isinf(x).any():
        raise EstimationError("A return or characteristic is infinite", allowed="finite numbers and gaps")


def _refuse_repeats(period: Codes, asset: Codes) -> None:
    order = np.lexsort((asset, period))
    same = (np.diff(period[order]) == 0) & (np.diff(asset[order]) == 0)
    if same.any():
        row = order[int(np.flatnonzero(same)[0])]
        raise EstimationError(
            f"Asset {asset[row]} comes more than once in period {period[row]}",
            allowed="one row an asset and period",
            remedy="drop the repeated rows",
        )


def _label(names: Sequence[str], column: int) -> str:
    return f"'{names[column]}'" if column < len(names) else f"characteristic {column + 1}"


def _refuse_common_factors(x: Floats, when: Codes, constant: bool, names: Sequence[str]) -> None:
    starts = np.flatnonzero(np.diff(when, prepend=when[0] - 1)) if len(when) else np.array([0])
    if not len(when) or len(starts) == len(when):
        return  # one asset a period: that is a matter of too few assets, not of common factors
    spread = np.maximum.reduceat(x, starts) - np.minimum.reduceat(x, starts)
    size = np.maximum.reduceat(np.abs(x), starts)
    still = (spread <= _STILL * size).all(axis=0)
    moves = np.ptp(x, axis=0) > _STILL * np.abs(x).max(axis=0)
    if not (still & (moves | constant)).any():
        return
    column = int(np.flatnonzero(still & (moves | constant))[0])
    label = _label(names, column)
    if not moves[column]:
        raise EstimationError(
            f"{label} has one value for all assets and periods: it repeats the constant",
            remedy="leave it out",
        )
    raise EstimationError(
        f"{label} has the same value for every asset in each period: it is a common factor, not a characteristic",
        allowed="characteristics, which differ between assets in the same period",
        remedy=f"give {label} as a factor and ask for prices of risk, which estimate each asset's beta on it first",
    )


def _sort_periods(
    x: Floats, when: Codes, constant: bool, weights: Floats | None, names: Sequence[str]
) -> tuple[Codes, list[SkippedPeriod]]:
    """Periods whose cross-section can be estimated, and the others with the reason."""
    usable: list[int] = []
    skipped: list[SkippedPeriod] = []
    periods, starts = np.unique(when, return_index=True)
    whole = np.column_stack([np.ones((len(x), int(constant))), x])
    if weights is not None:
        whole *= np.sqrt(weights)[:, None]
    width = whole.shape[1]
    for t, design in zip(periods, np.split(whole, starts[1:])[: len(periods)], strict=True):
        if len(design) < width:
            few = "1 asset" if len(design) == 1 else f"{len(design)} assets"
            skipped.append(SkippedPeriod(int(t), f"{few} for {width} premia"))
            continue
        scale = np.linalg.norm(design, axis=0)
        r = np.linalg.qr(design / np.where(scale > 0.0, scale, 1.0), mode="r")
        bad = np.flatnonzero((np.abs(np.diag(r)) < _COLLINEAR) | (scale == 0.0))
        if len(bad):
            label = _label(names, max(int(bad[0]) - int(constant), 0))
            skipped.append(
                SkippedPeriod(int(t), f"{label} does not vary, or repeats the other characteristics")
            )
        else:
            usable.append(int(t))
    return np.array(usable, dtype=np.int64), skipped
