"""Fixtures that every room's tests share: real data, loaded from packages and never committed."""

from __future__ import annotations

import os
from pathlib import Path

import pandas as pd
import pytest


@pytest.fixture(scope="session")
def french() -> pd.DataFrame:
    """Monthly US returns that ship with linearmodels; decimals, indexed by month."""
    from linearmodels.datasets import french as source

    return source.load().set_index("dates")


@pytest.fixture(scope="session")
def checks_data() -> Path:
    """Folder of the data files behind some published checks; they are not part of the project."""
    beside = Path(__file__).resolve().parents[2] / "shared" / "checks" / "data"
    folder = Path(os.environ.get("SOFFIT_CHECKS", beside))
    if not folder.is_dir():
        pytest.skip(
            f"the data of the published checks are not here ({folder}); name their folder in SOFFIT_CHECKS"
        )
    return folder
