"""The joint test: GRS and the Sharpe ratios it compares."""

from __future__ import annotations

import numpy as np
import pandas as pd

from soffit.estimate.statistic import NotApplicable
from soffit.present.spec import (
    Axis,
    AxisScale,
    Bars,
    Column,
    Exhibit,
    FigureSpec,
    NumberForm,
    Orientation,
    Role,
    TableSpec,
)
from soffit.present.wording.numbers import show
from soffit.present.wording.regression import joint_finding
from soffit.present.wording.sample import sample_line
from soffit.study import JointTest, Study

__all__ = ["exhibit", "sharpe_figure", "statistics_table"]


def exhibit(study: Study) -> Exhibit:
    """Build the exhibit of the joint test."""
    test = study.joint_test()
    notes = [test.grs.reason] if isinstance(test.grs, NotApplicable) else []
    return Exhibit(
        key="joint",
        title="Are the alphas jointly zero?",
        sample=sample_line(study),
        finding=joint_finding(test),
        figures=(sharpe_figure(study, test),),
        tables=(statistics_table(study, test),),
        sources=("gibbons-ross-shanken-1989",),
        cautions=("In-sample Sharpe ratios of best combinations overstate what can be earned.",),
        notes=tuple(notes),
    )


def sharpe_figure(study: Study, test: JointTest) -> FigureSpec:
    """Draw the Sharpe ratios of each factor, of the factors together, and with the assets."""
    names = [str(name) for name in test.single_sharpe.index]
    values = [float(value) for value in test.single_sharpe]
    roles = [Role.MUTED] * len(names)
    names.append("factors together")
    values.append(test.factors_sharpe)
    roles.append(Role.FACTORS)
    if not isinstance(test.combined_sharpe, NotApplicable):
        names.append("factors and assets")
        values.append(test.combined_sharpe)
        roles.append(Role.ESTIMATE)
    listed = ", ".join(
        f"{name} {show(value, NumberForm.RATIO)}" for name, value in zip(names, values, strict=True)
    )
    return FigureSpec(
        key="joint-sharpe",
        title="Sharpe ratios in sample",
        x=Axis("Sharpe ratio, a year", NumberForm.RATIO),
        y=Axis("", NumberForm.TEXT, scale=AxisScale.CATEGORY, categories=tuple(names)),
        marks=(
            Bars(
                "sharpe",
                np.arange(len(names), dtype=float),
                np.array(values),
                tuple(names),
                Orientation.HORIZONTAL,
                tuple(roles),
            ),
        ),
        alt=f"Annual Sharpe ratios in sample: {listed}.",
        footnote=f"{sample_line(study)}.",
        aspect=2.0,
    )


def statistics_table(study: Study, test: JointTest) -> TableSpec:
    """Tabulate the joint test statistics with their nulls and distributions."""
    columns = (
        Column("value", "Statistic", NumberForm.STATISTIC),
        Column("distribution", "Distribution", NumberForm.TEXT),
        Column("p", "p", NumberForm.PVALUE),
        Column("null", "Null hypothesis", NumberForm.TEXT),
    )
    grs = test.grs
    if isinstance(grs, NotApplicable):
        row = {"value": np.nan, "distribution": "", "p": np.nan, "null": f"does not exist: {grs.reason}"}
    else:
        row = {"value": grs.value, "distribution": grs.distribution.label, "p": grs.pvalue, "null": grs.null}
    return TableSpec(
        key="joint-statistics",
        title="Joint tests of the alphas",
        columns=columns,
        frame=pd.DataFrame([row], index=["GRS"]),
        index_heading="Test",
        footnote=f"{sample_line(study)}. GRS is exact for normal residuals that are independent over time.",
    )
