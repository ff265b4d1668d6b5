"""The line that says which sample a number comes from."""

from __future__ import annotations

from typing import TYPE_CHECKING

from soffit.present.spec import NumberForm
from soffit.present.wording.numbers import join_names, plural, show
from soffit.settings import ErrorType, Histories

if TYPE_CHECKING:
    from soffit.study import FactorRegression, Study

__all__ = ["errors_phrase", "sample_line", "span_phrase"]


def span_phrase(study: Study) -> str:
    """Write the span of the sample: ``1949-01 to 2017-03``."""
    dates = study.sample().returns.index
    return f"{show(dates[0], NumberForm.DATE)} to {show(dates[-1], NumberForm.DATE)}"


def errors_phrase(regression: FactorRegression) -> str:
    """Write which standard errors were used, with lags and reference distribution."""
    choice = regression.choice
    fit = regression.pieces[0][1].fit
    name = "classical" if choice.kind is ErrorType.CLASSICAL else str(choice.kind)
    if choice.kind is ErrorType.HAC:
        lags = regression.table["lags"]
        span = f"{lags.min()}" if lags.min() == lags.max() else f"{lags.min()} to {lags.max()}"
        name = f"Newey–West errors, {span} lags by the rule '{choice.lag_rule}'"
    else:
        name += " errors"
    if not fit.uses_t:
        return f"{name}, normal reference"
    degrees = {piece.fit.df for _, piece in regression.pieces}
    return f"{name}, t({degrees.pop()})" if len(degrees) == 1 else f"{name}, t with each asset's own df"


def sample_line(study: Study) -> str:
    """Write span, T, N, K, frequency, error type and dropped rows.

    Returns
    -------
    str
        One line for a panel's head and a memo's footnote.
    """
    sample, regression = study.sample(), study.regression()
    periods = sorted({len(block.dates) for block, _ in regression.pieces})
    noun = sample.frequency.noun + "s"
    span = f"T = {periods[0]:,}" if len(periods) == 1 else f"T = {periods[0]:,} to {periods[-1]:,}"
    if sample.histories is Histories.COMMON:
        block = regression.pieces[0][0]
        first, last = block.dates[0], block.dates[-1]
        dates = f"{show(first, NumberForm.DATE)} to {show(last, NumberForm.DATE)}"
        unused = len(sample.returns) - len(block.dates)
    else:
        dates, unused = span_phrase(study), 0
    factors = join_names(sample.factor_names) or "none"
    parts = [
        dates,
        f"{span} {noun}",
        f"N = {len(sample.assets):,}",
        f"K = {len(sample.factor_names)} ({factors})",
        errors_phrase(regression),
        f"{plural(study.record.dropped_rows, 'row')} dropped at intake",
    ]
    if unused:
        parts.append(f"{plural(unused, noun[:-1])} outside the common sample")
    return " · ".join(parts)
