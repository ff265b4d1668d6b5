"""Sentences about the factor regressions and the joint test."""

from __future__ import annotations

import numpy as np

from soffit.estimate.statistic import NotApplicable
from soffit.present.spec import Finding, NumberForm
from soffit.present.wording.numbers import join_names, plural, show
from soffit.study import FactorRegression, JointTest

__all__ = ["joint_finding", "regression_finding"]


def regression_finding(regression: FactorRegression) -> Finding:
    """Say how much the factors explain and which alphas stand out on their own."""
    table = regression.table
    size = 1.0 - regression.level
    ranked = table.loc[table["p"] < size, "t"].abs().sort_values(ascending=False)
    kept = [str(name) for name in ranked.index]
    explained = show(float(np.nanmean(table["r2"])), NumberForm.SHARE)
    typical = show(float(table["alpha"].abs().mean()), NumberForm.PERCENT)
    head = f"The factors explain {explained} of variance on average and leave a mean |alpha| of {typical} a year."
    share = f"{plural(len(kept), 'alpha')} of {len(table):,}"
    verb = "differs" if len(kept) == 1 else "differ"
    names = f" ({join_names(kept)})" if kept else ""
    at = show(size, NumberForm.SHARE)
    tail = f"{share[0].upper()}{share[1:]} {verb} from zero at {at} one at a time{names}."
    return Finding(f"{head} {tail}")


def joint_finding(test: JointTest) -> Finding:
    """Say whether the alphas are jointly zero, and what they add to the factors' Sharpe ratio."""
    grs, combined = test.grs, test.combined_sharpe
    if isinstance(grs, NotApplicable) or isinstance(combined, NotApplicable):
        reason = grs.reason if isinstance(grs, NotApplicable) else ""
        return Finding(f"The GRS test does not exist for this sample: {reason}.")
    size = 1.0 - test.regression.level
    verdict = "are not jointly zero" if grs.pvalue < size else "could jointly be zero"
    pvalue = f"p = {show(grs.pvalue, NumberForm.PVALUE)}".replace("= <", "< ")
    left = (
        f" {join_names(test.left_out)} is left out for its short history." if len(test.left_out) == 1 else ""
    )
    if len(test.left_out) > 1:
        left = f" {join_names(test.left_out)} are left out for their short histories."
    return Finding(
        f"At {show(size, NumberForm.SHARE)} the alphas {verdict}: GRS = {show(grs.value, NumberForm.STATISTIC)}, "
        f"{grs.distribution.label}, {pvalue}. In sample the factors earn a Sharpe ratio of "
        f"{show(test.factors_sharpe, NumberForm.RATIO)} a year and factors and assets together "
        f"{show(combined, NumberForm.RATIO)}.{left}"
    )
