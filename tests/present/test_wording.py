"""The only number formats, and the sentences made with them."""

from __future__ import annotations

from dataclasses import replace
from datetime import date

import numpy as np
import pandas as pd
import pytest

from soffit.estimate.statistic import NotApplicable
from soffit.present.spec import NumberForm
from soffit.present.wording import join_names, plural, show, show_range
from soffit.present.wording.ceiling import ceiling_finding
from soffit.settings import CeilingForm
from soffit.study import CeilingFacts


@pytest.mark.parametrize(
    ("value", "form", "text"),
    [
        (0.02346, NumberForm.PERCENT, "2.35%"),
        (-0.02346, NumberForm.PERCENT, "−2.35%"),
        (-0.00001, NumberForm.PERCENT, "0.00%"),
        (0.684, NumberForm.SHARE, "68%"),
        (0.6165, NumberForm.RATIO, "0.62"),
        (2.6717, NumberForm.STATISTIC, "2.672"),
        (0.0015758, NumberForm.PVALUE, "0.0016"),
        (0.42212, NumberForm.PVALUE, "0.422"),
        (1e-9, NumberForm.PVALUE, "<0.0001"),
        (1.0, NumberForm.PVALUE, "1.000"),
        (12345, NumberForm.COUNT, "12,345"),
        (0.00125, NumberForm.BASIS_POINTS, "12.5 bp"),
        (1_250_000.4, NumberForm.MONEY, "1,250,000"),
        (pd.Timestamp("2017-03-31"), NumberForm.DATE, "2017-03"),
        (np.datetime64("2017-03-31"), NumberForm.DATE, "2017-03"),
        (date(2017, 3, 31), NumberForm.DATE, "2017-03"),
        (float("nan"), NumberForm.RATIO, "–"),
        (np.float64("nan"), NumberForm.PERCENT, "–"),
        (None, NumberForm.RATIO, "–"),
        (pd.NaT, NumberForm.DATE, "–"),
        (float("inf"), NumberForm.RATIO, "no limit"),
        (True, NumberForm.TEXT, "yes"),
        ("outside", NumberForm.RATIO, "outside"),
        (np.int64(7), NumberForm.COUNT, "7"),
    ],
)
def test_show(value: object, form: NumberForm, text: str) -> None:
    assert show(value, form) == text


def test_lists_counts_and_ranges() -> None:
    assert join_names(["A"]) == "A"
    assert join_names(["A", "B"]) == "A and B"
    assert join_names(["A", "B", "C"]) == "A, B and C"
    assert join_names(list("ABCDEF")) == "A, B, C, D and 2 more"
    assert join_names([]) == ""
    assert [plural(n, "alpha") for n in (0, 1, 2, 1200)] == [
        "no alphas",
        "1 alpha",
        "2 alphas",
        "1,200 alphas",
    ]
    assert show_range(-0.01, 0.02, NumberForm.PERCENT) == "−1.00% to 2.00%"


FACTS = CeilingFacts(
    ceiling=0.8,
    form=CeilingForm.ON_FACTORS,
    count=14,
    exceeding=("Larch", "Fir", "Elm"),
    outside=1,
    undefined=False,
    pvalue=0.0421,
    fits_together=False,
    lowest=0.8123,
    rejects_zero=True,
    size=0.05,
    factors=0.5275,
)


def test_ceiling_sentence_says_how_many_which_and_how_surely() -> None:
    assert ceiling_finding(FACTS).text == (
        "At a Sharpe ceiling of 0.80 a year, 3 of 14 alphas do not fit on top of the factors (Larch, Fir and Elm), "
        "1 of them by more than sampling error. Jointly, p = 0.042 for a best Sharpe ratio of 0.80 or less; the "
        "lowest ceiling not rejected at 5% is 0.81, and the factors already earn 0.53."
    )


@pytest.mark.parametrize(
    ("change", "phrase"),
    [
        (
            {"exceeding": ("Larch",), "outside": 1},
            "1 of 14 alphas does not fit on top of the factors (Larch), by more",
        ),
        ({"exceeding": ("Larch",), "outside": 0}, "(Larch), though within sampling error."),
        ({"outside": 0}, "all within sampling error."),
        ({"outside": 3}, "all by more than sampling error."),
        ({"exceeding": (), "outside": 0}, "year all 14 alphas fit on top of the factors."),
        ({"exceeding": (), "outside": 0, "count": 1}, "year the one alpha fits on top of the factors."),
        (
            {"undefined": True},
            "is below what the factors alone earned in this sample, 0.53: no alpha can be judged",
        ),
        ({"pvalue": 1e-9}, "Jointly, p < 0.0001 for"),
        ({"rejects_zero": False}, "no ceiling above the factors' own is rejected at 5%"),
        ({"form": CeilingForm.ALONE}, "do not fit hedged on their own"),
        ({"form": CeilingForm.TOGETHER}, "As estimated, all alphas together do not fit."),
        (
            {
                "pvalue": NotApplicable("p", "too many assets"),
                "lowest": NotApplicable("l", "too many assets"),
            },
            "There is no joint test: too many assets; the factors already earn 0.53.",
        ),
    ],
)
def test_ceiling_sentence_at_its_edges(change: dict[str, object], phrase: str) -> None:
    assert phrase in ceiling_finding(replace(FACTS, **change)).text  # type: ignore[arg-type]
