"""Power of the joint test: would this sample have shown alphas worth having.

If the best combination of factors and assets has Sharpe ratio S, the GRS statistic is noncentral F with
``λ = T (S² − θf²)/(1 + θf²)``, conditional on the factors' sample moments. All decimal per period.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
from scipy import special

from soffit.errors import SettingError
from soffit.estimate.noncentral import ncf_lambda_at, ncf_sf
from soffit.estimate.statistic import NotApplicable
from soffit.judge.ceiling import bound_factor, largest_sharpe
from soffit.settings import CeilingForm

__all__ = ["GRSPower"]

Floats = npt.NDArray[np.float64]

_LONGEST = 10_000_000  # periods: no sample is longer, and a search that gets there has no answer


@dataclass(frozen=True)
class GRSPower:
    """Power of the GRS test for N assets, K factors and T periods.

    Parameters
    ----------
    count, width, periods : int
        N, K and T.
    theta_f2 : float
        Squared Sharpe ratio of the factors' best combination, per period.
    size : float
        Significance level of the test.

    Raises
    ------
    SettingError
        If the size is not between 0 and 1.

    References
    ----------
    Gibbons, Ross and Shanken (1989), Econometrica 57, section 4.
    """

    count: int
    width: int
    periods: int
    theta_f2: float
    size: float = 0.05

    def __post_init__(self) -> None:
        """Refuse a size out of range."""
        if not 0.0 < self.size < 1.0:
            raise SettingError(f"The size of the test is {self.size!r}", allowed="a number between 0 and 1")

    @property
    def df(self) -> tuple[int, int]:
        """Degrees of freedom of the test, N and T − N − K."""
        return self.count, self.periods - self.count - self.width

    @cached_property
    def critical(self) -> float | NotApplicable:
        """GRS statistic above which the test rejects."""
        if self.df[1] < 1:
            return self._absent("The critical value of the GRS test")
        return float(special.fdtri(*self.df, 1.0 - self.size))

    def noncentrality(self, sharpe: npt.ArrayLike) -> Floats:
        """``λ = T max(S² − θf², 0)/(1 + θf²)`` for one Sharpe ratio per period or many."""
        s = np.asarray(sharpe, dtype=np.float64)
        if s.size and not (np.isfinite(s).all() and float(s.min()) >= 0.0):
            raise SettingError(
                "A Sharpe ratio to test power against is negative or not finite", allowed="zero or above"
            )
        return np.asarray(self.periods * np.maximum(s**2 - self.theta_f2, 0.0) / (1.0 + self.theta_f2))

    def at(self, sharpe: npt.ArrayLike) -> Floats | NotApplicable:
        """Power against a best Sharpe ratio.

        Parameters
        ----------
        sharpe : array_like
            Sharpe ratio of the best combination of factors and assets, per period; one or many.

        Returns
        -------
        ndarray or NotApplicable
            Probability of a rejection. At or below θf no alpha is needed to reach the ratio, and it is the size.

        Raises
        ------
        SettingError
            If a ratio is negative or not finite.
        """
        shift = self.noncentrality(sharpe)
        if isinstance(self.critical, NotApplicable):
            return self._absent("The power of the GRS test")
        return ncf_sf(self.critical, *self.df, shift)

    def detectable(self, power: float = 0.80) -> float | NotApplicable:
        """Smallest best Sharpe ratio per period that the test finds with a given probability.

        Parameters
        ----------
        power : float
            Probability of a rejection, above the size and below 1.

        Raises
        ------
        SettingError
            If the power is out of range.
        """
        self._refuse_bad_power(power)
        if isinstance(self.critical, NotApplicable):
            return self._absent("The smallest detectable Sharpe ratio")
        shift = ncf_lambda_at(self.critical, *self.df, power)
        return largest_sharpe(self.theta_f2, shift, self.periods)

    def periods_needed(self, sharpe: float, power: float = 0.80) -> int | NotApplicable:
        """Fewest periods at which the test reaches a power against a best Sharpe ratio.

        Parameters
        ----------
        sharpe : float
            Sharpe ratio of the best combination, per period.
        power : float
            Probability of a rejection, above the size and below 1.

        Returns
        -------
        int or NotApplicable
            With the same N, K and θf. Not applicable at or below θf, where no sample is long enough.

        Raises
        ------
        SettingError
            If the ratio or the power is out of range.
        """
        self._refuse_bad_power(power)
        name = "The sample length needed"
        room = float(bound_factor(sharpe, np.sqrt(self.theta_f2), CeilingForm.ON_FACTORS))
        if not room > 0.0:
            return NotApplicable(
                name, "a best Sharpe ratio that the factors reach by themselves needs no alpha"
            )
        low = self.count + self.width  # no degrees of freedom, hence no power
        high = low + 1
        while self._power_with(high, sharpe) < power:
            low, high = high, 2 * high
            if high > _LONGEST:
                return NotApplicable(name, f"it is above {_LONGEST:,} periods")
        while high - low > 1:
            middle = (low + high) // 2
            if self._power_with(middle, sharpe) < power:
                low = middle
            else:
                high = middle
        return high

    def _power_with(self, periods: int, sharpe: float) -> float:
        other = GRSPower(self.count, self.width, periods, self.theta_f2, self.size)
        power = other.at(sharpe)
        return 0.0 if isinstance(power, NotApplicable) else float(power)

    def _refuse_bad_power(self, power: float) -> None:
        if not self.size < power < 1.0:
            raise SettingError(
                f"The power is {power!r}", allowed=f"a number between the size, {self.size}, and 1"
            )

    def _absent(self, name: str) -> NotApplicable:
        return NotApplicable(
            name,
            f"{self.count:,} assets leave no degrees of freedom in {self.periods:,} periods with {self.width} "
            f"factors; it needs N < T − K = {self.periods - self.width:,}",
        )
