"""The ceiling's sentences."""

from __future__ import annotations

from soffit.estimate.statistic import NotApplicable
from soffit.present.spec import Finding, NumberForm
from soffit.present.wording.numbers import join_names, plural, show
from soffit.settings import CeilingForm
from soffit.study import CeilingFacts

__all__ = ["ceiling_finding"]

_FORM = {
    CeilingForm.ALONE: "hedged on their own",
    CeilingForm.ON_FACTORS: "on top of the factors",
    CeilingForm.TOGETHER: "on top of the factors",
}


def ceiling_finding(facts: CeilingFacts) -> Finding:
    """Say how many alphas do not fit and which, the joint p-value, the lowest ceiling and the factors' share."""
    sentences = [_alphas(facts), *_together(facts), _joint(facts)]
    return Finding(" ".join(sentences))


def _ratio(value: float) -> str:
    return show(value, NumberForm.RATIO)


def _alphas(facts: CeilingFacts) -> str:
    ceiling = f"a Sharpe ceiling of {_ratio(facts.ceiling)} a year"
    if facts.undefined:
        return (
            f"{ceiling[0].upper()}{ceiling[1:]} is below what the factors alone earned in this sample, "
            f"{_ratio(facts.factors)}: no alpha can be judged on top of them."
        )
    count = len(facts.exceeding)
    if not count:
        every = "the one alpha fits" if facts.count == 1 else f"all {facts.count:,} alphas fit"
        return f"At {ceiling} {every} {_FORM[facts.form]}."
    verb = "does not fit" if count == 1 else "do not fit"
    return (
        f"At {ceiling}, {count:,} of {plural(facts.count, 'alpha')} {verb} {_FORM[facts.form]} "
        f"({join_names(facts.exceeding)}), {_surely(count, facts.outside)}."
    )


def _surely(count: int, outside: int) -> str:
    if outside == 0:
        return "though within sampling error" if count == 1 else "all within sampling error"
    if outside < count:
        return f"{outside:,} of them by more than sampling error"
    return "by more than sampling error" if count == 1 else "all by more than sampling error"


def _together(facts: CeilingFacts) -> list[str]:
    if (
        facts.form is not CeilingForm.TOGETHER
        or facts.undefined
        or isinstance(facts.fits_together, NotApplicable)
    ):
        return []
    return ["As estimated, all alphas together " + ("fit." if facts.fits_together else "do not fit.")]


def _joint(facts: CeilingFacts) -> str:
    earned = f"the factors already earn {_ratio(facts.factors)}"
    if isinstance(facts.pvalue, NotApplicable) or isinstance(facts.lowest, NotApplicable):
        reason = facts.pvalue.reason if isinstance(facts.pvalue, NotApplicable) else ""
        return f"There is no joint test: {reason}; {earned}."
    size = show(facts.size, NumberForm.SHARE)
    lowest = (
        f"the lowest ceiling not rejected at {size} is {_ratio(facts.lowest)}"
        if facts.rejects_zero
        else f"no ceiling above the factors' own is rejected at {size}"
    )
    return (
        f"Jointly, p = {show(facts.pvalue, NumberForm.PVALUE)} for a best Sharpe ratio of "
        f"{_ratio(facts.ceiling)} or less; {lowest}, and {earned}."
    ).replace("p = <", "p < ")
