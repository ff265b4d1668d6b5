"""A clean monthly panel, and how its parts are written down."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest


def clean_frames(periods: int = 60, seed: int = 7) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Five assets (raw) and two factors with a risk-free return, in decimals, at month ends."""
    rng = np.random.default_rng(seed)
    dates = pd.date_range("2001-01-31", periods=periods, freq="ME", name="date")
    factors = pd.DataFrame(
        rng.normal(0.005, 0.04, (periods, 2)).round(6), index=dates, columns=["MktRF", "SMB"]
    )
    factors["RF"] = (0.003 + 0.0005 * np.sin(np.arange(periods) / 9)).round(6)
    noise = rng.normal(0, 0.03, (periods, 5))
    names = ["Alder", "Birch", "Cedar", "Doum", "Elm"]
    assets = pd.DataFrame(
        (factors[["MktRF"]].to_numpy() * np.linspace(0.6, 1.4, 5) + noise).round(6), dates, names
    )
    return assets, factors


@pytest.fixture
def frames() -> tuple[pd.DataFrame, pd.DataFrame]:
    return clean_frames()
