"""An invented study, and an exhibit with every kind of number under names that mean harm."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
import pandas as pd
import pytest

from soffit.memo import Pack
from soffit.present.spec import (
    Axis,
    Column,
    Exhibit,
    FigureSpec,
    Finding,
    NumberForm,
    Points,
    Role,
    TableSpec,
)
from soffit.study import Study

NASTY = (
    "<script>alert(1)</script>",
    '"><img src=x onerror=alert(1)>',
    '=HYPERLINK("http://example.com","click")',
    "+1+cmd|' /C calc'!A0",
    "-2+3",
    "@SUM(A1:A9)",
    r"\input{secret} 100% & $x_1^2$ #1 ~ {b}",
    "[click](javascript:alert(1)) `code` *b* | cell | www.example.com",
    "#let x = 1; $ sum $ @ref <label> *bold*",
    "left‮right",
    "bell\x07null\x00 line\nbreak",
    "{{ 7 * 7 }} {% raw %}",
    "1. not a list",
    "Ω α β √ é 日本",
)


def invented(periods: int = 96, assets: int = 5) -> tuple[pd.DataFrame, pd.DataFrame]:
    rng = np.random.default_rng(11)
    dates = pd.date_range("2010-01-31", periods=periods, freq="ME", name="date")
    factors = pd.DataFrame(rng.normal(0.004, 0.03, (periods, 2)), dates, ["MktRF", "SMB"])
    betas = rng.uniform(0.3, 1.2, (2, assets))
    noise = rng.normal(0.001, 0.02, (periods, assets))
    names = [f"Fund {letter}" for letter in "ABCDEFGHIJ"[:assets]]
    return pd.DataFrame(factors.to_numpy() @ betas + noise, dates, names), factors


@pytest.fixture(scope="session")
def study_once() -> Study:
    returns, factors = invented()
    return Study.open(returns, factors, units="decimal", excess=True)


@pytest.fixture
def study(study_once: Study) -> Study:
    fresh = Study(study_once.panel, study_once.settings)
    fresh._results = study_once._results
    return fresh


def make_exhibit(names: Sequence[str] = NASTY, key: str = "made") -> Exhibit:
    n = len(names)
    rng = np.random.default_rng(5)
    frame = pd.DataFrame(
        {
            "percent": rng.normal(0, 0.05, n),
            "share": rng.uniform(0, 1, n),
            "ratio": rng.normal(0, 1, n),
            "statistic": rng.normal(0, 3, n),
            "p": rng.uniform(0, 1, n) ** 6,
            "count": rng.integers(0, 90_000, n),
            "bp": rng.normal(0, 0.001, n),
            "money": rng.normal(0, 1e6, n),
            "date": pd.date_range("2001-01-31", periods=n, freq="ME"),
            "text": list(names),
        },
        index=list(names),
    )
    if n > 2:
        frame.loc[frame.index[1], ["percent", "p"]] = np.nan
        frame.loc[frame.index[2], "ratio"] = np.inf
    forms = [
        NumberForm.PERCENT,
        NumberForm.SHARE,
        NumberForm.RATIO,
        NumberForm.STATISTIC,
        NumberForm.PVALUE,
        NumberForm.COUNT,
        NumberForm.BASIS_POINTS,
        NumberForm.MONEY,
        NumberForm.DATE,
        NumberForm.TEXT,
    ]
    columns = tuple(
        Column(str(name), f"{name} {names[0]}", form) for name, form in zip(frame, forms, strict=True)
    )
    roles = tuple([Role.INSIDE, Role.STRADDLES, Role.OUTSIDE][i % 3] for i in range(n))
    x = np.linspace(0, 1, n)
    marks = (Points("p", x, x**2, tuple(names), roles, labelled=tuple(range(min(n, 6)))),)
    figure = FigureSpec(
        f"{key}-figure",
        f"Title {names[0]}",
        Axis("x"),
        Axis("y"),
        marks,
        f"Alt {names[0]}",
        f"Foot {names[0]}",
    )
    plain_table = TableSpec(
        f"{key}-table", f"All of {names[-1]}", columns, frame, footnote=f"Note {names[0]}"
    )
    mixed = TableSpec(
        f"{key}-mixed",
        "Unlike quantities",
        (Column("value", "Value"),),
        pd.DataFrame({"value": [0.1234, 0.00001, 12.0]}, index=["Share", "p", "Months"]),
        "Quantity",
        row_forms=(NumberForm.SHARE, NumberForm.PVALUE, NumberForm.COUNT),
    )
    return Exhibit(
        key,
        f"Heading {names[0]}",
        f"2001-01 to 2002-02 {names[0]}",
        Finding(f"{names[0]} does not fit."),
        (figure,),
        (plain_table, mixed),
        sources=("lo-2002", "ross-1976"),
        cautions=(f"Mind {names[0]}.",),
        notes=(f"No test for {names[-1]}.",),
    )


@pytest.fixture
def exhibit() -> Exhibit:
    return make_exhibit()


@pytest.fixture
def nasty_pack(study: Study) -> Pack:
    return Pack(study, title=f"On {NASTY[0]}", author=NASTY[2], dated=NASTY[6]).keep(make_exhibit())


@pytest.fixture
def pack(study: Study) -> Pack:
    return Pack(study, title="Which alphas fit?").keep("ceiling").keep("joint").keep("regression")


@pytest.fixture
def make() -> Callable[..., Exhibit]:
    return make_exhibit
