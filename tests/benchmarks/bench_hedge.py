"""Measured times of the walk-forward hedge; asserts none.

Run ``python -m pytest tests/benchmarks/bench_hedge.py -m benchmark -s``. Aim: 500 assets × 660 months with 60-month
windows re-estimated monthly in under 2 s.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable

import numpy as np
import pytest

from soffit.hedge.costs import CostRates, LegKind, hedge_costs
from soffit.hedge.delivery import report_walk
from soffit.hedge.walk_forward import WalkSchedule, walk_forward
from soffit.hedge.weights import HedgeRule
from soffit.settings import HedgeBeta, WindowKind

pytestmark = pytest.mark.benchmark

T, N, K = 660, 500, 4


def _say(what: str, seconds: float) -> None:
    sys.stdout.write(f"{what}: {seconds:.2f} s\n")


def _best(work: Callable[[], object], times: int = 3) -> float:
    seconds = []
    for _ in range(times):
        start = time.perf_counter()
        work()
        seconds.append(time.perf_counter() - start)
    return min(seconds)


def test_walk_forward_of_500_assets() -> None:
    rng = np.random.default_rng(1)
    factors = rng.normal(0.004, 0.035, (T, K))
    returns = factors @ rng.normal(0.6, 0.4, (K, N)) + rng.normal(0, 0.06, (T, N))
    rules = {
        "plain": HedgeRule(),
        "Vasicek": HedgeRule(beta=HedgeBeta.VASICEK),
        "Dimson, one lag": HedgeRule(beta=HedgeBeta.DIMSON),
        "ridge": HedgeRule(beta=HedgeBeta.RIDGE),
        "dropped legs": HedgeRule(leg_costs=(1e-4,) * K),
        "gross cap 1": HedgeRule(gross_cap=1.0),
    }
    for name, rule in rules.items():
        _say(f"walk, {name}", _best(lambda rule=rule: walk_forward(returns, factors, rule)))
    _say("walk, held 12", _best(lambda: walk_forward(returns, factors, None, WalkSchedule(hold=12))))
    expanding = WalkSchedule(WindowKind.EXPANDING)
    _say("walk, expanding", _best(lambda: walk_forward(returns, factors, None, expanding)))
    walk = walk_forward(returns, factors)
    _say("report of the plain walk", _best(lambda: report_walk(walk)))
    report = report_walk(walk)
    rates = CostRates(np.full(K, 2e-4), np.full(N, 1e-3), 25e-6, 33e-6, (LegKind.CASH,) * K)
    _say("costs of it", _best(lambda: hedge_costs(walk, report, rates)))
