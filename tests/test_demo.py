"""The invented desk: the same on every run, and with the traits it promises."""

from __future__ import annotations

import numpy as np
import pandas as pd

from soffit.demo import STRATEGIES, demo_frames, demo_study, true_alphas
from soffit.settings import CeilingForm


def test_the_same_on_every_run() -> None:
    first, second = demo_frames(), demo_frames()
    for a, b in zip(first, second, strict=True):
        pd.testing.assert_frame_equal(a, b)
    assert first[0].shape == (240, 15)
    assert first[1].shape == (240, 4)


def test_estimates_lie_around_the_truth() -> None:
    table = demo_study().regression().table
    honest = [s.name for s in STRATEGIES if len(s.smoothing) == 1]
    z = (table["alpha"] - true_alphas())[honest] / table["alpha_error"][honest]
    assert np.abs(z).max() < 3.0


def test_one_impossible_one_smoothed_one_short() -> None:
    study = demo_study()
    needed = study.ceiling_map().needed(CeilingForm.ALONE)
    assert needed.idxmax() == "Larch Steady Income"
    assert needed.max() > 1.8
    assert study.ceiling(1.5).status["Larch Steady Income"] == "outside"
    residuals = study.regression().residuals
    lag_one = residuals.apply(lambda column: column.dropna().autocorr(1))
    assert lag_one.idxmax() == "Juniper Private Credit"
    assert lag_one.max() > 0.3
    assert study.regression().table["periods"]["Rowan Event"] == 84
