"""The order ticket of a hedge: notionals, contracts, rounding and what exposure the rounding leaves.

Money is in the currency of the asset notionals. A ticket is refused when its estimates are too old for its date.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date
from enum import StrEnum

import numpy as np
import numpy.typing as npt

from soffit.errors import EstimationError, InputError
from soffit.estimate.statistic import NotApplicable

__all__ = [
    "Instrument",
    "Order",
    "Rounding",
    "Ticket",
    "hedge_ticket",
    "refuse_stale",
]

Floats = npt.NDArray[np.float64]

_ENUMERATED = 12  # up to this many legs every way of rounding is compared


class Rounding(StrEnum):
    """How exact contract numbers become whole lots."""

    NEAREST = "nearest lot"
    TOWARD_ZERO = "toward zero"
    LEAST_RISK = "least residual risk"


@dataclass(frozen=True)
class Instrument:
    """What is traded for one hedge leg.

    Parameters
    ----------
    name : str
        Name or ticker.
    price : float
        Price in the instrument's currency; for a future its quoted price.
    multiplier : float
        Money in the instrument's currency that one point of price stands for: 250 for an index future, 1 for a fund.
    lot : float
        Contracts or shares trade in multiples of this.
    fx : float
        Value of one unit of the instrument's currency in the ticket's currency.
    margin : float, optional
        Initial margin of one contract in the instrument's currency, as the clearing house or broker states it.

    Raises
    ------
    InputError
        If the price, multiplier, lot or exchange rate is not positive, or the margin is negative.
    """

    name: str
    price: float
    multiplier: float = 1.0
    lot: float = 1.0
    fx: float = 1.0
    margin: float | None = None

    def __post_init__(self) -> None:
        for label in ("price", "multiplier", "lot", "fx"):
            value = getattr(self, label)
            if not (math.isfinite(value) and value > 0):
                raise InputError(f"The {label} of '{self.name}' is {value:g}", allowed="a positive number")
        if self.margin is not None and not (math.isfinite(self.margin) and self.margin >= 0):
            raise InputError(
                f"The margin of '{self.name}' is {self.margin:g}", allowed="zero or more, or none"
            )

    @property
    def contract_value(self) -> float:
        """Notional of one contract in the ticket's currency."""
        return self.price * self.multiplier * self.fx


@dataclass(frozen=True)
class Order:
    """One line of the ticket.

    Parameters
    ----------
    leg : str
        Factor that the line hedges.
    instrument : Instrument
        What is traded.
    target : float
        Wanted notional, negative for a sale.
    exact : float
        Contracts before rounding.
    contracts : float
        Contracts to trade, a whole number of lots.
    residual : float
        Exposure to the factor that rounding leaves: traded notional less target.
    """

    leg: str
    instrument: Instrument
    target: float
    exact: float
    contracts: float
    residual: float

    @property
    def side(self) -> str:
        """``Sell``, ``Buy``, or ``No trade`` where the target rounds to nothing."""
        if self.contracts == 0:
            return "No trade"
        return "Sell" if self.contracts < 0 else "Buy"

    @property
    def notional(self) -> float:
        """Notional that the rounded contracts carry."""
        return self.contracts * self.instrument.contract_value

    @property
    def margin(self) -> float | NotApplicable:
        """Initial margin in the ticket's currency, where the instrument states one."""
        if self.instrument.margin is None:
            return NotApplicable(f"Margin of {self.instrument.name}", "no margin rate was given")
        return abs(self.contracts) * self.instrument.margin * self.instrument.fx


@dataclass(frozen=True, eq=False)
class Ticket:
    """Orders that hedge one or several assets.

    Parameters
    ----------
    assets : tuple of str
        Names of the hedged assets.
    notionals : ndarray, shape (N,)
        Their notionals, negative where short.
    orders : tuple of Order
        One line a leg, in the legs' order.
    currency : str
        Currency of all money on the ticket.
    as_of, estimated_through : date
        Date of the ticket, and last date of the data behind the ratios.
    rounding_volatility : float or NotApplicable
        Volatility per period that the residual exposures add, as a share of the hedged notional.
    """

    assets: tuple[str, ...]
    notionals: Floats
    orders: tuple[Order, ...]
    currency: str
    as_of: date
    estimated_through: date
    rounding_volatility: float | NotApplicable

    @property
    def hedged_notional(self) -> float:
        """Sum of the assets' absolute notionals."""
        return float(np.abs(self.notionals).sum())

    @property
    def gross_hedge(self) -> float:
        """Sum of the legs' absolute traded notionals."""
        return float(sum(abs(order.notional) for order in self.orders))

    @property
    def residual_betas(self) -> Floats:
        """Exposure left on each leg per unit of hedged notional, shape (K,)."""
        return np.array([order.residual for order in self.orders]) / self.hedged_notional

    @property
    def margin(self) -> float | NotApplicable:
        """Initial margin of all legs, where every instrument states one."""
        total = 0.0
        for order in self.orders:
            line = order.margin
            if isinstance(line, NotApplicable):
                return line
            total += line
        return total

    @property
    def margin_note(self) -> str:
        """What the desk must know about margin."""
        margin = self.margin
        head = (
            "Initial margin is at the stated rates, which the clearing house or broker can raise at any time."
        )
        if isinstance(margin, NotApplicable):
            head = f"Initial margin is not stated: {margin.reason}. Ask the clearing broker before trading."
        return (
            f"{head} Variation margin is settled in cash as prices move: a hedge of an asset that pays nothing"
            " until it is sold needs a cash reserve."
        )


def refuse_stale(estimated_through: date, as_of: date, longest_age: int) -> None:
    """Refuse estimates that are too old for the ticket, or that use data after its date.

    Parameters
    ----------
    estimated_through : date
        Last date of the data behind the ratios.
    as_of : date
        Date of the ticket.
    longest_age : int
        Calendar days that may lie between the two.

    Raises
    ------
    EstimationError
        With both dates, the age and what to do.
    """
    age = (as_of - estimated_through).days
    if age < 0:
        raise EstimationError(
            f"The ticket is dated {as_of} but its hedge ratios use data through {estimated_through}",
            allowed="a ticket dated after the data it rests on",
            remedy="date the ticket later, or end the sample before its date",
        )
    if age > longest_age:
        raise EstimationError(
            f"The hedge ratios are stale: they rest on data through {estimated_through}, {age:,} days before the"
            f" ticket's date {as_of}",
            allowed=f"at most {longest_age:,} days, the holding period and lag of the hedge with one period for the"
            " data to arrive",
            remedy="load newer returns and estimate again",
        )


def hedge_ticket(
    assets: Sequence[str],
    notionals: Floats,
    ratios: Floats,
    legs: Sequence[str],
    instruments: Sequence[Instrument],
    *,
    as_of: date,
    estimated_through: date,
    longest_age: int,
    covariance: Floats | None = None,
    rounding: Rounding = Rounding.NEAREST,
    currency: str = "USD",
) -> Ticket:
    """Turn hedge ratios into orders.

    Parameters
    ----------
    assets : sequence of str, length N
        Names of the hedged assets.
    notionals : ndarray, shape (N,)
        Money in each, negative where short.
    ratios : ndarray, shape (N, K)
        Hedge ratios.
    legs : sequence of str, length K
        Names of the factors.
    instruments : sequence of Instrument, length K
        What is traded for each leg.
    as_of, estimated_through : date
        Date of the ticket, and last date of the data behind the ratios.
    longest_age : int
        Calendar days that may lie between the two.
    covariance : ndarray, shape (K, K), optional
        Covariances of the legs per period: for the volatility that rounding leaves, and for rounding by least risk.
    rounding : Rounding
        How contracts are rounded.
    currency : str
        Currency of the notionals.

    Raises
    ------
    EstimationError
        If the estimates are stale or a ratio is missing.
    InputError
        If the lists do not match, nothing is hedged, or rounding by least risk lacks covariances.

    Notes
    -----
    Contracts of leg k: ``−Σ_i notional_i · ratio_ik / (price · multiplier · fx)``, the usual number of contracts
    h·V_A/V_F.
    """
    refuse_stale(estimated_through, as_of, longest_age)
    notionals, ratios = np.asarray(notionals, dtype=float), np.asarray(ratios, dtype=float)
    _check_ticket(assets, notionals, ratios, legs, instruments)
    target = -(notionals @ ratios)
    lot_value = np.array([item.contract_value * item.lot for item in instruments])
    exact = target / lot_value
    if rounding is Rounding.TOWARD_ZERO:
        lots = np.trunc(exact)
    elif rounding is Rounding.NEAREST:
        lots = _nearest(exact)
    else:
        if covariance is None:
            raise InputError("Rounding by least risk needs the covariances of the legs")
        lots = _least_risk(exact, lot_value, np.asarray(covariance, dtype=float))
    residual = lots * lot_value - target
    spread: float | NotApplicable = NotApplicable(
        "Volatility from rounding", "the legs' covariances were not given"
    )
    if covariance is not None:
        share = residual / np.abs(notionals).sum()
        spread = float(np.sqrt(max(share @ np.asarray(covariance, dtype=float) @ share, 0.0)))
    orders = tuple(
        Order(
            leg,
            item,
            float(target[k]),
            float(exact[k] * item.lot),
            float(lots[k] * item.lot),
            float(residual[k]),
        )
        for k, (leg, item) in enumerate(zip(legs, instruments, strict=True))
    )
    return Ticket(tuple(assets), notionals, orders, currency, as_of, estimated_through, spread)


def _check_ticket(
    assets: Sequence[str],
    notionals: Floats,
    ratios: Floats,
    legs: Sequence[str],
    instruments: Sequence[Instrument],
) -> None:
    if notionals.shape != (len(assets),) or ratios.shape != (len(assets), len(legs)):
        raise InputError(
            f"Notionals of shape {notionals.shape} and ratios of shape {ratios.shape} came for {len(assets)} assets"
            f" and {len(legs)} legs"
        )
    if len(instruments) != len(legs):
        raise InputError(f"{len(instruments)} instruments for {len(legs)} legs", allowed="one a leg")
    if not np.isfinite(notionals).all() or not np.abs(notionals).sum() > 0:
        raise InputError(
            "There is no notional to hedge", allowed="finite notionals, at least one of them not zero"
        )
    if not np.isfinite(ratios).all():
        bad = assets[int(np.flatnonzero(~np.isfinite(ratios).all(axis=1))[0])]
        raise EstimationError(
            f"'{bad}' has no hedge ratios", remedy="leave it off the ticket or mend its returns"
        )


def _nearest(exact: Floats) -> Floats:
    """Nearest whole number, halves away from zero as traders round."""
    return np.asarray(np.copysign(np.floor(np.abs(exact) + 0.5), exact), dtype=float)


def _least_risk(exact: Floats, lot_value: Floats, covariance: Floats) -> Floats:
    """Whole lots, each rounded up or down, with the least variance of the residual exposures."""
    if len(exact) > _ENUMERATED:
        raise InputError(
            f"Rounding by least risk compares every way of rounding; {len(exact)} legs are too many",
            allowed=f"up to {_ENUMERATED} legs",
            remedy="round to the nearest lot",
        )
    low = np.floor(exact)
    ways = low + np.array(list(itertools.product((0.0, 1.0), repeat=len(exact))))
    left = (ways - exact) * lot_value
    return np.asarray(ways[int(np.argmin(np.einsum("wk,kj,wj->w", left, covariance, left)))], dtype=float)
