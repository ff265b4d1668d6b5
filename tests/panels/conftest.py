"""A study small enough for a test."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import pandas as pd
import pytest

from soffit.panels import CeilingPanel
from soffit.study import Study


def invented(count: int = 12, periods: int = 120) -> Study:
    """Monthly returns with known structure; the first asset's alpha is far above any sane ceiling."""
    rng = np.random.default_rng(7)
    dates = pd.date_range("2005-01-31", periods=periods, freq="ME")
    factors = rng.normal(0.004, 0.03, (periods, 2))
    sigma = rng.uniform(0.01, 0.04, count)
    alpha = np.append(0.9, rng.normal(0.0, 0.12, count - 1)) * sigma
    returns = alpha + factors @ rng.normal(0.7, 0.2, (2, count)) + sigma * rng.normal(size=(periods, count))
    names = ["<b>Alpha & Co</b>", *(f"Fund {i:02d}" for i in range(1, count))]
    return Study.open(pd.DataFrame(returns, dates, names), pd.DataFrame(factors, dates, ["Market", "Carry"]))


@pytest.fixture
def study() -> Study:
    return invented()


@pytest.fixture
def panel(study: Study) -> Iterator[CeilingPanel]:
    made = CeilingPanel(study)
    yield made
    made.close()
