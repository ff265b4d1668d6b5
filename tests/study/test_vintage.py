"""Two vintages of the factors, and what the change does to the alphas."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from soffit.demo import demo_frames
from soffit.errors import InputError
from soffit.estimate.regression import regress
from soffit.present.wording.intake import vintage_finding
from soffit.study import Study


@pytest.fixture(scope="module")
def frames() -> tuple[pd.DataFrame, pd.DataFrame]:
    returns, factors = demo_frames()
    return returns.drop(columns=["Cash", "Rowan Event"]), factors


def test_revised_factor_moves_the_alphas_as_two_regressions_say(
    frames: tuple[pd.DataFrame, pd.DataFrame],
) -> None:
    returns, factors = frames
    study = Study.open(returns, factors, excess=True)
    earlier = factors.iloc[:200].copy()
    earlier.iloc[50:60, 2] += 0.004
    effect = study.vintage(earlier)
    assert len(effect.comparison.changes) == 10
    assert set(effect.comparison.changes["series"]) == {"Carry"}
    old = regress(returns.to_numpy()[:200], earlier.to_numpy())
    new = regress(returns.to_numpy()[:200], factors.to_numpy()[:200])
    np.testing.assert_allclose(effect.table["alpha_old"], old.alpha * 12, rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(effect.table["change"], (new.alpha - old.alpha) * 12, rtol=1e-7, atol=1e-12)
    assert (effect.table["periods"] == 200).all()
    text = vintage_finding(effect).text
    assert text.startswith("10 values of 1 factor changed")
    assert str(effect.table["change"].abs().idxmax()) in text


def test_same_vintage_changes_nothing(frames: tuple[pd.DataFrame, pd.DataFrame]) -> None:
    returns, factors = frames
    effect = Study.open(returns, factors, excess=True).vintage(factors)
    assert (effect.table["change"] == 0).all()
    assert "agree in every value" in vintage_finding(effect).text


def test_missing_factor_is_named(frames: tuple[pd.DataFrame, pd.DataFrame]) -> None:
    returns, factors = frames
    with pytest.raises(InputError, match="no factor 'Carry'.*'Trend'"):
        Study.open(returns, factors, excess=True).vintage(factors.drop(columns="Carry"))
