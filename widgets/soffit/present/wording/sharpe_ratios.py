"""Sentences about Sharpe ratios."""

from __future__ import annotations

from soffit.estimate.statistic import NotApplicable
from soffit.present.spec import Finding, NumberForm
from soffit.present.wording.numbers import join_names, plural, show, show_range
from soffit.study import SharpeGap, SharpeTable

__all__ = ["lags_phrase", "sharpe_finding", "sharpe_gap_finding"]


def _ratio(value: float) -> str:
    return show(value, NumberForm.RATIO)


def lags_phrase(found: SharpeTable) -> str:
    """Write which errors the intervals rest on: ``Newey–West errors, 6 lags``."""
    lags = found.ratios.lags
    low, high = int(lags.min()), int(lags.max())
    return f"Newey–West errors, {plural(high, 'lag') if low == high else f'{low} to {high} lags'}"


def sharpe_finding(found: SharpeTable) -> Finding:
    """Say what the factors earn together, which assets' ratios are above zero, and what picking the best explains."""
    return Finding(" ".join(part for part in (_factors(found), _assets(found), _deflated(found)) if part))


def _factors(found: SharpeTable) -> str:
    interval, unbiased = found.factors_interval, found.factors_unbiased
    if not found.squared.width:
        return ""
    head = f"The factors' best combination earned a Sharpe ratio of {_ratio(found.factors)} a year in sample"
    if isinstance(interval, NotApplicable) or isinstance(unbiased, NotApplicable):
        return f"{head}; the sample is too short to say how surely."
    level = show(interval.level, NumberForm.SHARE)
    return (
        f"{head} ({level} interval {show_range(interval.low, interval.high, NumberForm.RATIO)}), "
        f"{_ratio(unbiased)} after taking off its upward bias."
    )


def _assets(found: SharpeTable) -> str:
    table = found.table
    assets = table[(table["role"] == "asset") & table["sharpe"].notna()]
    if assets.empty:
        return "No asset's return varies, so none has a Sharpe ratio."
    above = int((assets["low"] > 0).sum())
    best = int(assets["sharpe"].to_numpy(dtype=float).argmax())
    ratio, low, high = (
        float(value) for value in assets[["sharpe", "low", "high"]].to_numpy(dtype=float)[best]
    )
    shown = f"{_ratio(ratio)} a year ({show_range(low, high, NumberForm.RATIO)})"
    level = show(found.level, NumberForm.SHARE)
    if len(assets) == 1:
        verdict = "lies" if above else "does not lie"
        return f"The asset's Sharpe ratio of {shown} {verdict} above zero at {level}."
    if above == len(assets):
        count = f"All {above:,} assets lie"
    else:
        count = (
            f"Of {len(assets):,} assets, {f'{above:,}' if above else 'none'} {'lies' if above < 2 else 'lie'}"
        )
    return f"{count} above zero at {level}; the highest is {assets.index[best]} at {shown}."


def _deflated(found: SharpeTable) -> str:
    table = found.table
    known = table["deflated"].dropna()
    if known.empty or found.tests < 2:
        return ""
    kept = known[known > found.level].sort_values(ascending=False, kind="stable")
    names = f" ({join_names(str(name) for name in kept.index)})" if len(kept) else ""
    stays = "stays" if len(kept) == 1 else "stay"
    count = f"{len(kept):,}" if len(kept) else "none"
    return (
        f"Held against the best of {found.tests:,} trials without skill, {count} of them {stays} above it with more "
        f"than {show(found.level, NumberForm.SHARE)} probability{names}."
    )


def sharpe_gap_finding(gap: SharpeGap) -> Finding:
    """Say whether two Sharpe ratios differ."""
    test, interval = gap.bootstrap, gap.interval
    if isinstance(test, NotApplicable):
        return Finding(
            f"The Sharpe ratios of {gap.first} and {gap.second} cannot be compared: {test.reason}."
        )
    verdict = "differ" if test.pvalue < 1.0 - gap.level else "do not differ"
    return Finding(
        f"The Sharpe ratio of {gap.first} less that of {gap.second} is {_ratio(gap.difference)} a year "
        f"({show(gap.level, NumberForm.SHARE)} interval "
        f"{show_range(interval.low, interval.high, NumberForm.RATIO)}); by the studentised bootstrap they {verdict} "
        f"at {show(1.0 - gap.level, NumberForm.SHARE)} "
        f"(p = {show(test.pvalue, NumberForm.PVALUE)})."
    )
