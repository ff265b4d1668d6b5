"""Which alphas the analyst may use under a ceiling, with labels and annual units."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
import pandas as pd

from soffit.estimate.statistic import NotApplicable
from soffit.judge.ceiling import bound_factor
from soffit.judge.shrinkage import (
    BoundedAlphas,
    CeilingPrior,
    ShrunkAlphas,
    bounded_alphas,
    nearest_alphas,
    shrunk_alphas,
)
from soffit.settings import CeilingForm
from soffit.study.joint_test import JointTest

__all__ = ["AlphaUnderCeiling"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class AlphaUnderCeiling:
    """The alphas of the joint test's assets under one ceiling. Alphas are decimals a year, Sharpe ratios annual.

    Parameters
    ----------
    joint : JointTest
        The alphas and their joint test.
    ceiling : float
        S.
    form : CeilingForm
        Which portfolio the hard bound binds.
    """

    joint: JointTest
    ceiling: float
    form: CeilingForm

    @property
    def _m(self) -> int:
        return self.joint.regression.periods_per_year

    @property
    def _root(self) -> float:
        return float(np.sqrt(self._m))

    @property
    def level(self) -> float:
        """Probability of every interval."""
        return self.joint.regression.level

    @property
    def assets(self) -> pd.Index:
        """Names of the assets of the joint test."""
        return self.joint.regression.sample.assets[self.joint.block.positions]

    @cached_property
    def prior(self) -> CeilingPrior:
        """The prior calibrated to a ceiling, per period."""
        return CeilingPrior(self.joint.alphas)

    @cached_property
    def shrunk(self) -> ShrunkAlphas | NotApplicable:
        """Posterior under that prior, per period."""
        return shrunk_alphas(self.joint.fit, self.ceiling / self._root, level=self.level)

    @cached_property
    def bounded(self) -> BoundedAlphas:
        """Posterior under the hard bound, per period."""
        fit = self.joint.fit
        factor = float(bound_factor(self.ceiling / self._root, fit.factors.theta, self.form))
        return bounded_alphas(fit.alpha, fit.alpha_error, factor * fit.sigma, level=self.level)

    @cached_property
    def nearest(self) -> Floats | NotApplicable:
        """Nearest alphas that satisfy the joint ceiling, per period."""
        return nearest_alphas(self.joint.fit, self.joint.alphas, self.ceiling / self._root)

    @cached_property
    def weight(self) -> float | NotApplicable:
        """Share of every estimated alpha that the prior keeps."""
        return self.shrunk if isinstance(self.shrunk, NotApplicable) else self.shrunk.weight

    def weights(self, ceilings: npt.ArrayLike) -> Floats:
        """Share kept at each annual ceiling; NaN where the factors alone break it."""
        return self.prior.weight(np.asarray(ceilings, dtype=float) / self._root)

    def log_bayes_factors(self, ceilings: npt.ArrayLike) -> Floats | NotApplicable:
        """Log Bayes factors for zero alphas at annual ceilings."""
        return self.prior.log_bayes_factor(np.asarray(ceilings, dtype=float) / self._root)

    def probability_of_zero(self, ceilings: npt.ArrayLike) -> Floats | NotApplicable:
        """Posterior probabilities of zero alphas at annual ceilings, from even odds."""
        return self.prior.probability_of_zero(np.asarray(ceilings, dtype=float) / self._root)

    @cached_property
    def best_supported(self) -> float | NotApplicable:
        """Annual ceiling whose prior the data support most against zero alphas."""
        found = self.prior.best_supported
        return found if isinstance(found, NotApplicable) else found * self._root

    @cached_property
    def table(self) -> pd.DataFrame:
        """One row an asset of the joint test.

        Columns: alpha, alpha_low, alpha_high (as estimated); shrunk, shrunk_low, shrunk_high (under the prior);
        bound, bounded, bounded_low, bounded_high (under the hard bound); nearest. NaN where undefined.
        """
        fit, m = self.joint.fit, self._m
        half = fit.fit.half_width(self.level)[:, 0]
        nothing = np.full(fit.count, np.nan)
        bounded = self.bounded
        mean, low, high = (
            (nothing, nothing, nothing)
            if isinstance(self.shrunk, NotApplicable)
            else (self.shrunk.mean, self.shrunk.low, self.shrunk.high)
        )
        columns = {
            "alpha": fit.alpha,
            "alpha_low": fit.alpha - half,
            "alpha_high": fit.alpha + half,
            "shrunk": mean,
            "shrunk_low": low,
            "shrunk_high": high,
            "bound": bounded.bound,
            "bounded": bounded.mean,
            "bounded_low": bounded.low,
            "bounded_high": bounded.high,
            "nearest": nothing if isinstance(self.nearest, NotApplicable) else self.nearest,
        }
        return pd.DataFrame({name: values * m for name, values in columns.items()}, index=self.assets)
