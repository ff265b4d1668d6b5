"""Sentences about prices of risk and premia of characteristics."""

from __future__ import annotations

from soffit.estimate.cross_section import PremiumError
from soffit.estimate.statistic import NotApplicable, TestStatistic
from soffit.present.spec import Finding, NumberForm
from soffit.present.wording.numbers import join_names, plural, show, show_range
from soffit.study import CharacteristicsPriced, PricesOfRisk, Study

__all__ = [
    "characteristics_finding",
    "characteristics_sample_line",
    "errors_name",
    "identification_cautions",
    "prices_finding",
    "prices_sample_line",
]


def errors_name(kind: PremiumError) -> str:
    """Name of a kind of error as it is printed."""
    return str(kind) if kind is PremiumError.ROBUST else str(kind).replace("-", "–")


def _p(value: float) -> str:
    return f"p = {show(value, NumberForm.PVALUE)}".replace("= <", "< ")


def prices_sample_line(study: Study, prices: PricesOfRisk) -> str:
    """Write span, T, N, K, the two passes, the errors and dropped rows."""
    fit, dates, noun = prices.fit, prices.dates, prices.sample.frequency.noun
    constant = "with a constant" if fit.constant else "without a constant"
    betas = "full-sample betas" if fit.window is None else f"betas from the {plural(fit.window, noun)} before"
    lags = f", {plural(fit.lags, 'lag')}" if prices.headline is PremiumError.NEWEY_WEST else ""
    found = [t for t in fit.tests(prices.headline, prices.reference) if isinstance(t, TestStatistic)]
    law = f", {found[0].distribution.label} reference" if found else ""
    parts = [
        f"{show(dates[0], NumberForm.DATE)} to {show(dates[-1], NumberForm.DATE)}",
        f"T = {len(dates):,} {noun}s priced",
        f"N = {len(prices.assets):,}",
        f"K = {len(prices.factor_names)} ({join_names(prices.factor_names)})",
        f"{fit.second_pass} cross-sections {constant}",
        betas,
        f"{errors_name(prices.headline)} errors{lags}{law}",
        f"{plural(study.record.dropped_rows, 'row')} dropped at intake",
    ]
    unused = len(prices.sample.returns) - len(prices.block.dates)
    if unused:
        parts.append(f"{plural(unused, noun)} outside the common sample")
    return " · ".join(parts)


def prices_finding(prices: PricesOfRisk) -> Finding:
    """Say which betas are paid, whether the prices are the factors' means, and how well the model fits."""
    sentences = [_paid(prices), _fit(prices)]
    if prices.useless or prices.identified is False:
        sentences.append(identification_cautions(prices)[0])
    return Finding(" ".join(sentences))


def _paid(prices: PricesOfRisk) -> str:
    size, table = 1.0 - prices.settings.level, prices.table
    factors = table.loc[list(prices.factor_names)]
    paid = [str(name) for name in factors.index[factors[f"p {prices.headline}"] < size]]
    verb = "differs" if len(paid) == 1 else "differ"
    names = f" ({join_names(paid)})" if paid else ""
    count = f"{len(paid) or 'none'} of {plural(len(factors), 'price')} of risk"
    head = f"At {show(size, NumberForm.SHARE)}, {count} {verb} from zero{names}"
    if factors["gap_p"].isna().all():
        return head + "."
    apart = factors[factors["gap_p"] < size].sort_values("gap_p", kind="stable")
    if not len(apart):
        return f"{head}, and none from its factor's mean."
    listed = [
        f"{name} {show(row.premium, NumberForm.PERCENT)} a year against {show(row.factor_mean, NumberForm.PERCENT)}"
        for name, row in zip(apart.index, apart.itertuples(), strict=True)
    ]
    verb = "differs from its factor's mean" if len(apart) == 1 else "differ from their factors' means"
    return f"{head}, and {len(apart)} {verb}: {join_names(listed, most=3)}."


def _fit(prices: PricesOfRisk) -> str:
    what = "differences in mean returns" if prices.fit.constant else "mean returns"
    value = prices.fit.r2_ols
    if isinstance(value, NotApplicable):
        explained = f"There is no cross-sectional R²: {value.reason}"
    else:
        explained = f"Betas explain {show(value, NumberForm.SHARE)} of {what}{_interval(prices)}"
    test = prices.fit.pricing_f
    if isinstance(test, NotApplicable):
        return f"{explained}; there is no test of the pricing errors: {test.reason}."
    size = 1.0 - prices.settings.level
    verdict = "are not all zero" if test.pvalue < size else "could all be zero"
    return f"{explained}; pricing errors {verdict} ({test.distribution.label}, {_p(test.pvalue)})."


def _interval(prices: PricesOfRisk) -> str:
    found = prices.r2_ols
    if isinstance(found, NotApplicable) or isinstance(found.interval, NotApplicable):
        return ""
    level = show(found.interval.level, NumberForm.SHARE)
    return f" ({level} interval {show_range(found.interval.low, found.interval.high, NumberForm.SHARE)})"


def identification_cautions(prices: PricesOfRisk) -> tuple[str, ...]:
    """Warn of factors whose prices the betas do not identify; empty if there are none."""
    out = []
    across = "differ across assets" if prices.fit.constant else "differ from zero"
    if len(prices.useless) == 1:
        out.append(
            f"The betas on {prices.useless[0]} do not {across} beyond noise: its price of risk is not identified."
        )
    elif prices.useless:
        out.append(
            f"The betas on {join_names(prices.useless)} do not {across} beyond noise: their prices of risk are not "
            "identified."
        )
    if prices.identified is False:
        out.append(
            "The rank tests do not reject that the betas cannot tell the factors apart: t ratios of the prices of "
            "risk are not to be relied on."
        )
    return tuple(out)


def characteristics_sample_line(study: Study, priced: CharacteristicsPriced) -> str:
    """Write span, number of cross-sections, assets in each, the lag and what was left out."""
    fit, noun = priced.fit, priced.sample.frequency.noun
    low, high = int(fit.counts.min()), int(fit.counts.max())
    parts = [
        f"{show(priced.dates[0], NumberForm.DATE)} to {show(priced.dates[-1], NumberForm.DATE)}",
        f"{len(priced.dates):,} cross-sections",
        f"{low:,} assets each" if low == high else f"{low:,} to {high:,} assets each",
        "with a constant" if fit.constant else "without a constant",
        f"characteristics {plural(priced.lag, noun)} before the return"
        if priced.lag
        else f"characteristics of the same {noun}",
        f"{errors_name(PremiumError.FAMA_MACBETH)} errors, t({len(priced.dates) - 1})",
        f"{plural(fit.incomplete, 'row')} with a missing value left out",
    ]
    if len(fit.skipped):
        parts.append(f"{plural(len(fit.skipped), noun)} without a cross-section")
    if priced.outside:
        parts.append(f"{plural(priced.outside, 'row')} dated outside the sample")
    if priced.unmatched:
        parts.append(
            f"{plural(len(priced.unmatched), 'asset')} not in the study ({join_names(priced.unmatched)})"
        )
    return " · ".join(parts) + f" · {plural(study.record.dropped_rows, 'row')} dropped at intake"


def characteristics_finding(priced: CharacteristicsPriced) -> Finding:
    """Say which characteristics are paid and how much of each cross-section they explain."""
    size, table = 1.0 - priced.settings.level, priced.table.loc[list(priced.names)]
    error = PremiumError.FAMA_MACBETH
    paid = table[table[f"p {error}"] < size]
    listed = [f"{name} (t {show(float(t), NumberForm.RATIO)})" for name, t in paid[f"t {error}"].items()]
    names = f": {join_names(listed)}" if listed else ""
    verb = "is" if len(paid) == 1 else "are"
    r2 = priced.fit.average_r2
    share = (
        f"there is no average R²: {r2.reason}"
        if isinstance(r2, NotApplicable)
        else f"they explain {show(r2, NumberForm.SHARE)} of a {priced.sample.frequency.noun}'s returns on average"
    )
    count = f"{len(paid) or 'none'} of {plural(len(table), 'characteristic')}"
    return Finding(f"At {show(size, NumberForm.SHARE)}, {count} {verb} paid{names}; {share}.")
