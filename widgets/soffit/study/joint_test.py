"""The joint test with labels: who was in it, over which sample, and the Sharpe ratios it rests on."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import pandas as pd

from soffit.estimate.regression import Regression, regress
from soffit.estimate.statistic import NotApplicable, TestStatistic
from soffit.judge.joint import JointAlphas, joint_alphas
from soffit.settings import Settings
from soffit.study.factor_regression import FactorRegression, error_choice
from soffit.study.sample import Block

__all__ = ["JointTest"]


@dataclass(frozen=True, eq=False)
class JointTest:
    """Whether the alphas are jointly zero.

    Parameters
    ----------
    regression : FactorRegression
        The per-asset regressions of the same study.
    block : Block
        Rows and assets of the joint test.
    fit : Regression
        Regressions on that block.
    alphas : JointAlphas
        Statistic and Sharpe ratios, per period.
    """

    regression: FactorRegression
    block: Block
    fit: Regression
    alphas: JointAlphas

    @classmethod
    def of(cls, regression: FactorRegression, settings: Settings) -> JointTest:
        """Test the assets of a regression on their joint block."""
        sample = regression.sample
        block = sample.joint_block
        if len(regression.pieces) == 1:
            fit = regression.pieces[0][1]
        else:
            fit = regress(
                block.returns, block.factors, choice=error_choice(settings), names=sample.factor_names
            )
        return cls(regression, block, fit, joint_alphas(fit))

    @property
    def grs(self) -> TestStatistic | NotApplicable:
        """The GRS test."""
        return self.alphas.grs

    @property
    def left_out(self) -> tuple[str, ...]:
        """Assets that the joint test leaves out because their histories are shorter."""
        return self.regression.sample.left_out(self.block)

    @property
    def _root(self) -> float:
        return float(np.sqrt(self.regression.periods_per_year))

    @cached_property
    def factors_sharpe(self) -> float:
        """Sharpe ratio of the factors' best combination, annual, in sample."""
        return float(np.sqrt(self.alphas.theta_f2)) * self._root

    @cached_property
    def combined_sharpe(self) -> float | NotApplicable:
        """Sharpe ratio of the best portfolio of factors and assets, annual, in sample."""
        star = self.alphas.theta_star2
        return star if isinstance(star, NotApplicable) else float(np.sqrt(star)) * self._root

    @cached_property
    def single_sharpe(self) -> pd.Series[float]:
        """Sharpe ratio of each factor alone, annual, standard deviations with divisor T."""
        moments = self.fit.factors
        values = moments.mean / np.sqrt(np.diag(moments.covariance)) * self._root
        return pd.Series(values, index=list(self.regression.sample.factor_names), name="sharpe")
