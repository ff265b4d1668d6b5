"""Survivors, backfill, labels, roles, and vintages."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from soffit.errors import InputError, SettingError
from soffit.intake import Fees, SeriesLabel, compare_vintages, open_panel
from soffit.intake.record import EntryKind


def messages(panel, kind: EntryKind) -> str:
    return " ".join(entry.message for entry in panel.record.of(kind))


def late_starters(bonus: float) -> pd.DataFrame:
    rng = np.random.default_rng(11)
    dates = pd.date_range("2001-01-31", periods=120, freq="ME")
    frame = pd.DataFrame(rng.normal(0.003, 0.03, (120, 12)), dates, [f"Fund {i}" for i in range(12)])
    for i in range(3, 12):
        start = 5 * (i - 2)
        frame.iloc[:start, i] = np.nan
        frame.iloc[start : start + 12, i] += bonus
    return frame


def test_survivors_are_asked_about_when_none_ends_early():
    funds = late_starters(0.0)
    assert "9 of 12 assets begin late and none ends early" in messages(
        open_panel(funds, excess=True), EntryKind.HISTORY
    )
    funds.iloc[-10:, 4] = np.nan
    assert "none ends early" not in messages(open_panel(funds, excess=True), EntryKind.HISTORY)


def test_backfill_is_asked_about_and_the_first_periods_can_go():
    panel = open_panel(late_starters(0.03), excess=True)
    assert "may have been filled in backwards" in messages(panel, EntryKind.HISTORY)
    assert "filled in backwards" not in messages(
        open_panel(late_starters(0.0), excess=True), EntryKind.HISTORY
    )
    shorter = open_panel(late_starters(0.03), excess=True, skip_first=12)
    assert "The first 12 values of every asset were taken out" in messages(shorter, EntryKind.HISTORY)
    assert "filled in backwards" not in messages(shorter, EntryKind.HISTORY)
    assert shorter.record.coverage.loc["Fund 3", "count"] == panel.record.coverage.loc["Fund 3", "count"] - 12
    with pytest.raises(SettingError, match="skip_first=-1"):
        open_panel(late_starters(0.0), excess=True, skip_first=-1)


def test_labels_by_argument_and_by_file(frames, tmp_path):
    assets, factors = frames
    labels = {"*": {"currency": "usd", "fees": "net"}, "SMB": SeriesLabel("USD")}
    panel = open_panel(assets, factors, labels=labels)
    assert panel.labels["Alder"] == SeriesLabel("USD", Fees.NET, "returns frame")
    assert panel.labels["SMB"].source == "factors frame"
    path = tmp_path / "mapping.toml"
    path.write_text(
        '[roles]\nSMB = "ignored"\n"risk-free" = ["RF"]\n'
        '[labels."*"]\ncurrency = "USD"\n[labels.Elm]\ncurrency = "EUR"\n'
    )
    with pytest.raises(InputError, match="The series differ in currencies"):
        open_panel(assets, factors, roles=path)
    mixed = open_panel(assets, factors, roles=path, mismatch="label")
    assert list(mixed.factors.columns) == ["MktRF"]
    assert mixed.labels["Elm"].currency == "EUR"
    with pytest.raises(SettingError, match="both by argument and in the mapping file"):
        open_panel(assets, factors, roles=path, labels=labels)
    with pytest.raises(SettingError, match="fees of 'Elm'='nett' is not known"):
        open_panel(assets, factors, labels={"Elm": {"fees": "nett"}})
    with pytest.raises(InputError, match="did you mean 'Elm'"):
        open_panel(assets, factors, labels={"Ellm": {"fees": "net"}})


def test_every_role(frames):
    assets, factors = frames
    whole = assets.join(factors).assign(Growth=np.linspace(1, 3, 60), Note="x")
    roles = {
        "asset": ["Alder", "Birch"],
        "traded factor": ["MktRF", "SMB"],
        "Growth": "non-traded factor",
        "ignored": ["Cedar", "Doum", "Elm", "Note"],
        "RF": "Risk-free",
    }
    panel = open_panel(whole, roles=roles)
    assert list(panel.assets.columns) == ["Alder", "Birch"]
    assert list(panel.factors.columns) == ["MktRF", "SMB"]
    assert list(panel.non_traded.columns) == ["Growth"]
    np.testing.assert_array_equal(panel.non_traded["Growth"], np.linspace(1, 3, 60))
    with pytest.raises(InputError, match="'RF' is declared both risk-free and ignored"):
        open_panel(whole, roles={"RF": "risk-free", "ignored": ["RF"]})
    with pytest.raises(InputError, match="'RF' is both the risk-free return and declared asset"):
        open_panel(whole, roles={"RF": "asset"}, risk_free="RF")


def test_a_name_near_that_of_the_risk_free_return_is_mentioned(frames):
    assets, factors = frames
    panel = open_panel(
        assets, factors.rename(columns={"RF": "RiskFree Rates"}), roles={"RiskFree Rates": "ignored"}
    )
    assert "may be the risk-free return" not in messages(panel, EntryKind.ROLES)
    panel = open_panel(assets, factors.rename(columns={"RF": "RiskFree Rates"}))
    assert "'RiskFree Rates' may be the risk-free return by its name" in messages(panel, EntryKind.ROLES)


def test_vintages(frames):
    _, old = frames
    new = old.copy()
    new.loc["2003-04-30":"2003-06-30", "SMB"] += [0.001, -0.002, 0.0005]
    new = new.iloc[2:].assign(HML=np.random.default_rng(3).normal(0, 0.03, 58))
    later = pd.DataFrame(0.01, pd.DatetimeIndex(["2006-01-31"]), new.columns)
    result = compare_vintages(old, pd.concat([new, later]))
    assert [str(day.date()) for day in result.dates_removed] == ["2001-01-31", "2001-02-28"]
    assert [str(day.date()) for day in result.dates_added] == ["2006-01-31"]
    assert result.columns_added == ("HML",)
    assert result.columns_removed == ()
    np.testing.assert_allclose(result.changes["difference"], [0.001, -0.002, 0.0005], atol=1e-12)
    assert list(result.changes["series"]) == ["SMB"] * 3
    assert result.by_series.loc["SMB", "changed"] == 3
    assert result.by_series.loc["SMB", "largest difference"] == pytest.approx(-0.002)
    assert str(result.by_series.loc["SMB", "date"].date()) == "2003-05-31"
    assert result.by_series.loc["MktRF", "changed"] == 0
    assert not result.same
    assert not result.extended


def test_vintages_that_only_grow_or_stay(frames):
    assets, factors = frames
    longer = compare_vintages(factors.iloc[:50], open_panel(assets, factors))
    assert longer.extended
    assert not longer.same
    assert len(longer.dates_added) == 10
    in_per_cent = compare_vintages(factors, 100 * factors)
    assert in_per_cent.same
    with pytest.raises(InputError, match="0 series and 60 dates in common"):
        compare_vintages(factors, factors.add_prefix("x"))
    with pytest.raises(InputError, match="The old vintage is monthly, the new one quarterly"):
        compare_vintages(factors, open_panel(factors, frequency="quarterly"))
