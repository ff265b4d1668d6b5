"""A statistic carries its distribution; what does not exist refuses to be a number."""

from __future__ import annotations

import pytest
from scipy import stats

from soffit.errors import NotApplicableError
from soffit.estimate.statistic import Distribution, Family, Interval, NotApplicable


@pytest.mark.parametrize(
    ("law", "label", "expected"),
    [
        (Distribution(Family.NORMAL), "normal", stats.norm.sf(1.7)),
        (Distribution(Family.STUDENT_T, (9.0,)), "t(9)", stats.t.sf(1.7, 9)),
        (Distribution(Family.F, (4.0, 12.0)), "F(4, 12)", stats.f.sf(1.7, 4, 12)),
        (Distribution(Family.CHI2, (3.0,)), "chi-squared(3)", stats.chi2.sf(1.7, 3)),
        (Distribution(Family.CHI2, (12.3878,)), "chi-squared(12.4)", stats.chi2.sf(1.7, 12.3878)),
    ],
)
def test_tails_and_labels(law: Distribution, label: str, expected: float) -> None:
    assert law.sf(1.7) == pytest.approx(expected, rel=1e-12)
    assert law.label == label
    assert law.sf(law.ppf(0.9)) == pytest.approx(0.1, rel=1e-8)


def test_not_applicable_refuses_with_its_reason() -> None:
    missing = NotApplicable("The GRS test", "too many assets")
    assert missing.applies is False
    with pytest.raises(NotApplicableError, match="The GRS test does not exist here: too many assets"):
        _ = missing.pvalue


def test_interval_membership() -> None:
    assert 0.5 in Interval(0.0, 1.0)
    assert 1.5 not in Interval(0.0, 1.0)
