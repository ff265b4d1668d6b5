"""One server and one browser for all browser tests."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).parent))

from lab import Lab, Sheet, chromium, notebook

STUDY = """
import numpy as np, pandas as pd
from soffit.panels import CeilingPanel
from soffit.study import Study
rng = np.random.default_rng(11)
dates = pd.date_range("2005-01-31", periods=180, freq="ME")
factors = pd.DataFrame(rng.normal(0.002, 0.03, (180, 2)), dates, ["Market", "Carry"])
sigma = rng.uniform(0.01, 0.05, 25)
noise = sigma * rng.normal(rng.normal(0.0, 0.15, 25), 1.0, (180, 25))
returns = factors.to_numpy() @ rng.normal(0.7, 0.3, (2, 25)) + noise
study = Study.open(pd.DataFrame(returns, dates, [f"Fund {i:02d}" for i in range(25)]), factors, progress=False)
"""

FRESH = """
panel.session.select("")
panel.session.propose({"ceiling": 1.0, "ceiling_form": "each asset on top of the factors"})
panel.session.problem = ""
panel._views.index = 0
panel.computed = panel.drawn = 1
"""


@pytest.fixture(scope="session")
def lab() -> Iterator[Lab]:
    if chromium() is None:
        pytest.skip("there is no Chromium; name one in SOFFIT_CHROMIUM")
    with Lab() as running:
        yield running


def _opened(lab: Lab) -> Sheet:
    page = lab.open(notebook(STUDY, "panel = CeilingPanel(study)\npanel"))
    page.run()
    page.page.wait_for_selector(".soffit-moving path[d]", state="attached")
    return page


@pytest.fixture(scope="session")
def opened(lab: Lab) -> Iterator[Sheet]:
    """A notebook that shows the ceiling panel, open for all tests."""
    page = _opened(lab)
    yield page
    page.page.close()


@pytest.fixture
def sheet(lab: Lab, opened: Sheet) -> Iterator[Sheet]:
    """The open notebook as it was at first; what its console complains of fails the test."""
    assert opened.python(FRESH) == ""
    opened.page.mouse.move(5, 5)
    opened.rest()
    before = len(opened.complaints)
    yield opened
    assert opened.complaints[before:] == []
    assert lab.refused == []


@pytest.fixture
def own(lab: Lab) -> Iterator[Sheet]:
    """A notebook of the test's own, for what changes the page or runs cells again."""
    page = _opened(lab)
    yield page
    assert page.complaints == []
    page.page.close()
