"""Multiple testing: literal loops, the number of trials in every method, and the share of true nulls."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from statsmodels.stats.multitest import multipletests

from soffit.errors import InputError, SettingError
from soffit.estimate.statistic import NotApplicable
from soffit.judge.multiplicity import (
    USUAL,
    Adjustment,
    Hurdle,
    adjusted_pvalues,
    many_tests,
    null_share,
    null_share_at,
    single_test_level,
    stepwise_t_hurdles,
    t_hurdle,
)


def _literal(p: np.ndarray, method: Adjustment, tests: int) -> np.ndarray:
    """Adjusted p-values by the formula of each paper, with `tests` in place of the number of p-values."""
    order = np.argsort(p)
    out = np.empty(len(p))
    harmonic = sum(1 / j for j in range(1, tests + 1))
    ranked = []
    for i, position in enumerate(order, start=1):
        value = {
            Adjustment.BONFERRONI: tests * p[position],
            Adjustment.HOLM: (tests - i + 1) * p[position],
            Adjustment.BENJAMINI_HOCHBERG: tests / i * p[position],
            Adjustment.BENJAMINI_YEKUTIELI: harmonic * tests / i * p[position],
        }[method]
        ranked.append(value)
    if method is Adjustment.HOLM:
        ranked = [max(ranked[: i + 1]) for i in range(len(ranked))]
    if method in (Adjustment.BENJAMINI_HOCHBERG, Adjustment.BENJAMINI_YEKUTIELI):
        ranked = [min(ranked[i:]) for i in range(len(ranked))]
    out[order] = np.minimum(ranked, 1.0)
    return out


@pytest.mark.parametrize("trials", [1, 8, 9, 40])
@pytest.mark.parametrize("method", USUAL)
def test_adjustments_against_their_formulas(method: Adjustment, trials: int) -> None:
    p = np.array([0.04, 0.0004, 0.6, 0.011, 0.011, 0.2, 0.0, 0.9])
    tests = max(len(p), trials)
    np.testing.assert_allclose(
        adjusted_pvalues(p, method, trials=trials), _literal(p, method, tests), rtol=1e-12
    )


@pytest.mark.parametrize(
    ("method", "code"),
    [
        (Adjustment.BONFERRONI, "bonferroni"),
        (Adjustment.HOLM, "holm"),
        (Adjustment.HOCHBERG, "simes-hochberg"),
        (Adjustment.HOMMEL, "hommel"),
        (Adjustment.BENJAMINI_HOCHBERG, "fdr_bh"),
        (Adjustment.BENJAMINI_YEKUTIELI, "fdr_by"),
    ],
)
def test_adjustments_against_statsmodels_with_ones_for_unseen_trials(method: Adjustment, code: str) -> None:
    p = np.random.default_rng(2).beta(0.4, 3.0, size=40)
    for trials in (1, 75):
        padded = np.concatenate([p, np.ones(max(trials - 40, 0))])
        expected = multipletests(padded, method=code)[1][:40]
        np.testing.assert_allclose(adjusted_pvalues(p, method, trials=trials), expected, rtol=1e-12)


@settings(deadline=None)
@given(
    p=st.lists(st.floats(0, 1), min_size=1, max_size=12),
    trials=st.integers(1, 60),
    method=st.sampled_from(list(Adjustment)),
)
def test_adjusting_never_helps_and_more_trials_never_help(
    p: list[float], trials: int, method: Adjustment
) -> None:
    plain = adjusted_pvalues(p, method)
    more = adjusted_pvalues(p, method, trials=trials)
    assert (plain >= np.array(p) - 1e-12).all()
    assert (more >= plain - 1e-12).all()
    assert (more <= 1.0).all()


def test_missing_pvalues_do_not_count_as_tests() -> None:
    p = [0.01, np.nan, 0.02]
    found = many_tests(p)
    assert found.tests == found.count == 2
    for method in USUAL:
        np.testing.assert_allclose(found.adjusted[method][[0, 2]], adjusted_pvalues([0.01, 0.02], method))
        assert np.isnan(found.adjusted[method][1])
        assert not found.rejected(method)[1]
    assert np.isnan(adjusted_pvalues([np.nan], Adjustment.HOLM)).all()


def test_result_counts_rejections_and_states_its_hurdle() -> None:
    p = np.array([0.0001, 0.004, 0.03, 0.5])
    found = many_tests(p, trials=10, level=0.95)
    assert found.tests == 10
    assert found.rejected().sum() == 3
    assert found.rejected(Adjustment.BONFERRONI).sum() == 2
    assert found.rejected(Adjustment.BENJAMINI_YEKUTIELI).sum() == 1
    np.testing.assert_allclose(found.hurdle(), stats.norm.isf(0.0025))
    np.testing.assert_allclose(found.hurdle(df=57), stats.t.isf(0.0025, 57))
    assert isinstance(found.share, NotApplicable)
    assert "4 p-values are too few" in found.share.reason
    assert Adjustment.HOLM.controls == "probability of any false rejection"
    assert Adjustment.BENJAMINI_YEKUTIELI.controls == "false discovery rate"


def test_a_tie_with_the_size_rejects() -> None:
    # Bonferroni at exactly 5%: 5·0.01, which floating point may put a hair above.
    assert many_tests([0.01, 0.5, 0.6, 0.7, 0.8]).rejected(Adjustment.BONFERRONI)[0]


def test_hurdles_are_the_tails_they_promise() -> None:
    for tests in (1, 7, 300):
        each = single_test_level(tests, 0.95, Hurdle.SIDAK)
        assert (1 - each) ** tests == pytest.approx(0.95, rel=1e-12)
        assert single_test_level(tests, 0.95) == pytest.approx(0.05 / tests)
        assert 2 * stats.t.sf(t_hurdle(tests, 0.95, Hurdle.SIDAK, df=40), 40) == pytest.approx(each)
        assert t_hurdle(tests, 0.95, Hurdle.SIDAK) <= t_hurdle(tests, 0.95) + 1e-12


def test_stepwise_hurdles_reject_what_the_adjusted_pvalues_do() -> None:
    t = np.sort(np.abs(np.random.default_rng(7).normal(1.2, 1.5, 40)))[::-1]
    for trials in (40, 90):
        found = many_tests(2 * stats.t.sf(t, 55), trials=trials).rejected(Adjustment.BENJAMINI_HOCHBERG)
        hurdles = stepwise_t_hurdles(40, trials, 0.95, df=55)
        passing = np.flatnonzero(t >= hurdles)
        expected = np.arange(40) <= (passing.max() if passing.size else -1)
        np.testing.assert_array_equal(found, expected)
        assert hurdles[0] == pytest.approx(t_hurdle(trials, 0.95, df=55))
    assert stepwise_t_hurdles(3, 3, 0.95)[-1] == pytest.approx(stats.norm.isf(0.025))
    with pytest.raises(SettingError, match="5 ratios came for 4 tests"):
        stepwise_t_hurdles(5, 4, 0.95)


def test_share_of_true_nulls_against_a_literal_loop() -> None:
    rng = np.random.default_rng(1)
    p = np.concatenate([rng.uniform(size=60), rng.beta(0.2, 8, size=40)])
    for cut in (0.0, 0.25, 0.5):
        expected = sum(1 for value in p if value > cut) / ((1 - cut) * 100)
        assert null_share_at(p, cut) == pytest.approx(min(expected, 1.0))
    found = null_share(p)
    assert not isinstance(found, NotApplicable)
    cuts = [k / 20 for k in range(1, 20)]
    estimates = [sum(1 for v in p if v > c) / ((1 - c) * 100) for c in cuts]
    floor = np.quantile(estimates, 0.1)
    # Binomial variance of #{p > λ} over (N(1 − λ))², plus the squared distance from the lowest decile.
    errors = []
    for c, estimate in zip(cuts, estimates, strict=True):
        share_above = estimate * (1 - c)
        errors.append(100 * share_above * (1 - share_above) / (100 * (1 - c)) ** 2 + (estimate - floor) ** 2)
    best = int(np.argmin(errors))
    assert found.cut == pytest.approx(cuts[best])
    assert found.value == pytest.approx(min(estimates[best], 1.0))


@pytest.mark.simulation
@pytest.mark.parametrize("share", [0.5, 0.8, 1.0])
def test_share_of_true_nulls_is_found(share: float) -> None:
    rng = np.random.default_rng(5)
    found = []
    for _ in range(200):
        z = rng.standard_normal(400) + np.where(np.arange(400) < 400 * share, 0.0, 3.5)
        found.append(null_share(2 * stats.norm.sf(np.abs(z))).value)
    assert abs(np.mean(found) - share) < 0.05


@pytest.mark.simulation
def test_holm_keeps_the_error_rate_over_all_trials() -> None:
    # 30 true nulls were tried, the ten smallest p-values are shown: naming the trials keeps 5%, not naming fails.
    rng = np.random.default_rng(12)
    named = unnamed = 0
    for _ in range(1500):
        shown = np.sort(rng.uniform(size=30))[:10]
        named += adjusted_pvalues(shown, Adjustment.HOLM, trials=30).min() <= 0.05
        unnamed += adjusted_pvalues(shown, Adjustment.HOLM).min() <= 0.05
    assert abs(named / 1500 - 0.05) < 0.0187  # 3.3 Monte Carlo errors
    assert unnamed / 1500 > 0.1


def test_bad_arguments_are_refused() -> None:
    with pytest.raises(InputError, match="p-value 2 is 1.2"):
        many_tests([0.1, 1.2])
    with pytest.raises(InputError, match="shape"):
        many_tests([[0.1]])
    with pytest.raises(SettingError, match="trials is 0"):
        many_tests([0.1], trials=0)
    with pytest.raises(InputError, match="level"):
        many_tests([0.1], level=1.0)
    with pytest.raises(SettingError, match="0 tests"):
        t_hurdle(0, 0.95)
    with pytest.raises(InputError, match="degrees of freedom"):
        t_hurdle(3, 0.95, df=0)
    with pytest.raises(InputError, match="cut"):
        null_share_at([0.1], 1.0)
    with pytest.raises(InputError, match="No p-value"):
        null_share_at([np.nan], 0.5)


def test_ten_thousand_pvalues() -> None:
    p = np.random.default_rng(0).uniform(size=10_000)
    found = many_tests(p, trials=20_000)
    assert found.tests == 20_000
    assert 0.9 < found.share.value <= 1.0
