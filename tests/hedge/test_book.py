"""The book of hedged assets against direct optimisation."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import optimize
from tests.universes import INDUSTRIES

from soffit.errors import EstimationError, SettingError
from soffit.estimate.regression import regress
from soffit.estimate.statistic import NotApplicable
from soffit.hedge.book import build_up, make_book, one_more, with_market


def _case(seed: int, N: int = 5) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    root = rng.normal(size=(N, 2 * N)) * 0.01
    return rng.normal(0, 0.003, N), root @ root.T + 1e-5 * np.eye(N)


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 10_000), st.integers(1, 8))
def test_unlimited_book_reaches_the_largest_ratio(seed: int, N: int) -> None:
    alpha, covariance = _case(seed, N)
    book = make_book(alpha, covariance, theta2=0.01)
    best = float(alpha @ np.linalg.inv(covariance) @ alpha)
    ratio = book.appraisal
    assert not isinstance(ratio, NotApplicable)
    assert ratio**2 == pytest.approx(best, rel=1e-8)
    assert book.best_squared == pytest.approx(best, rel=1e-8)
    assert book.sharpe == pytest.approx(np.sqrt(0.01 + best), rel=1e-8)
    np.testing.assert_allclose(book.weights, np.linalg.solve(covariance, alpha) / 3.0, rtol=1e-6)
    # Nobody does better: any other weights have a smaller ratio.
    other = book.weights + np.random.default_rng(seed).normal(0, np.abs(book.weights).mean(), N)
    assert other @ alpha / np.sqrt(other @ covariance @ other) <= ratio * (1 + 1e-9)
    assert book.mean_shares.sum() == pytest.approx(1.0)
    assert book.risk_shares.sum() == pytest.approx(1.0)
    # At the optimum each asset earns in proportion to the risk it carries.
    np.testing.assert_allclose(book.mean_shares, book.risk_shares, atol=1e-8)


def test_the_book_is_the_joint_identity_turned_around(french: pd.DataFrame) -> None:
    # Gibbons, Ross and Shanken (1989): the Sharpe ratio of factors and assets together, by brute force.
    part = french.loc["1963-07":"1991-12"]
    returns = part[INDUSTRIES].sub(part["RF"], axis=0).to_numpy()
    factors = part[["MktRF", "SMB", "HML", "Mom"]].to_numpy()
    fit = regress(returns, factors)
    covariance = fit.residuals.T @ fit.residuals / len(returns)
    book = make_book(fit.alpha, covariance, theta2=fit.factors.theta2)
    every = np.column_stack([factors, returns])
    mean = every.mean(axis=0)
    whole = np.sqrt(mean @ np.linalg.solve(np.cov(every.T, ddof=0), mean))
    assert book.sharpe == pytest.approx(whole, rel=1e-10)


def test_diagonal_weights_are_judged_by_the_full_covariances() -> None:
    alpha, covariance = _case(4)
    plain, full = make_book(alpha, covariance, diagonal=True), make_book(alpha, covariance)
    np.testing.assert_allclose(plain.weights, alpha / np.diag(covariance) / 3.0)
    assert plain.volatility == pytest.approx(np.sqrt(plain.weights @ covariance @ plain.weights))
    assert plain.sharpe < full.sharpe
    same = make_book(alpha, np.diag(np.diag(covariance)))
    np.testing.assert_allclose(same.weights, plain.weights)


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10_000), st.sampled_from([None, 0.5, 2.0]), st.sampled_from([None, 1.0, 3.0]))
def test_limited_book_against_sequential_quadratic_programming(
    seed: int, position: float | None, gross: float | None
) -> None:
    alpha, covariance = _case(seed, 4)
    book = make_book(alpha, covariance, position_limit=position, gross_limit=gross)
    assert np.abs(book.weights).max() <= (position or np.inf) + 1e-9
    assert book.gross <= (gross or np.inf) + 1e-9

    def loss(sides: np.ndarray) -> float:
        w = sides[:4] - sides[4:]
        return float(1.5 * w @ covariance @ w - w @ alpha) * 1e3

    found = optimize.minimize(
        loss,
        np.concatenate([np.maximum(book.weights, 0), np.maximum(-book.weights, 0)]) * 0.9,
        bounds=[(0, position)] * 8,
        constraints=[] if gross is None else [{"type": "ineq", "fun": lambda s: gross - s.sum()}],
        method="SLSQP",
        options={"ftol": 1e-14, "maxiter": 500},
    )
    mine = np.concatenate([np.maximum(book.weights, 0), np.maximum(-book.weights, 0)])
    assert loss(mine) <= found.fun + 1e-9 * max(1.0, abs(found.fun))
    assert book.limited == (not np.array_equal(book.weights, book.unlimited))


def test_what_one_more_asset_adds_by_leaving_it_out_and_taking_it_in() -> None:
    alpha, covariance = _case(9, 6)
    held = np.array([True, True, False, True, False, True])

    def squared(members: np.ndarray) -> float:
        pick = np.flatnonzero(members)
        return float(alpha[pick] @ np.linalg.solve(covariance[np.ix_(pick, pick)], alpha[pick]))

    adds = one_more(alpha, covariance, held)
    for j in range(6):
        other = held.copy()
        other[j] = not held[j]
        assert adds[j] == pytest.approx(abs(squared(held) - squared(other)), rel=1e-9)
    alone = one_more(alpha, covariance, np.zeros(6, dtype=bool))
    np.testing.assert_allclose(alone, alpha**2 / np.diag(covariance))


def test_building_up_takes_the_best_next_asset_each_time() -> None:
    alpha, covariance = _case(13, 7)
    path = build_up(alpha, covariance)
    held = np.zeros(7, dtype=bool)
    total = 0.0
    for place, pick in enumerate(path.order):
        adds = np.where(held, -1.0, one_more(alpha, covariance, held))
        assert pick == int(np.argmax(adds))
        total += adds[pick]
        assert path.squared[place] == pytest.approx(total, rel=1e-9)
        held[pick] = True
    assert path.squared[-1] == pytest.approx(make_book(alpha, covariance).best_squared, rel=1e-9)


def test_ceiling_says_how_far_the_alphas_must_shrink() -> None:
    # Hand arithmetic: alpha = (1, 2), Sigma = [[4, 1], [1, 3]]: alpha' Sigma^-1 alpha = 15/11.
    book = make_book(np.array([1.0, 2.0]), np.array([[4.0, 1.0], [1.0, 3.0]]), theta2=0.25)
    assert book.best_squared == pytest.approx(15 / 11)
    assert book.alpha_scale(2.0) == 1.0
    scale = book.alpha_scale(1.0)
    assert scale == pytest.approx(np.sqrt(0.75 / (15 / 11)))
    shrunk = make_book(np.array([1.0, 2.0]) * scale, book.covariance, theta2=0.25)
    assert shrunk.sharpe == pytest.approx(1.0)
    assert isinstance(book.alpha_scale(0.4), NotApplicable)


def test_books_that_cannot_be_made_are_refused() -> None:
    alpha, covariance = _case(1, 3)
    flat = covariance.copy()
    flat[1] = flat[:, 1] = 0.0
    with pytest.raises(EstimationError, match="Asset 2 has no residual risk"):
        make_book(alpha, flat)
    twin = np.ones((3, 3)) * 0.01
    with pytest.raises(EstimationError, match="3 assets are singular"):
        make_book(alpha, twin)
    assert make_book(alpha, twin, diagonal=True).weights == pytest.approx(alpha / 0.03)
    with pytest.raises(EstimationError, match="missing"):
        make_book(np.array([0.1, np.nan, 0.1]), covariance)
    with pytest.raises(EstimationError, match="covariances of shape"):
        make_book(alpha, covariance[:2])
    with pytest.raises(SettingError, match="position limit of 0 admits no position"):
        make_book(alpha, covariance, position_limit=0.0)
    with pytest.raises(SettingError, match="gross limit of -1 admits"):
        make_book(alpha, covariance, gross_limit=-1.0)
    with pytest.raises(SettingError, match="risk aversion"):
        make_book(alpha, covariance, risk_aversion=0.0)


def test_a_book_of_zero_alphas_holds_nothing_and_says_so() -> None:
    _, covariance = _case(1, 3)
    book = make_book(np.zeros(3), covariance, theta2=0.04)
    assert isinstance(book.appraisal, NotApplicable)
    assert book.sharpe == pytest.approx(0.2)
    assert isinstance(book.scaled_to_one, NotApplicable)
    np.testing.assert_array_equal(book.mean_shares, 0.0)
    with pytest.raises(EstimationError, match="net weight is zero"):
        with_market(book, np.ones(3), 0.08, 0.2)
    held = make_book(np.array([0.01, 0.02, 0.01]), covariance)
    with pytest.raises(EstimationError, match="A market with mean 0"):
        with_market(held, np.ones(3), 0.0, 0.2)
