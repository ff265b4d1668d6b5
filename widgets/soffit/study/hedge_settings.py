"""From settings as a person types them to the hedge's rules and rates per period."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence

import numpy as np
import numpy.typing as npt

from soffit.errors import SettingError, nearest
from soffit.hedge.costs import CostRates, LegKind
from soffit.hedge.walk_forward import WalkSchedule
from soffit.hedge.weights import HedgeRule
from soffit.intake.options import choice
from soffit.settings import Settings
from soffit.study.sample import Sample

__all__ = ["BASIS_POINT", "cost_rates", "hedge_rule", "known_names", "leg_kinds", "walk_schedule"]

Floats = npt.NDArray[np.float64]

BASIS_POINT = 1e-4


def known_names(asked: Iterable[str], known: Sequence[str], noun: str) -> tuple[str, ...]:
    """Return the names asked for, each of which must be known.

    Raises
    ------
    SettingError
        For an unknown name, with the nearest known one.
    """
    names = tuple(str(name) for name in asked)
    for name in names:
        if name not in known:
            raise SettingError(f"There is no {noun} '{name}' in this study", remedy=nearest(name, known))
    return names


def _half_spreads(settings: Settings, names: Sequence[str], usual: float) -> Floats:
    """Half-spreads as decimals per unit traded; those named singly in place of the usual one."""
    by_name = settings.costs.half_spreads
    return np.array([by_name.get(name, usual) for name in names], dtype=float) * BASIS_POINT


def _refuse_strangers(settings: Settings, everyone: Sequence[str]) -> None:
    known_names(settings.costs.half_spreads, everyone, "asset or factor with a half-spread of its own,")


def hedge_rule(settings: Settings, sample: Sample, everyone: Sequence[str]) -> HedgeRule:
    """How hedge ratios follow from a window.

    Parameters
    ----------
    settings : Settings
        The choices.
    sample : Sample
        What is hedged, with the factors in order.
    everyone : sequence of str
        Every name that may have a half-spread of its own.

    Raises
    ------
    SettingError
        If a cap admits no hedge, or a half-spread belongs to nobody.

    Notes
    -----
    Where costly legs are dropped, a unit of a leg is charged one round trip (two half-spreads) a window length and
    the borrow fee on the whole unit, since most hedge legs are short.
    """
    hedge = settings.hedge
    costs: tuple[float, ...] | None = None
    if hedge.drop_legs:
        _refuse_strangers(settings, everyone)
        spreads = _half_spreads(settings, sample.factor_names, settings.costs.factor_half_spread)
        carry = settings.costs.borrow * BASIS_POINT / sample.periods_per_year
        costs = tuple(float(cost) for cost in 2.0 * spreads / hedge.window + carry)
    return HedgeRule(
        beta=hedge.beta,
        dimson_lags=hedge.dimson_lags,
        ridge=hedge.ridge,
        gross_cap=hedge.gross_cap,
        leg_cap=hedge.leg_cap,
        leg_costs=costs,
        risk_aversion=hedge.risk_aversion,
    )


def walk_schedule(settings: Settings) -> WalkSchedule:
    """When hedges are estimated, traded and estimated again."""
    hedge = settings.hedge
    return WalkSchedule(hedge.window_kind, hedge.window, hedge.hold, hedge.lag)


def leg_kinds(kinds: Mapping[str, LegKind | str] | None, names: Sequence[str]) -> tuple[LegKind, ...]:
    """What each leg is; cash where not said.

    Raises
    ------
    SettingError
        For an unknown leg or kind.
    """
    given = dict(kinds or {})
    known_names(given, names, "hedge leg")
    return tuple(choice(LegKind, given.get(name, LegKind.CASH), f"kinds[{name!r}]") for name in names)


def cost_rates(
    settings: Settings, sample: Sample, everyone: Sequence[str], kinds: tuple[LegKind, ...], borrowed: float
) -> CostRates:
    """Costs per period and unit from the basis points that a person types.

    Raises
    ------
    SettingError
        If a half-spread belongs to nobody, or the borrowed share is not between 0 and 1.
    """
    _refuse_strangers(settings, everyone)
    costs, m = settings.costs, sample.periods_per_year
    return CostRates(
        leg_half_spreads=_half_spreads(settings, sample.factor_names, costs.factor_half_spread),
        asset_half_spreads=_half_spreads(
            settings, [str(name) for name in sample.assets], costs.asset_half_spread
        ),
        financing=costs.financing * BASIS_POINT / m,
        borrow=costs.borrow * BASIS_POINT / m,
        kinds=kinds,
        borrowed=borrowed,
    )
