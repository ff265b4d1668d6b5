"""The hedge through the study: annual tables, unequal histories, settings as typed, refusals."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from tests.universes import INDUSTRIES

from soffit.demo import demo_study
from soffit.errors import EstimationError, SettingError
from soffit.estimate.regression import least_squares
from soffit.estimate.statistic import NotApplicable
from soffit.hedge.costs import CostRates, LegKind, hedge_costs
from soffit.hedge.delivery import report_walk
from soffit.hedge.ticket import Instrument
from soffit.hedge.walk_forward import WalkSchedule, walk_forward
from soffit.hedge.weights import HedgeRule, hedge_ratios
from soffit.settings import CeilingForm, HedgeBeta, Histories
from soffit.study import BookAlpha, Study

FACTORS = ["MktRF", "SMB", "HML", "Mom"]


@pytest.fixture(scope="module")
def us(french: pd.DataFrame) -> Study:
    return Study.open(french[[*INDUSTRIES, "RF"]], french[FACTORS], risk_free="RF").changed(ceiling=1.3)


@pytest.fixture(scope="module")
def arrays(french: pd.DataFrame) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    returns = french[INDUSTRIES].sub(french["RF"], axis=0).to_numpy()
    return returns, french[FACTORS].to_numpy(), french["RF"].to_numpy()


def test_hedge_table_is_the_array_result_in_annual_units(us: Study, arrays: tuple[np.ndarray, ...]) -> None:
    returns, factors, _ = arrays
    table, plain, regression = us.hedge().table, hedge_ratios(returns, factors), us.regression().table
    np.testing.assert_allclose(table[[f"ratio {name}" for name in FACTORS]], plain.ratios, atol=1e-10)
    np.testing.assert_allclose(table["alpha"], regression["alpha"], atol=1e-12)
    np.testing.assert_allclose(table["volatility"], regression["sigma"], atol=1e-12)
    np.testing.assert_allclose(table["effectiveness"], regression["r2"], atol=1e-12)
    np.testing.assert_allclose(table["appraisal"], regression["appraisal"], atol=1e-10)
    assert (table["last"] == pd.Timestamp("2017-03-31")).all()


def test_latest_hedge_is_the_last_window_alone(us: Study, arrays: tuple[np.ndarray, ...]) -> None:
    returns, factors, _ = arrays
    latest = us.changed({"hedge.window": 48}).hedge(latest=True)
    plain = hedge_ratios(returns[-48:], factors[-48:])
    np.testing.assert_allclose(latest.ratios, plain.ratios, atol=1e-10)
    assert (latest.table["periods"] == 48).all()
    wide = us.changed({"hedge.window_kind": "expanding"}).hedge(latest=True)
    np.testing.assert_allclose(wide.ratios, us.hedge().ratios, atol=1e-12)


def test_walk_is_the_array_walk_in_annual_units(us: Study, arrays: tuple[np.ndarray, ...]) -> None:
    returns, factors, rates = arrays
    study = us.changed({"hedge.hold": 3, "hedge.lag": 1, "hedge.beta": "Vasicek", "hedge.window": 72})
    walk = study.walk_forward()
    plain = walk_forward(
        returns,
        factors,
        HedgeRule(beta=HedgeBeta.VASICEK),
        WalkSchedule(window=72, hold=3, lag=1),
        risk_free=rates,
    )
    report = report_walk(plain)
    table, gap = walk.table, walk.gap
    np.testing.assert_allclose(walk.walk.hedged, plain.hedged, atol=1e-12)
    np.testing.assert_allclose(table["volatility"], report.delivered.volatility * np.sqrt(12), atol=1e-10)
    np.testing.assert_allclose(table["promised_alpha"], report.promised.alpha * 12, atol=1e-10)
    np.testing.assert_allclose(table["appraisal"], report.delivered.appraisal * np.sqrt(12), atol=1e-8)
    np.testing.assert_allclose(table["beta HML"], report.delivered.beta[:, 2], atol=1e-10)
    parts = gap[["residual_risk", "estimation", "drift", "holding", "rule"]].sum(axis=1)
    np.testing.assert_allclose(parts, gap["whole"], atol=1e-12)
    np.testing.assert_allclose((gap["delivered"] / gap["promised"]) ** 2 - 1, gap["whole"], atol=1e-12)
    assert walk.hedged_dates[0] == pd.Timestamp("1955-02-28")
    path = walk.path("Hlth")
    np.testing.assert_allclose(path["delivered"], plain.hedged[:, INDUSTRIES.index("Hlth")], atol=1e-12)
    assert path["promised"].mean() * 12 == pytest.approx(table.loc["Hlth", "hindsight_alpha"], abs=1e-12)
    held = walk.ratios("Hlth")
    np.testing.assert_allclose(
        path["delivered"], path["unhedged"] - (held * factors[73:]).sum(axis=1), atol=1e-12
    )
    found = walk.residual_betas("Hlth")
    assert not isinstance(found, NotApplicable)
    last = least_squares(path[["delivered"]].to_numpy()[-72:], factors[-72:])
    np.testing.assert_allclose(found[0].iloc[-1], last.coefficients[0, 1:], atol=1e-10)
    np.testing.assert_allclose(found[1].iloc[-1], last.errors[0, 1:], atol=1e-10)


def test_costs_are_converted_from_basis_points_once(us: Study, arrays: tuple[np.ndarray, ...]) -> None:
    returns, factors, rates = arrays
    study = us.changed(
        {
            "costs.asset_half_spread": 15.0,
            "costs.factor_half_spread": 4.0,
            "costs.financing": 24.0,
            "costs.borrow": 36.0,
            "costs.half_spreads": {"Mom": 20.0, "Utils": 5.0},
        }
    )
    costs = study.costs(
        kinds={"Mom": "long-short", "MktRF": LegKind.DERIVATIVE}, short=["Other"], borrowed=0.5
    )
    walk = walk_forward(returns, factors, risk_free=rates)
    asset = np.full(12, 15e-4)
    asset[INDUSTRIES.index("Utils")] = 5e-4
    plain = hedge_costs(
        walk,
        report_walk(walk),
        CostRates(
            np.array([4e-4, 4e-4, 4e-4, 20e-4]),
            asset,
            24e-4 / 12,
            36e-4 / 12,
            (LegKind.DERIVATIVE, LegKind.CASH, LegKind.CASH, LegKind.LONG_SHORT),
            0.5,
        ),
        short=np.array([name == "Other" for name in INDUSTRIES]),
    )
    table = costs.table
    np.testing.assert_allclose(table["cost"], plain.total * 12, atol=1e-12)
    np.testing.assert_allclose(table["net_alpha"], plain.net_alpha * 12, atol=1e-12)
    np.testing.assert_allclose(table["turnover"], plain.turnover.sum(axis=1) * 12, atol=1e-10)
    assert table.loc["Other", "side"] == "short"
    assert table.loc["Other", "gross_alpha"] > 0
    np.testing.assert_allclose(
        table["gross_alpha"] - table["net_alpha"],
        table[["leg_trading", "asset_trading", "borrow", "financing"]].sum(axis=1),
        atol=1e-14,
    )
    ladder = costs.ladder("Hlth")
    assert ladder.iloc[0] == pytest.approx(table.loc["Hlth", "gross_alpha"])
    assert ladder.iloc[-1] == pytest.approx(table.loc["Hlth", "net_alpha"])
    assert (ladder.diff().dropna() <= 0).all()


def test_ceiling_on_net_alphas_agrees_with_its_own_inputs(us: Study) -> None:
    costs = us.costs()
    under = costs.under(1.3, CeilingForm.ON_FACTORS)
    came = costs.walk.report.delivered
    theta = np.sqrt(came.theta2 * 12)
    np.testing.assert_allclose(under["needed"], np.hypot(costs.table["net_appraisal"], theta), rtol=1e-10)
    np.testing.assert_allclose(
        under["bound"], np.sqrt(1.3**2 - theta**2) * came.sigma * np.sqrt(12), rtol=1e-10
    )
    alone = costs.under(0.3, CeilingForm.ALONE)
    over = costs.table["net_appraisal"].abs() > 0.3
    assert ((alone["needed"] > 0.3) == over).all()
    # The p-value of |AR| <= bound is below a half only where the estimate is well beyond the bound.
    assert (alone.loc[~over, "p"] > 0.3).all()


def test_results_are_shared_until_what_they_depend_on_changes(us: Study) -> None:
    walk = us.walk_forward()
    assert us.changed(ceiling=0.4).walk_forward() is walk
    assert us.changed({"costs.borrow": 100.0}).walk_forward() is walk
    assert us.changed({"costs.borrow": 100.0}).costs() is not us.costs()
    assert us.changed({"hedge.window": 61}).walk_forward() is not walk
    dropping = us.changed({"hedge.drop_legs": True})
    assert dropping.walk_forward() is not walk
    # Where legs are dropped for their costs, costs do matter to the hedge.
    assert dropping.changed({"costs.borrow": 100.0}).walk_forward() is not dropping.walk_forward()


def test_unequal_histories() -> None:
    demo = demo_study()
    assert demo.settings.histories is Histories.OWN
    table = demo.hedge().table
    assert table["periods"].nunique() == 2
    walk = demo.walk_forward()
    periods = walk.table["periods"]
    assert periods["Rowan Event"] == 24
    assert (periods.drop("Rowan Event") == 180).all()
    common = demo.changed(histories=Histories.COMMON).walk_forward()
    for name in ("volatility", "promised_volatility", "alpha"):
        assert common.table.loc["Rowan Event", name] == pytest.approx(
            walk.table.loc["Rowan Event", name], abs=1e-12
        )
    # Shrinkage pulls towards the mean over all assets, also one alone in its block.
    shrunk = demo.changed({"hedge.beta": "Vasicek"}).hedge().ratios
    centre = demo.hedge().ratios.mean()
    moved = (shrunk.loc["Rowan Event"] - centre).abs() <= (
        demo.hedge().ratios.loc["Rowan Event"] - centre
    ).abs()
    assert moved.all()
    longer = demo.changed({"hedge.window": 80, "hedge.lag": 2})
    assert longer.walk_forward().missing is not None
    assert np.isnan(longer.walk_forward().table.loc["Rowan Event", "volatility"])
    assert np.isnan(longer.costs().table.loc["Rowan Event", "net_alpha"])
    assert "Rowan Event" not in longer.costs().under(2.0, CeilingForm.ALONE).index
    found = longer.walk_forward().residual_betas("Rowan Event")
    assert isinstance(found, NotApplicable)


def test_book_of_all_assets_has_the_joint_tests_sharpe_ratio(us: Study) -> None:
    book = us.book()
    assert book.sharpe == pytest.approx(us.joint_test().combined_sharpe, rel=1e-10)
    assert not book.fits
    table = book.table
    assert table["alpha_share"].sum() == pytest.approx(1.0)
    np.testing.assert_allclose(table["alpha"], us.regression().alpha, atol=1e-12)
    scale = book.alpha_scale
    assert not isinstance(scale, NotApplicable)
    theta = us.joint_test().factors_sharpe
    assert scale == pytest.approx(np.sqrt((1.3**2 - theta**2) / (book.sharpe**2 - theta**2)))
    # What leaving one out costs is the difference to the book without it.
    without = us.book([name for name in INDUSTRIES if name != "Hlth"])
    adds, out = book.adds, without.adds
    assert not isinstance(adds, NotApplicable)
    assert not isinstance(out, NotApplicable)
    assert adds["Hlth"] == pytest.approx(book.sharpe - without.sharpe, rel=1e-9)
    assert out["Hlth"] == pytest.approx(adds["Hlth"], rel=1e-9)


def test_book_on_shrunk_and_net_alphas(us: Study) -> None:
    raw, shrunk, net = (us.book(alphas=kind) for kind in BookAlpha.__members__.values())
    # Pástor and Stambaugh (1999) with the k of Barillas and Shanken (2018): one weight k/(k + a) for all.
    theta2, T = raw.book.theta2, 819
    k, a = (1.3**2 / 12 - theta2) / 12, (1 + theta2) / T
    np.testing.assert_allclose(shrunk.alphas, raw.alphas * k / (k + a), rtol=1e-10)
    assert shrunk.sharpe < raw.sharpe
    assert (np.abs(net.alphas) <= np.abs(raw.alphas)).all()
    assert (net.alphas * raw.alphas >= 0).all()
    short = us.costs(short=[name for name, alpha in us.regression().alpha.items() if alpha < 0])
    paid = np.abs(raw.alphas) - np.abs(net.alphas)
    np.testing.assert_allclose(paid, np.minimum(short.table["cost"] / 12, np.abs(raw.alphas)), atol=1e-14)
    tight = us.book(position_limit=0.5, gross_limit=2.0)
    assert tight.book.limited
    assert tight.table["weight"].abs().max() <= 0.5 + 1e-9
    assert tight.sharpe < raw.sharpe
    with pytest.raises(EstimationError, match="above the ceiling of 1.00"):
        us.changed(ceiling=1.0).book(alphas="shrunk under the ceiling")
    with pytest.raises(SettingError, match="no asset 'Healt'"):
        us.book(["Healt"])
    with pytest.raises(SettingError, match=r"alphas='raw'"):
        us.book(alphas="raw")
    with pytest.raises(EstimationError, match="names no asset"):
        us.book([])
    demo = demo_study()
    with pytest.raises(EstimationError, match="'Rowan Event' is not in the joint block"):
        demo.book(["Rowan Event", "Maple Macro"])


def test_ticket_from_the_latest_window(us: Study) -> None:
    legs = {name: Instrument(f"{name} basket", 50.0) for name in FACTORS}
    ticket = us.ticket({"BusEq": 1e6, "Hlth": -2e6}, legs, as_of="2017-05-15")
    ratios = us.hedge(latest=True).ratios
    wanted = -(1e6 * ratios.loc["BusEq"] - 2e6 * ratios.loc["Hlth"])
    np.testing.assert_allclose([order.target for order in ticket.orders], wanted, rtol=1e-12)
    assert str(ticket.estimated_through) == "2017-03-31"
    with pytest.raises(EstimationError, match="62 days before"):
        us.ticket({"BusEq": 1e6}, legs, as_of="2017-06-01")
    assert us.changed({"hedge.hold": 2}).ticket({"BusEq": 1e6}, legs, as_of="2017-06-01").orders
    with pytest.raises(SettingError, match="leg 'Mom' has no instrument"):
        us.ticket({"BusEq": 1e6}, {name: legs[name] for name in FACTORS[:3]}, as_of="2017-05-15")
    with pytest.raises(SettingError, match="no asset 'BusEg'.*'BusEq'"):
        us.ticket({"BusEg": 1e6}, legs, as_of="2017-05-15")
    with pytest.raises(SettingError, match="no hedge leg 'Momentum'"):
        us.ticket({"BusEq": 1e6}, {**legs, "Momentum": legs["Mom"]}, as_of="2017-05-15")
    with pytest.raises(SettingError, match="names no asset"):
        us.ticket({}, legs, as_of="2017-05-15")
    # Legs that are dropped everywhere need no instrument.
    bare = us.changed({"hedge.drop_legs": True, "costs.borrow": 10_000.0})
    assert bare.ticket({"BusEq": 1e6}, {}, as_of="2017-05-15").orders == ()


def test_mimicking_a_factor_that_cannot_be_bought(french: pd.DataFrame) -> None:
    rng = np.random.default_rng(3)
    frame = french.loc["1960":"1999"]
    macro = (0.4 * frame["MktRF"] - 0.3 * frame["HML"] + rng.normal(0, 0.04, len(frame))).rename("Macro")
    macro.iloc[:24] = np.nan
    returns = frame[INDUSTRIES].sub(frame["RF"], axis=0)
    study = Study.open(
        returns, frame[["MktRF", "HML"]].join(macro), excess=True, roles={"Macro": "non-traded factor"}
    )
    found = study.mimicking(["MktRF", "HML"])
    assert found.periods == len(frame) - 24
    fit = least_squares(macro.to_numpy()[24:, None], frame[["MktRF", "HML"]].to_numpy()[24:])
    np.testing.assert_allclose(found.weights.loc["Macro"], fit.coefficients[0, 1:], atol=1e-12)
    assert len(found.returns) == len(frame)
    assert found.tests["Macro"].pvalue < 1e-6
    with pytest.raises(SettingError, match="no asset or factor 'Mkt'"):
        study.mimicking(["Mkt"])
    with pytest.raises(SettingError, match="no non-traded factor 'Micro'"):
        study.mimicking(["MktRF"], ["Micro"])
    with pytest.raises(SettingError, match="has no non-traded factor"):
        demo_study().mimicking(["Equity"])


def test_settings_that_cannot_be_followed_are_refused(us: Study) -> None:
    with pytest.raises(SettingError, match="gross cap of 0 admits no hedge"):
        us.changed({"hedge.gross_cap": 0.0}).hedge()
    with pytest.raises(SettingError, match="'Healt'"):
        us.changed({"costs.half_spreads": {"Healt": 3.0}}).costs()
    with pytest.raises(SettingError, match="a cost cannot be negative"):
        us.changed({"costs.half_spreads": {"Hlth": -3.0}})
    with pytest.raises(SettingError, match="costs.borrow"):
        us.changed({"costs.borrow": -1.0})
    with pytest.raises(SettingError, match="no hedge leg 'Momentum'"):
        us.costs(kinds={"Momentum": "cash"})
    with pytest.raises(SettingError, match="kinds"):
        us.costs(kinds={"Mom": "swap"})
    with pytest.raises(SettingError, match="borrowed share"):
        us.costs(borrowed=2.0)
    with pytest.raises(EstimationError, match="window of 900"):
        us.changed({"hedge.window": 900}).walk_forward()
    with pytest.raises(EstimationError, match="'NoDur' has 819 periods and the hedge window has 900"):
        us.changed({"hedge.window": 900}).hedge(latest=True)
    with pytest.raises(EstimationError, match="too short for 4 hedge legs"):
        us.changed({"hedge.window": 5}).walk_forward()
    with pytest.raises(SettingError, match="no asset 'Helth'"):
        us.walk_forward().path("Helth")
