"""Truncated normal moments against R."""

from __future__ import annotations

import numpy as np

from soffit.judge.shrinkage import bounded_alphas
from soffit.judge.truncated import TruncatedNormal


def test_symmetric_case_equals_r() -> None:
    # R truncnorm 1.0-8: etruncnorm and vtruncnorm on [0, 1] with mean 0.5 and sd 0.25; ours is centred on zero.
    law = TruncatedNormal(np.array([0.0]), np.array([0.25]), np.array([0.5]))
    np.testing.assert_allclose(law.mean + 0.5, 0.5, rtol=1e-9)
    np.testing.assert_allclose(law.spread, 0.21990641525856, rtol=1e-9)


def test_lopsided_case_equals_r() -> None:
    # R truncnorm 1.0-8: the standard normal on [-1, 2]; moved by -0.5 it lies on [-1.5, 1.5] around -0.5.
    posterior = bounded_alphas(np.array([-0.5]), np.array([1.0]), np.array([1.5]))
    np.testing.assert_allclose(posterior.mean + 0.5, 0.22963717909133, rtol=1e-9)
    np.testing.assert_allclose(posterior.spread, 0.72094558685905, rtol=1e-9)
