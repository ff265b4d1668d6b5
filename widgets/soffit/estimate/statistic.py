"""What a test statistic, an interval and a missing answer are, everywhere in the package."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum
from typing import Any, Literal

from scipy import stats

from soffit.errors import NotApplicableError

__all__ = ["Distribution", "Family", "Interval", "NotApplicable", "TestStatistic"]


class Family(StrEnum):
    """Families of reference distributions."""

    NORMAL = "normal"
    STUDENT_T = "t"
    F = "F"
    CHI2 = "chi-squared"
    BOOTSTRAP = "bootstrap"


@dataclass(frozen=True)
class Distribution:
    """A central reference distribution with its degrees of freedom; noncentral tails are in `noncentral`.

    Parameters
    ----------
    family : Family
        Which family.
    df : tuple of float
        Degrees of freedom: none for the normal, one for t and chi-squared, two for F.
    """

    family: Family
    df: tuple[float, ...] = ()

    def _law(self) -> tuple[Any, tuple[float, ...]]:
        """The family's functions and its parameters; frozen laws would cost a millisecond each."""
        laws = {
            Family.NORMAL: stats.norm,
            Family.STUDENT_T: stats.t,
            Family.F: stats.f,
            Family.CHI2: stats.chi2,
        }
        return laws[self.family], self.df

    def sf(self, value: float) -> float:
        """Probability of a draw above `value`."""
        law, parameters = self._law()
        return float(law.sf(value, *parameters))

    def two_sided(self, value: float) -> float:
        """Probability of a draw further from zero than `value`, for a symmetric family."""
        return 2.0 * self.sf(abs(value))

    def ppf(self, probability: float) -> float:
        """Quantile."""
        law, parameters = self._law()
        return float(law.ppf(probability, *parameters))

    @property
    def label(self) -> str:
        """How a table prints it: ``F(12, 806)``, ``t(817)``, ``normal``."""
        if not self.df:
            return str(self.family)
        shown = (f"{value:.0f}" if float(value).is_integer() else f"{value:.1f}" for value in self.df)
        return f"{self.family}({', '.join(shown)})"


@dataclass(frozen=True)
class TestStatistic:
    """A test statistic that carries its null, its distribution and its p-value.

    Parameters
    ----------
    name : str
        The trade's name of the test.
    value : float
        The statistic.
    null : str
        The null hypothesis in words.
    distribution : Distribution
        The reference distribution under the null.
    pvalue : float
        Probability under the null of a statistic at least as extreme.
    source : str
        Key of the published source in :mod:`soffit.present.sources`.
    """

    __test__ = False  # not a pytest class

    name: str
    value: float
    null: str
    distribution: Distribution
    pvalue: float
    source: str = ""

    @property
    def applies(self) -> Literal[True]:
        """True: the test exists for this sample."""
        return True


@dataclass(frozen=True)
class NotApplicable:
    """A number that does not exist for this sample, with the reason.

    Parameters
    ----------
    name : str
        What was asked for.
    reason : str
        Why it does not exist, as a sentence for the analyst.
    """

    name: str
    reason: str

    @property
    def applies(self) -> Literal[False]:
        """False: there is no number here."""
        return False

    @property
    def value(self) -> float:
        """Refuse: there is no number.

        Raises
        ------
        NotApplicableError
            Always, with the reason.
        """
        raise NotApplicableError(f"{self.name} does not exist here: {self.reason}")

    @property
    def pvalue(self) -> float:
        """Refuse, as :attr:`value` does."""
        return self.value


@dataclass(frozen=True)
class Interval:
    """A confidence or credible interval.

    Parameters
    ----------
    low, high : float
        The ends, in the unit of the estimate.
    level : float
        Coverage, between 0 and 1.
    """

    low: float
    high: float
    level: float = 0.95

    def __contains__(self, value: float) -> bool:
        return self.low <= value <= self.high
