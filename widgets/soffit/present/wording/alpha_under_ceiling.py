"""Sentences about the alphas that may be used under a ceiling."""

from __future__ import annotations

import numpy as np

from soffit.estimate.statistic import NotApplicable
from soffit.present.spec import Finding, NumberForm
from soffit.present.wording.numbers import show, show_range
from soffit.study import AlphaUnderCeiling

__all__ = ["alpha_under_ceiling_finding", "odds_phrase"]


def alpha_under_ceiling_finding(result: AlphaUnderCeiling) -> Finding:
    """Say which alpha may be used at this ceiling, how much it was shrunk, and what the data say of zero alphas."""
    at = f"At a Sharpe ceiling of {show(result.ceiling, NumberForm.RATIO)} a year"
    if isinstance(result.weight, NotApplicable):
        return Finding(
            f"{at} no alpha may be used: the factors alone already earn "
            f"{show(result.joint.factors_sharpe, NumberForm.RATIO)} in sample."
        )
    if result.weight == 0.0:
        return Finding(
            f"{at} no alpha may be used: that is what the factors alone earn, and it leaves no room above them."
        )
    table, percent = result.table, NumberForm.PERCENT
    largest = str(table["shrunk"].abs().idxmax())
    row = table.loc[largest]
    level = show(result.level, NumberForm.SHARE)
    before, after = (float(table[name].abs().mean()) for name in ("alpha", "shrunk"))
    sentences = [
        f"{at}, {show(result.weight, NumberForm.SHARE)} of each estimated alpha may be used: the mean |alpha| of "
        f"{len(table):,} shrinks from {show(before, percent)} to {show(after, percent)} a year.",
        f"The largest left is {largest}'s, {show(row['shrunk'], percent)} instead of {show(row['alpha'], percent)} "
        f"({level}: {show_range(row['shrunk_low'], row['shrunk_high'], percent)}).",
        *_odds(result),
    ]
    return Finding(" ".join(sentences))


def odds_phrase(log_factor: float) -> str:
    """Write a Bayes factor as odds: ``2.5 to 1 for zero alphas``, ``40 to 1 against them``."""
    side = "for zero alphas" if log_factor >= 0 else "against zero alphas"
    size = abs(log_factor)
    # Beyond a million to one the figure says nothing more, and it would soon not be a number.
    odds = float(np.exp(min(size, np.log(2e6))))
    if odds > 1e6:
        return f"more than 1,000,000 to 1 {side}"
    if odds < 1.005:
        return "even odds"
    form = NumberForm.RATIO if odds < 10 else NumberForm.COUNT
    return f"{show(odds, form)} to 1 {side}"


def _odds(result: AlphaUnderCeiling) -> list[str]:
    factor = result.log_bayes_factors(result.ceiling)
    if isinstance(factor, NotApplicable):
        return [f"No odds on zero alphas: {factor.reason}."]
    return [f"From even odds, the data give {odds_phrase(float(factor))} at this ceiling."]
