"""The joint test: GRS and the Sharpe ratios it compares, other tests beside it, its assumptions and its power."""

from __future__ import annotations

import numpy as np
import pandas as pd

from soffit.estimate.statistic import NotApplicable, TestStatistic
from soffit.judge.large_n import LargeN
from soffit.judge.wald import WaldTests
from soffit.present.exhibits.ceiling import CEILING_STEPS
from soffit.present.spec import (
    Axis,
    AxisScale,
    Bars,
    Column,
    Exhibit,
    FigureSpec,
    Finding,
    Line,
    Mark,
    NumberForm,
    Orientation,
    Role,
    Rule,
    TableSpec,
)
from soffit.present.wording.joint import (
    assumptions_sentence,
    joint_sample,
    large_n_sentence,
    power_sentence,
    wald_caution,
)
from soffit.present.wording.numbers import show
from soffit.present.wording.regression import joint_finding
from soffit.present.wording.sample import sample_line
from soffit.study import JointTest, Study

__all__ = [
    "assumptions_table",
    "exhibit",
    "power_figure",
    "residual_table",
    "sharpe_figure",
    "statistics_table",
]

_SOURCES = (
    "gibbons-ross-shanken-1989",
    "campbell-lo-mackinlay-1997",
    "white-1980",
    "newey-west-1987",
    "pesaran-yamagata-2024",
    "bai-saranadasa-1996",
    "pearson-1959",
    "ljung-box-1978",
    "breusch-pagan-1979",
    "koenker-1981",
    "jarque-bera-1987",
    "holm-1979",
)


def exhibit(study: Study) -> Exhibit:
    """Build the exhibit of the joint test."""
    test = study.joint_test()
    wald, large_n, size = study.wald(), study.large_n(), 1.0 - study.settings.level
    sentences = [joint_finding(test).text]
    if isinstance(test.grs, NotApplicable):
        sentences.append(large_n_sentence(large_n, size))
    sentences.append(power_sentence(study.power()))
    cautions = (
        "In-sample Sharpe ratios of best combinations overstate what can be earned.",
        wald_caution(wald),
        assumptions_sentence(study.assumptions()),
    )
    return Exhibit(
        key="joint",
        title="Are the alphas jointly zero?",
        sample=sample_line(study),
        finding=Finding(" ".join(sentences)),
        figures=(sharpe_figure(study, test), power_figure(study)),
        tables=(statistics_table(study, test), assumptions_table(study), residual_table(study)),
        sources=_SOURCES,
        cautions=tuple(caution for caution in cautions if caution),
        notes=_notes(test, wald, large_n),
    )


def _notes(test: JointTest, wald: WaldTests, large_n: LargeN) -> tuple[str, ...]:
    results = (test.grs, wald.classical, wald.robust, wald.hac, large_n.test)
    return tuple(dict.fromkeys(item.reason for item in results if isinstance(item, NotApplicable)))


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
        footnote=joint_sample(study),
        aspect=2.0,
    )


def power_figure(study: Study) -> FigureSpec:
    """Draw the power of the GRS test against the best Sharpe ratio."""
    power, ratio = study.power(), NumberForm.RATIO
    curve = power.at(CEILING_STEPS)
    size = power.grs.size
    marks: list[Mark] = [
        Rule(
            "goal",
            power.goal,
            Orientation.HORIZONTAL,
            Role.REFERENCE,
            show(power.goal, NumberForm.SHARE),
            True,
        ),
        Rule(
            "factors",
            power.factors_sharpe,
            Orientation.VERTICAL,
            Role.FACTORS,
            f"factors {show(power.factors_sharpe, ratio)}",
            dashed=True,
        ),
        Rule(
            "against",
            power.against,
            Orientation.VERTICAL,
            Role.SECOND,
            f"asked about {show(power.against, ratio)}",
        ),
    ]
    if isinstance(curve, NotApplicable):
        alt = f"No power curve: {curve.reason}."
    else:
        marks.insert(0, Line("power", CEILING_STEPS, curve, Role.ESTIMATE))
        alt = f"Power of the GRS test against the best Sharpe ratio. {power_sentence(power)}"
    return FigureSpec(
        key="joint-power",
        title="Power of the GRS test",
        x=Axis("Best Sharpe ratio of factors and assets, a year", ratio, (0.0, float(CEILING_STEPS[-1]))),
        y=Axis("Probability of a rejection", NumberForm.SHARE, (0.0, 1.0)),
        marks=tuple(marks),
        alt=alt,
        footnote=(
            f"{joint_sample(study)} A test at {show(size, NumberForm.SHARE)}, for normal residuals and given the "
            "factors' sample moments."
        ),
    )


def statistics_table(study: Study, test: JointTest) -> TableSpec:
    """Tabulate the joint test statistics with their nulls, distributions and true sizes."""
    wald, large_n = study.wald(), study.large_n()
    size = show(1.0 - study.settings.level, NumberForm.SHARE)
    sizes = [
        np.nan if isinstance(found, NotApplicable) else found.actual
        for found in (wald.classical_size, *study.wald_sizes())
    ]
    rows: list[tuple[str, TestStatistic | NotApplicable, float]] = [
        ("GRS", test.grs, 1.0 - study.settings.level),
        (
            "Wald, classical",
            wald.classical,
            sizes[0],
        ),
        ("Wald, heteroskedasticity-robust", wald.robust, sizes[1]),
        (f"Wald, HAC with {wald.lags} lags", wald.hac, sizes[2]),
        ("Large-N, from squared t ratios", large_n.test, np.nan),
        ("Large-N, thresholded and normal as published", large_n.published, np.nan),
    ]
    columns = (
        Column("value", "Statistic", NumberForm.STATISTIC),
        Column("distribution", "Distribution", NumberForm.TEXT),
        Column("p", "p", NumberForm.PVALUE),
        Column("size", f"Rejects true zeros at nominal {size}", NumberForm.SHARE),
        Column("null", "Null hypothesis", NumberForm.TEXT),
    )
    frame = pd.DataFrame(
        [_statistic_row(found, true) for _, found, true in rows], index=[row[0] for row in rows]
    )
    return TableSpec(
        key="joint-statistics",
        title="Joint tests of the alphas",
        columns=columns,
        frame=frame,
        index_heading="Test",
        footnote=(
            f"{joint_sample(study)} GRS is exact for normal residuals that are independent over time. The Wald tests "
            f"are asymptotic in T; the robust ones divide by T{' − K − 1' if wald.debiased else ''}; how often they "
            "reject is simulated with normal residuals. The large-N test needs no invertible covariance; its second "
            "version rejects too often in short samples. A dash: no figure is known."
        ),
    )


def _statistic_row(found: TestStatistic | NotApplicable, size: float) -> dict[str, object]:
    if isinstance(found, NotApplicable):
        return {
            "value": np.nan,
            "distribution": "",
            "p": np.nan,
            "size": np.nan,
            "null": f"does not exist: {found.reason}",
        }
    return {
        "value": found.value,
        "distribution": found.distribution.label,
        "p": found.pvalue,
        "size": size,
        "null": found.null,
    }


def assumptions_table(study: Study) -> TableSpec:
    """Tabulate for how many assets each assumption fails."""
    assumptions = study.assumptions()
    size = show(1.0 - study.settings.level, NumberForm.SHARE)
    frame = assumptions.summary.copy()
    frame["null"] = frame["null"].where(frame["reason"] == "", "does not exist: " + frame["reason"])
    return TableSpec(
        key="joint-assumptions",
        title="Residual checks",
        columns=(
            Column("assets", "Assets tested", NumberForm.COUNT),
            Column("alone", f"Fail at {size}, one at a time", NumberForm.COUNT),
            Column("after_holm", f"Fail at {size}, Holm", NumberForm.COUNT),
            Column("null", "Null hypothesis", NumberForm.TEXT),
        ),
        frame=frame,
        index_heading="Check",
        footnote=(
            f"{joint_sample(study)} Ljung-Box with {assumptions.checks.lags} lags; Breusch-Pagan in Koenker's form."
        ),
    )


def residual_table(study: Study) -> TableSpec:
    """Tabulate the residual checks of every asset."""
    statistic, pvalue = NumberForm.STATISTIC, NumberForm.PVALUE
    assumptions = study.assumptions()
    return TableSpec(
        key="joint-residuals",
        title="Residual checks by asset",
        columns=(
            Column("ljung_box", "Ljung-Box", statistic),
            Column("ljung_box_p", "p", pvalue),
            Column("breusch_pagan", "Breusch-Pagan", statistic),
            Column("breusch_pagan_p", "p", pvalue),
            Column("jarque_bera", "Jarque-Bera", statistic),
            Column("jarque_bera_p", "p", pvalue),
        ),
        frame=assumptions.table,
        footnote=(
            f"{joint_sample(study)} A dash: the factors replicate the asset, or the sample is too short."
        ),
    )
