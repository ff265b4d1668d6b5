"""Cautions that stand in every memo. They are constants: nothing an analyst sets can drop one."""

from __future__ import annotations

from collections.abc import Iterable

from soffit.present.spec import Exhibit

__all__ = ["CAUTIONS", "HEDGE_CAUTIONS", "cautions_for", "is_hedge"]

CAUTIONS: tuple[str, ...] = (
    "Every figure here is an estimate from past returns. Past returns do not tell future ones.",
    "A Sharpe ceiling is a judgement about a market, not a law of it. Another ceiling gives other verdicts.",
    "Sharpe ratios of best combinations, and alphas picked out for their size, overstate in sample what can "
    "be earned.",
    "Hedged and combined returns are hypothetical: no account earned them, and they cannot be obtained in full.",
    "This is research for professional investors, not investment advice, an offer or a recommendation.",
    "Before it leaves the desk it passes the firm's compliance review and meets the rules of every place where "
    "it is shown.",
)

HEDGE_CAUTIONS: tuple[str, ...] = (
    "Hedges use derivatives and short positions: losses can exceed the sum invested.",
    "A hedge adds leverage; it needs margin, which can be called at short notice and at the worst time.",
    "Short positions can be recalled or made dear by their lenders, and their losses have no bound.",
    "Betas move: what was hedged in the estimation window may be exposed in the next one.",
    "A hedge suits only accounts whose mandate, size and knowledge allow for derivatives, leverage and shorting.",
)


def is_hedge(exhibit: Exhibit) -> bool:
    """Whether an exhibit proposes or tests positions, so that the hedge cautions belong to it."""
    return exhibit.key.split("-")[0] in {"hedge", "hedges", "ticket", "book"}


def cautions_for(exhibits: Iterable[Exhibit]) -> tuple[str, ...]:
    """Cautions that a memo of these exhibits must carry, beside those that stand with each exhibit.

    Returns
    -------
    tuple of str
        The general ones, and the hedge's where a hedge is shown.
    """
    return CAUTIONS + (HEDGE_CAUTIONS if any(is_hedge(exhibit) for exhibit in exhibits) else ())
