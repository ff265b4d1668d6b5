"""Noncentral F tails and published powers of F tests.

Evidence grades: A, printed number or other software, reproduced here by separate code; B, printed number recalled
from memory and reproduced.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from soffit.estimate.noncentral import ncf_sf


# mpmath at 40 digits (Poisson mixture of incomplete beta functions); R pf(ncp) agrees to 1e-9. Evidence A.
@pytest.mark.parametrize(
    ("F", "dfn", "dfd", "shift", "expected"),
    [
        (2.5, 5, 100, 5, 0.290496744305078),
        (3, 10, 49, 4, 0.03436982247117861),
        (1.8, 25, 300, 20, 0.4738998055045036),
        (4, 1, 58, 2.5, 0.3435795311778391),
    ],
)
def test_noncentral_f_tails(F: float, dfn: int, dfd: int, shift: float, expected: float) -> None:
    np.testing.assert_allclose(ncf_sf(F, dfn, dfd, shift), expected, rtol=1e-12)


# Cohen (1988) exercise as printed in R's pwr documentation, k = 4, n = 20, f = 0.28; R help page of
# power.anova.test, groups = 4, n = 5, between.var = 1, within.var = 3. Evidence B.
@pytest.mark.parametrize(
    ("dfn", "dfd", "shift", "power"),
    [(3, 76, 80 * 0.28**2, 0.5149793), (3, 16, 3 * 5 * 1 / 3, 0.3535594238)],
)
def test_power_of_an_f_test(dfn: int, dfd: int, shift: float, power: float) -> None:
    found = ncf_sf(float(stats.f.isf(0.05, dfn, dfd)), dfn, dfd, shift)
    np.testing.assert_allclose(found, power, atol=6e-8)
