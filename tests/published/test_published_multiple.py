"""Multiple testing against published examples and R.

Evidence grades: A, printed number or other software, reproduced here by separate code; B, printed number recalled
from memory and reproduced; C, regenerated from the formula.
"""

from __future__ import annotations

import numpy as np
import pytest

from soffit.judge.multiplicity import Adjustment, Hurdle, many_tests, single_test_level, t_hurdle

# Benjamini and Hochberg (1995), JRSS B 57, section 4.1. Counts of rejections: evidence B; adjusted: R p.adjust.
BH1995 = [
    0.0001,
    0.0004,
    0.0019,
    0.0095,
    0.0201,
    0.0278,
    0.0298,
    0.0344,
    0.0459,
    0.324,
    0.4262,
    0.5719,
    0.6528,
]
BH1995 += [0.759, 1.0]
# R 4.2.2 stats::p.adjust on these twelve: evidence A.
TWELVE = [0.0007, 0.0031, 0.004, 0.0098, 0.011, 0.0245, 0.031, 0.042, 0.048, 0.09, 0.33, 0.71]

EXPECTED: dict[str, dict[Adjustment, tuple[int, list[float] | None]]] = {
    "BH1995": {
        Adjustment.BONFERRONI: (
            3,
            [0.0015, 0.006, 0.0285, 0.1425, 0.3015, 0.417, 0.447, 0.516, 0.6885, 1, 1, 1, 1, 1, 1],
        ),
        Adjustment.HOLM: (
            3,
            [0.0015, 0.0056, 0.0247, 0.114, 0.2211, 0.278, 0.278, 0.278, 0.3213, 1, 1, 1, 1, 1, 1],
        ),
        Adjustment.HOCHBERG: (
            3,
            [0.0015, 0.0056, 0.0247, 0.114, 0.2211, 0.2682, 0.2682, 0.2752, 0.3213, 1, 1, 1, 1, 1, 1],
        ),
        Adjustment.HOMMEL: (
            3,
            [0.0015, 0.0056, 0.0247, 0.095, 0.1608, 0.1946, 0.2086, 0.2408, 0.3213, 1, 1, 1, 1, 1, 1],
        ),
        Adjustment.BENJAMINI_HOCHBERG: (
            4,
            [
                0.0015,
                0.003,
                0.0095,
                0.035625,
                0.0603,
                0.063857143,
                0.063857143,
                0.0645,
                0.0765,
                0.486,
                0.58118182,
                0.714875,
                0.75323077,
                0.81321429,
                1,
            ],
        ),
        Adjustment.BENJAMINI_YEKUTIELI: (
            3,
            [
                0.0049773435,
                0.009954687,
                0.031523175,
                0.11821191,
                0.20008921,
                0.21189262,
                0.21189262,
                0.21402577,
                0.25384452,
                1,
                1,
                1,
                1,
                1,
                1,
            ],
        ),
    },
    "TWELVE": {
        Adjustment.BONFERRONI: (3, None),
        Adjustment.HOLM: (
            3,
            [0.0084, 0.0341, 0.04, 0.0882, 0.0882, 0.1715, 0.186, 0.21, 0.21, 0.27, 0.66, 0.71],
        ),
        Adjustment.HOCHBERG: (
            3,
            [0.0084, 0.0341, 0.04, 0.088, 0.088, 0.1715, 0.186, 0.192, 0.192, 0.27, 0.66, 0.71],
        ),
        Adjustment.HOMMEL: (
            3,
            [0.0084, 0.031, 0.0366666666667, 0.0768, 0.077, 0.12, 0.124, 0.168, 0.18, 0.27, 0.66, 0.71],
        ),
        Adjustment.BENJAMINI_HOCHBERG: (
            6,
            [0.0084, 0.016, 0.016, 0.0264, 0.0264, 0.049, 0.0531428571429, 0.063, 0.064, 0.108, 0.36, 0.71],
        ),
        Adjustment.BENJAMINI_YEKUTIELI: (
            3,
            [
                0.026066969697,
                0.0496513708514,
                0.0496513708514,
                0.0819247619048,
                0.0819247619048,
                0.152057323232,
                0.164913481756,
                0.195502272727,
                0.198605483405,
                0.335146753247,
                1,
                1,
            ],
        ),
    },
}


@pytest.mark.parametrize("example", ["BH1995", "TWELVE"])
@pytest.mark.parametrize("method", list(Adjustment))
def test_adjusted_pvalues(example: str, method: Adjustment) -> None:
    pvalues, rtol = (BH1995, 1e-7) if example == "BH1995" else (TWELVE, 1e-10)
    found = many_tests(pvalues, level=0.95, methods=[method])
    rejections, adjusted = EXPECTED[example][method]
    assert int(found.rejected(method).sum()) == rejections
    if adjusted is not None:
        np.testing.assert_allclose(found.adjusted[method], adjusted, rtol=rtol)


def test_hurdles_of_many_tests() -> None:
    # Arithmetic; common practice: 20 tests at 5% ask for |t| of 3.02, 300 for 3.76 (normal). Evidence C.
    numbers = [1, 10, 20, 100, 300]
    found = [t_hurdle(number, 0.95) for number in numbers]
    np.testing.assert_allclose(found, [1.96, 2.807, 3.023, 3.481, 3.765], atol=0.0006)
    each = [single_test_level(number, 0.95, Hurdle.SIDAK) for number in numbers]
    np.testing.assert_allclose(each, [0.05, 0.005116197, 0.002561379, 0.000512801, 0.000170962], rtol=1e-5)
