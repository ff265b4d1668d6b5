"""Sentences about hedges: what they promise, what they delivered, what they cost, and a book of them."""

from __future__ import annotations

import pandas as pd

from soffit.estimate.statistic import NotApplicable
from soffit.hedge.ticket import Ticket
from soffit.judge.ceiling import Status
from soffit.present.spec import Finding, NumberForm
from soffit.present.wording.numbers import join_names, plural, show
from soffit.settings import CeilingForm, HedgeBeta, WindowKind
from soffit.study import BookAlpha, FactorHedge, HedgedBook, HedgeWalk, Mimicking, Study, WalkCosts

__all__ = [
    "GAP_IN_PRINT",
    "book_finding",
    "costs_finding",
    "hedge_finding",
    "mimicking_finding",
    "rule_phrase",
    "ticket_finding",
    "walk_finding",
    "walk_phrase",
]

# What published work says about the distance between a hedge's promise and its delivery.
GAP_IN_PRINT = (
    "A regression's R² overstates the risk that a hedge will remove, and a hold-out sample understates it (Lien "
    "2006; Dahlgran 2009). Factor loadings of industries are estimated imprecisely and do not stand still (Fama "
    "and French 1997); betas vary over time, though by too little to explain large alphas (Lewellen and Nagel "
    "2006). Estimation error is one reason why refined hedge ratios seldom beat simple ones out of sample (Wang, "
    "Wu and Yang 2015)."
)


def _percent(value: float) -> str:
    return show(float(value), NumberForm.PERCENT)


def _share(value: float) -> str:
    return show(float(value), NumberForm.SHARE)


def _ratio(value: float) -> str:
    return show(float(value), NumberForm.RATIO)


def _cell(table: pd.DataFrame, asset: str, column: str) -> float:
    return float(table[column].to_numpy()[[str(name) for name in table.index].index(asset)])


def rule_phrase(study: Study) -> str:
    """Write how hedge ratios are estimated: ``Vasicek-shrunk betas, gross cap 1.00``."""
    hedge = study.settings.hedge
    lags = plural(hedge.dimson_lags, "lag")
    parts = [
        {
            HedgeBeta.PLAIN: "plain betas",
            HedgeBeta.VASICEK: "Vasicek-shrunk betas",
            HedgeBeta.DIMSON: f"Dimson betas with {lags}",
            HedgeBeta.RIDGE: f"ridge betas, penalty {_ratio(hedge.ridge)}",
        }[hedge.beta]
    ]
    if hedge.gross_cap is not None:
        parts.append(f"gross cap {_ratio(hedge.gross_cap)}")
    if hedge.leg_cap is not None:
        parts.append(f"leg cap {_ratio(hedge.leg_cap)}")
    if hedge.drop_legs:
        parts.append(f"costly legs dropped at risk aversion {_ratio(hedge.risk_aversion)}")
    return ", ".join(parts)


def walk_phrase(study: Study, walk: HedgeWalk) -> str:
    """Write when hedges were estimated and held, and over which dates."""
    hedge, noun = study.settings.hedge, walk.sample.frequency.noun
    window = (
        f"rolling windows of {plural(hedge.window, noun)}"
        if hedge.window_kind is WindowKind.ROLLING
        else f"expanding windows of {plural(hedge.window, noun)} or more"
    )
    every = f"every {noun}" if hedge.hold == 1 else f"every {hedge.hold} {noun}s"
    lag = f", traded {plural(hedge.lag, noun)} after the window" if hedge.lag else ""
    dates = walk.hedged_dates
    span = f"{show(dates[0], NumberForm.DATE)} to {show(dates[-1], NumberForm.DATE)}"
    return f"{rule_phrase(study)}; {window}, estimated again {every}{lag}; hedged {span}"


def hedge_finding(hedge: FactorHedge) -> Finding:
    """Say how much risk the hedge takes away in its own sample, and where it takes least."""
    table = hedge.table
    least = table["effectiveness"].idxmin()
    over = "the latest window" if hedge.latest else "this sample"
    typical = f"from {_percent(table['unhedged'].mean())} to {_percent(table['volatility'].mean())} a year"
    head = (
        f"Over {over} the hedge takes away {_share(table['effectiveness'].mean())} of variance on average, "
        f"volatility {typical}, for a gross hedge of {_ratio(table['gross'].mean())} per unit of the asset."
    )
    if len(table) == 1:
        return Finding(head.replace(" on average", ""))
    tail = f"It takes away least for {least}, {_share(_cell(table, str(least), 'effectiveness'))}."
    if table["capped"].any():
        count = int(table["capped"].sum())
        tail += f" A cap binds for {plural(count, 'asset')}."
    return Finding(f"{head} {tail}")


def walk_finding(walk: HedgeWalk) -> Finding:
    """Say what was promised and delivered on average, where the difference came from, and who fell furthest short."""
    table = walk.table.loc[~walk.report.short]
    gap = walk.gap.loc[~walk.report.short].mean()
    head = (
        f"On average the hedges promised to leave {_percent(table['promised_volatility'].mean())} volatility a year "
        f"and left {_percent(table['volatility'].mean())}; they promised to take away "
        f"{_share(table['promised_effectiveness'].mean())} of variance and took away "
        f"{_share(table['effectiveness'].mean())}."
    )
    parts = [
        f"estimation error {_share(gap['estimation'])}",
        f"betas that moved {_share(gap['drift'])}",
        f"change in residual risk {_share(gap['residual_risk'])}",
    ]
    if walk.walk.schedule.hold > 1:
        parts.append(f"ratios that drifted between re-hedges {_share(gap['holding'])}")
    if not walk.walk.rule.is_plain:
        parts.append(f"the rule beside plain betas {_share(gap['rule'])}")
    side = "above" if gap["whole"] >= 0 else "below"
    whole = f"Delivered variance stands {_share(abs(gap['whole']))} {side} promise"
    body = f"{whole}: {', '.join(parts)}."
    lost = table["promised_effectiveness"] - table["effectiveness"]
    worst = str(lost.idxmax())
    tail = (
        f" The widest shortfall is {worst}'s, {_share(_cell(table, worst, 'promised_effectiveness'))} promised and "
        f"{_share(_cell(table, worst, 'effectiveness'))} delivered."
        if len(table) > 1 and lost[worst] > 0
        else ""
    )
    return Finding(f"{head} {body}{tail}")


def costs_finding(costs: WalkCosts, ceiling: float, form: CeilingForm) -> Finding:
    """Say what the hedges cost, whose alpha survives, and how the net alphas stand to the ceiling."""
    table = costs.table.dropna(subset=["net_alpha"])
    positive = table[table["gross_alpha"] > 0]
    survive = positive[positive["net_alpha"] > 0]
    head = (
        f"Costs take {_percent(table['cost'].mean())} a year on average at a turnover of "
        f"{_ratio(table['turnover'].mean())} units of the legs a year."
    )
    if positive.empty:
        body = "No position has a positive alpha before costs, so none breaks even."
    else:
        verb = "survives" if len(survive) == 1 else "survive"
        body = (
            f"Of {plural(len(positive), 'positive alpha')} before costs, "
            f"{plural(len(survive), 'alpha')} {verb} them."
        )
        best = str(positive["net_alpha"].idxmax())
        if len(survive):
            spread = show(_cell(table, best, "break_even_half_spread"), NumberForm.BASIS_POINTS)
            body += (
                f" The largest net alpha is {best}'s, {_percent(_cell(table, best, 'net_alpha'))} a year (t = "
                f"{_ratio(_cell(table, best, 'net_t'))}); it would be gone at a half-spread of {spread} on every leg."
            )
    return Finding(f"{head} {body} {_against_ceiling(costs, ceiling, form)}")


def _against_ceiling(costs: WalkCosts, ceiling: float, form: CeilingForm) -> str:
    found = costs.under(ceiling, form)
    name = f"a Sharpe ceiling of {_ratio(ceiling)} a year"
    undefined = (found["status"] == Status.UNDEFINED).sum()
    if undefined == len(found):
        return f"{name[0].upper()}{name[1:]} is below what the factors alone earned over the hedged dates."
    over = [str(asset) for asset in found.index[found["needed"] > ceiling]]
    if not over:
        return f"Net of costs every alpha fits under {name}."
    verb = "does not fit" if len(over) == 1 else "do not fit"
    return f"Net of costs {plural(len(over), 'alpha')} {verb} under {name} ({join_names(over)})."


def book_finding(book: HedgedBook) -> Finding:
    """Say what the book implies beside the ceiling, who carries it, and what one more asset would add."""
    words = {
        BookAlpha.ESTIMATED: "estimated alphas",
        BookAlpha.CEILING: "alphas shrunk under the ceiling",
        BookAlpha.NET: "alphas net of costs",
    }[book.limits.alphas]
    ratio = book.appraisal
    if isinstance(ratio, NotApplicable):
        return Finding(f"With {words} the book holds nothing: every alpha is zero.")
    stand = "within" if book.fits else "above"
    table = book.table
    largest = str(table["risk_share"].abs().idxmax())
    head = (
        f"With {words} the book has an appraisal ratio of {_ratio(ratio)} and, on top of the factors' "
        f"{_ratio(book.factors_sharpe)}, implies a Sharpe ratio of {_ratio(book.sharpe)} a year in sample, "
        f"{stand} the ceiling of {_ratio(book.ceiling)}."
    )
    body = (
        f"Its gross exposure is {_ratio(book.book.gross)} of capital for {_percent(book.volatility)} volatility a "
        f"year; {largest} carries {_share(_cell(table, largest, 'risk_share'))} of the risk."
    )
    return Finding(f"{head} {body}{_scale(book)}{_one_more(book)}")


def _scale(book: HedgedBook) -> str:
    scale = book.alpha_scale
    if isinstance(scale, NotApplicable):
        return f" {scale.reason[0].upper()}{scale.reason[1:]}."
    if scale == 1.0:
        return ""
    return f" To fit under the ceiling together the alphas would have to shrink to {_share(scale)} of these."


def _one_more(book: HedgedBook) -> str:
    adds = book.adds
    if isinstance(adds, NotApplicable):
        return ""
    outside = adds[~book.held]
    if len(outside):
        best = str(outside.idxmax())
        return f" One more asset adds most if it is {best}: {_ratio(outside.max())} of Sharpe ratio before limits."
    if len(adds) < 2:
        return ""
    best = str(adds.idxmax())
    return f" Without {best} it would lose {_ratio(adds.max())} of Sharpe ratio before limits."


def ticket_finding(ticket: Ticket) -> Finding:
    """Say what the ticket hedges, what it trades and what rounding leaves."""
    orders = [order for order in ticket.orders if order.contracts]
    money = show(ticket.hedged_notional, NumberForm.MONEY)
    gross = show(ticket.gross_hedge, NumberForm.MONEY)
    left = ticket.rounding_volatility
    tail = (
        f" Rounding leaves exposures that add {show(left, NumberForm.BASIS_POINTS)} of volatility a period."
        if not isinstance(left, NotApplicable)
        else ""
    )
    return Finding(
        f"{plural(len(orders), 'order')[0].upper()}{plural(len(orders), 'order')[1:]} of {gross} "
        f"{ticket.currency} gross hedge {money} {ticket.currency} of {join_names(ticket.assets)} as of "
        f"{ticket.as_of.isoformat()}, with ratios estimated through {ticket.estimated_through.isoformat()}.{tail}"
    )


def mimicking_finding(found: Mimicking) -> Finding:
    """Say how much of each non-traded factor the base assets span."""
    parts = [
        f"{name} {_share(share)} (p = {show(found.tests[str(name)].pvalue, NumberForm.PVALUE)})".replace(
            "= <", "< "
        )
        for name, share in found.r2.items()
    ]
    weak = [name for name, test in found.tests.items() if not test.pvalue < 0.05]
    tail = (
        f" At 5% the base does not move with {join_names(weak)}: a hedge through it would hedge nothing."
        if weak
        else ""
    )
    count = plural(found.weights.shape[1], "base asset")
    return Finding(
        f"Share of the variance of each non-traded factor that {count} span: {', '.join(parts)}.{tail}"
    )
