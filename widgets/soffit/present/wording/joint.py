"""Sentences beside the joint test: the asymptotic tests, the large-N test, the assumptions and the power."""

from __future__ import annotations

from soffit.estimate.statistic import NotApplicable
from soffit.judge.large_n import LargeN
from soffit.judge.wald import WaldTests
from soffit.present.spec import NumberForm
from soffit.present.wording.numbers import plural, show
from soffit.present.wording.sample import sample_line
from soffit.study import JointPower, ResidualAssumptions, Study

__all__ = ["assumptions_sentence", "joint_sample", "large_n_sentence", "power_sentence", "wald_caution"]


def joint_sample(study: Study) -> str:
    """Write the sample line as a sentence, and which block the joint results use if that is not all of it."""
    test = study.joint_test()
    line = f"{sample_line(study)}."
    if test.left_out:
        line += f" Joint results on {plural(test.alphas.count, 'asset')} and T = {test.alphas.periods:,}."
    return line


def large_n_sentence(test: LargeN, size: float) -> str:
    """Say what the large-N test finds, or why there is none."""
    statistic = test.test
    if isinstance(statistic, NotApplicable):
        return f"There is no large-N test either: {statistic.reason}."
    verdict = "rejects" if statistic.pvalue < size else "does not reject"
    pvalue = f"p = {show(statistic.pvalue, NumberForm.PVALUE)}".replace("= <", "< ")
    return f"The large-N test {verdict} zero alphas at {show(size, NumberForm.SHARE)} ({pvalue})."


def wald_caution(tests: WaldTests) -> str:
    """Say how often the asymptotic Wald test rejects alphas that are truly zero; empty where it hardly errs."""
    size = tests.classical_size
    if isinstance(size, NotApplicable) or size.actual <= 1.2 * size.nominal:
        return ""
    return (
        "The asymptotic Wald tests reject too often in this sample: the classical one rejects truly zero alphas "
        f"{show(size.actual, NumberForm.SHARE)} of the time at a nominal {show(size.nominal, NumberForm.SHARE)} "
        "with normal residuals; the robust ones can err more."
    )


def assumptions_sentence(assumptions: ResidualAssumptions) -> str:
    """Say for how many assets an assumption of the joint test fails."""
    summary = assumptions.summary
    words = {
        "Ljung-Box": "autocorrelation",
        "Breusch-Pagan": "heteroskedasticity",
        "Jarque-Bera": "normality",
    }
    tested = summary[summary["assets"] > 0]
    if tested.empty:
        return "The residuals are too few to check the test's assumptions."
    parts = [
        f"{words[str(name)]} for {row['after_holm']:,} of {row['assets']:,} assets"
        for name, row in tested.iterrows()
    ]
    size = show(1.0 - assumptions.joint.regression.level, NumberForm.SHARE)
    return f"Residual checks fail at {size}, adjusted over the assets: {', '.join(parts)}."


def power_sentence(power: JointPower) -> str:
    """Say what the test could have found, and how long a sample would have to be."""
    against = show(power.against, NumberForm.RATIO)
    goal = show(power.goal, NumberForm.SHARE)
    if isinstance(power.power, NotApplicable) or isinstance(power.detectable, NotApplicable):
        found = ""
    elif power.against <= power.factors_sharpe:
        return (
            f"A best Sharpe ratio of {against} a year needs no alpha, since the factors earn "
            f"{show(power.factors_sharpe, NumberForm.RATIO)}; the test finds one of "
            f"{show(power.detectable, NumberForm.RATIO)} with {goal} probability."
        )
    else:
        found = (
            f"If the best Sharpe ratio were {against} a year, the GRS test would reject with "
            f"{show(power.power, NumberForm.SHARE)} probability; it finds {show(power.detectable, NumberForm.RATIO)} "
            f"with {goal}. "
        )
    if isinstance(power.periods_needed, NotApplicable):
        return f"{found}No sample length gives {goal} power against {against}: {power.periods_needed.reason}."
    return (
        f"{found}For {goal} power against {against} a year it needs T = "
        f"{show(power.periods_needed, NumberForm.COUNT)}; there are {show(power.grs.periods, NumberForm.COUNT)}."
    )
