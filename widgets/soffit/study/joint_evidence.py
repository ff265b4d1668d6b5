"""What stands beside the joint test, with labels and annual units: its power, and what it takes for granted."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
import pandas as pd
from statsmodels.stats.multitest import multipletests

from soffit.estimate.diagnostics import AssetTests, ResidualChecks, residual_checks
from soffit.estimate.statistic import NotApplicable, TestStatistic
from soffit.estimate.steps import Steps
from soffit.judge.power import GRSPower
from soffit.judge.wald import OverRejection, WaldTests, size_steps
from soffit.settings import Settings
from soffit.study.joint_test import JointTest

__all__ = ["JointPower", "ResidualAssumptions", "robust_sizes"]

Floats = npt.NDArray[np.float64]

_SIMULATED_CELLS = 15_000  # T times N above which simulated sizes would keep a person waiting
_SIMULATED_DRAWS = 300


@dataclass(frozen=True, eq=False)
class ResidualAssumptions:
    """The joint test's assumptions, checked on its own residuals asset by asset.

    Parameters
    ----------
    joint : JointTest
        The joint test.
    checks : ResidualChecks
        The three checks, without labels.
    """

    joint: JointTest
    checks: ResidualChecks

    @classmethod
    def of(cls, joint: JointTest) -> ResidualAssumptions:
        """Check the residuals of a joint test."""
        return cls(joint, residual_checks(joint.fit.residuals, joint.block.factors))

    @property
    def assets(self) -> pd.Index:
        """Names of the assets of the joint test."""
        return self.joint.regression.sample.assets[self.joint.block.positions]

    @property
    def tests(self) -> tuple[AssetTests, AssetTests, AssetTests]:
        """Autocorrelation, heteroskedasticity and normality."""
        return self.checks.autocorrelation, self.checks.heteroskedasticity, self.checks.normality

    @cached_property
    def table(self) -> pd.DataFrame:
        """One row an asset.

        Columns, for each check: its statistic (``ljung_box``, ``breusch_pagan``, ``jarque_bera``), its p-value
        (``ljung_box_p`` …) and that adjusted over the assets by Holm's method (``ljung_box_holm`` …). NaN where the
        check does not exist.
        """
        columns: dict[str, npt.ArrayLike] = {}
        for key, test in zip(("ljung_box", "breusch_pagan", "jarque_bera"), self.tests, strict=True):
            columns[key] = test.statistic
            columns[f"{key}_p"] = test.pvalue
            columns[f"{key}_holm"] = _holm(test)
        return pd.DataFrame(columns, index=self.assets)

    @cached_property
    def summary(self) -> pd.DataFrame:
        """One row a check: assets tested, how many reject alone and how many after Holm's method, at 1 − level."""
        size = 1.0 - self.joint.regression.level
        rows = [
            {
                "assets": int(test.exists.sum()),
                "alone": test.rejections(size),
                "after_holm": int(np.sum(_holm(test)[test.exists] <= size)),
                "null": test.null,
                "reason": test.reason,
            }
            for test in self.tests
        ]
        return pd.DataFrame(rows, index=[test.name for test in self.tests])


def _holm(test: AssetTests) -> Floats:
    adjusted = np.full(len(test.pvalue), np.nan)
    if test.exists.any():
        adjusted[test.exists] = multipletests(test.pvalue[test.exists], method="holm")[1]
    return adjusted


@dataclass(frozen=True, eq=False)
class JointPower:
    """Power of the GRS test; Sharpe ratios are annual.

    Parameters
    ----------
    grs : GRSPower
        The same per period.
    periods_per_year : int
        m.
    against : float
        Best Sharpe ratio that the settings ask about.
    goal : float
        Power at which a sample counts as long enough.
    """

    grs: GRSPower
    periods_per_year: int
    against: float
    goal: float = 0.80

    @classmethod
    def of(cls, joint: JointTest, settings: Settings) -> JointPower:
        """Power of a joint test at the settings' level, against their Sharpe ratio."""
        alphas = joint.alphas
        size = round(1.0 - settings.level, 12)
        grs = GRSPower(alphas.count, alphas.width, alphas.periods, alphas.theta_f2, size)
        return cls(grs, joint.regression.periods_per_year, settings.power_sharpe)

    @property
    def _root(self) -> float:
        return float(np.sqrt(self.periods_per_year))

    def at(self, sharpe: npt.ArrayLike) -> Floats | NotApplicable:
        """Power against one best annual Sharpe ratio or many; see :meth:`GRSPower.at`."""
        return self.grs.at(np.asarray(sharpe, dtype=float) / self._root)

    @cached_property
    def power(self) -> float | NotApplicable:
        """Power against the settings' Sharpe ratio."""
        found = self.at(self.against)
        return found if isinstance(found, NotApplicable) else float(found)

    @cached_property
    def detectable(self) -> float | NotApplicable:
        """Smallest best annual Sharpe ratio that the test finds with the power of the goal."""
        found = self.grs.detectable(self.goal)
        return found if isinstance(found, NotApplicable) else found * self._root

    @cached_property
    def periods_needed(self) -> int | NotApplicable:
        """Fewest periods at which the test has the power of the goal against the settings' Sharpe ratio."""
        return self.grs.periods_needed(self.against / self._root, self.goal)

    @property
    def factors_sharpe(self) -> float:
        """Best annual Sharpe ratio of the factors, at which power is the size."""
        return float(np.sqrt(self.grs.theta_f2)) * self._root


def robust_sizes(
    wald: WaldTests, joint: JointTest, nominal: float, seed: int
) -> Steps[tuple[OverRejection | NotApplicable, OverRejection | NotApplicable]]:
    """Simulated sizes of the robust and the HAC Wald test, in steps.

    Parameters
    ----------
    wald : WaldTests
        The tests.
    joint : JointTest
        The joint test of the same sample.
    nominal : float
        The size they claim.
    seed : int
        Seed of the draws.

    Returns
    -------
    Steps of tuple of OverRejection or NotApplicable
        Not applicable where the tests do not exist or the sample is too large to simulate while a person waits;
        :func:`soffit.judge.wald.simulated_size` has no such limit.
    """
    factors, count = joint.block.factors, joint.alphas.count

    def size(test: TestStatistic | NotApplicable, lags: int) -> Steps[OverRejection | NotApplicable]:
        name = "The simulated size"
        if isinstance(test, NotApplicable):
            return NotApplicable(name, test.reason)
        if count * joint.alphas.periods > _SIMULATED_CELLS:
            return NotApplicable(
                name, f"{count:,} assets over {joint.alphas.periods:,} periods take too long"
            )
        return (
            yield from size_steps(
                factors,
                count,
                lags=lags,
                debiased=wald.debiased,
                nominal=nominal,
                draws=_SIMULATED_DRAWS,
                seed=seed,
            )
        )

    robust = yield from size(wald.robust, 0)
    return robust, (yield from size(wald.hac, wald.lags)) if wald.lags else robust
