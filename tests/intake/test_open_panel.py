"""Files and frames to a panel: the main road."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from soffit.errors import InputError, SettingError
from soffit.intake import Excess, Frequency, Panel, Severity, Units, open_panel
from soffit.intake.record import EntryKind


def said(panel: Panel, kind: EntryKind, text: str, severity: Severity | None = None) -> bool:
    return any(
        text in e.message and (severity is None or e.severity is severity) for e in panel.record.of(kind)
    )


def test_frames_and_csv_files_give_the_same_panel(frames, tmp_path):
    assets, factors = frames
    assets.to_csv(tmp_path / "returns.csv")
    factors.to_csv(tmp_path / "factors.csv")
    from_frames = open_panel(assets, factors)
    from_files = open_panel(tmp_path / "returns.csv", factors=str(tmp_path / "factors.csv"))
    assert from_files.fingerprint == from_frames.fingerprint
    pd.testing.assert_frame_equal(from_files.assets, from_frames.assets)
    np.testing.assert_array_equal(from_frames.assets, assets.sub(factors["RF"], axis=0))
    np.testing.assert_array_equal(from_frames.factors, factors[["MktRF", "SMB"]])
    assert from_frames.risk_free is not None
    np.testing.assert_array_equal(from_frames.risk_free, factors["RF"])
    assert from_frames.frequency is Frequency.MONTHLY
    assert from_frames.assets.index.dtype == "datetime64[ns]"
    assert from_files.record.reconciles()
    assert list(from_files.record.rows.index) == ["returns.csv", "factors.csv"]
    assert said(from_files, EntryKind.ROLES, "'RF' was taken as the risk-free return by its name")
    assert said(from_files, EntryKind.EXCESS, "'RF' was taken off the returns of 'Alder'", Severity.REPAIRED)


def test_fingerprint_is_known_and_moves_with_a_value(frames):
    # Held as a constant so that a change of platform, library or algorithm shows.
    dates = pd.period_range("2001-01", periods=3, freq="M")
    assets = pd.DataFrame({"A": [0.01, -0.02, 0.03]}, index=dates)
    factors = pd.DataFrame({"M": [0.02, -0.01, 0.01]}, index=dates)
    known = "98644ac6f6145ddff3716fcf9802358b480f1c5c935a7f404110ccf885937bdf"
    options = {"units": "decimal", "frequency": "monthly"}
    assert open_panel(assets, factors, **options).fingerprint == known
    assert open_panel(assets * (1 + 1e-15), factors, **options).fingerprint == known
    assert open_panel(assets * 1.001, factors, **options).fingerprint != known
    assert open_panel(assets.rename(columns={"A": "B"}), factors, **options).fingerprint != known


def test_percent_assets_against_decimal_factors_are_told_apart(frames):
    assets, factors = frames
    plain = open_panel(assets, factors)
    mixed = open_panel(assets.assign(Cedar=assets["Cedar"] * 100), factors)
    np.testing.assert_allclose(mixed.assets, plain.assets, rtol=0, atol=1e-15)
    assert said(
        mixed,
        EntryKind.UNITS,
        "Returns taken as percent, told from their size and divided by 100: 'Cedar'",
        Severity.WARNING,
    )
    assert mixed.record.coverage.loc["Cedar", "unit"] == "percent"
    assert mixed.record.coverage.loc["Alder", "unit"] == "decimal"
    whole = open_panel(assets * 100, factors)
    np.testing.assert_allclose(whole.assets, plain.assets, rtol=0, atol=1e-15)
    declared = open_panel(assets * 100, factors, units=dict.fromkeys(assets, Units.PERCENT))
    np.testing.assert_array_equal(declared.assets, whole.assets)


def test_excess_as_declared(frames):
    assets, factors = frames
    already = open_panel(assets, factors, excess=True)
    np.testing.assert_array_equal(already.assets, assets)
    assert said(already, EntryKind.EXCESS, "as declared; 'RF' was not taken off")
    raw = open_panel(assets, factors, excess=Excess.RAW, risk_free="RF")
    np.testing.assert_array_equal(raw.assets, assets.sub(factors["RF"], axis=0))
    series = open_panel(
        assets, factors.drop(columns="RF"), risk_free=factors["RF"].rename(None), excess=False
    )
    np.testing.assert_array_equal(series.assets, raw.assets)
    none = open_panel(assets, factors.drop(columns="RF"))
    np.testing.assert_array_equal(none.assets, assets)
    assert none.risk_free is None
    assert said(none, EntryKind.EXCESS, "taken as already in excess", Severity.WARNING)


def test_a_raw_factor_has_the_risk_free_return_taken_off(frames):
    assets, factors = frames
    market = factors.assign(Market=factors["MktRF"] + factors["RF"]).drop(columns="MktRF")
    panel = open_panel(assets, market, raw_factors=["Market"])
    np.testing.assert_allclose(panel.factors["Market"], factors["MktRF"], rtol=0, atol=1e-15)


def test_dates_out_of_order_are_sorted_and_said(frames):
    assets, factors = frames
    shuffled = open_panel(assets.sample(frac=1, random_state=3), factors)
    assert shuffled.fingerprint == open_panel(assets, factors).fingerprint
    assert said(shuffled, EntryKind.ORDER, "out of order, first in row", Severity.REPAIRED)
    turned = open_panel(assets[::-1], factors)
    assert said(turned, EntryKind.ORDER, "from the latest date to the earliest")


def test_duplicates_merge_when_equal_and_are_refused_when_not(frames):
    assets, factors = frames
    again = pd.concat([assets, assets.iloc[[4]]])
    panel = open_panel(again, factors)
    assert panel.fingerprint == open_panel(assets, factors).fingerprint
    assert panel.record.rows.loc["returns frame"].tolist() == [61, 60, 0, 1]
    again.iloc[-1, 2] += 0.01
    with pytest.raises(
        InputError,
        match=r"Rows 5 and 61 of returns frame are both for date 2001-05-31 but differ, first in 'Cedar'",
    ):
        open_panel(again, factors)


def test_daily_returns_are_compounded_to_monthly_factors(frames):
    _, factors = frames
    days = pd.bdate_range("2001-01-01", "2005-12-30")
    rng = np.random.default_rng(5)
    daily = pd.DataFrame(rng.normal(0.0004, 0.01, (len(days), 2)), index=days, columns=["Fir", "Gum"])
    panel = open_panel(daily, factors, excess=True)
    assert panel.frequency is Frequency.MONTHLY
    slow = {}
    for day, row in daily.iterrows():
        key = (day.year, day.month)
        slow[key] = slow.get(key, np.ones(2)) * (1 + row.to_numpy())
    np.testing.assert_allclose(panel.assets, np.array(list(slow.values())) - 1, rtol=1e-12)
    assert said(panel, EntryKind.FREQUENCY, "daily rows were compounded to 60 months", Severity.REPAIRED)
    rows = panel.record.rows.loc["returns frame"]
    assert (rows["in"], rows["used"], rows["merged"]) == (len(days), 60, len(days) - 60)
    with pytest.raises(InputError, match="daily returns cannot be made from it"):
        open_panel(daily, factors, frequency="daily")


def test_gaps_and_unequal_histories_are_kept_and_reported(frames):
    assets, factors = frames
    assets.iloc[:12, 1] = np.nan
    assets.iloc[30, 3] = np.nan
    panel = open_panel(assets.drop(assets.index[20]), factors)
    assert len(panel.dates) == 59
    assert said(panel, EntryKind.HISTORY, "'Birch' (2002-01 to 2005-12)", Severity.WARNING)
    assert said(panel, EntryKind.GAPS, "1 months have no row: 2002-09", Severity.WARNING)
    assert panel.record.coverage.loc["Doum", "gaps"] == 1
    assert int(panel.assets["Birch"].isna().sum()) == 12
    assert panel.record.rows.loc["factors frame"].tolist() == [60, 59, 1, 0]
    assert panel.record.dropped_rows == 1


def test_rows_without_a_factor_value_are_dropped_and_said(frames):
    assets, factors = frames
    factors.iloc[:5, 1] = np.nan
    panel = open_panel(assets, factors)
    assert len(panel.dates) == 55
    assert said(panel, EntryKind.ALIGNMENT, "5 rows were dropped: no value of 'SMB' (2001-01 to 2001-05)")
    assert panel.record.reconciles()
    assert panel.record.dropped_rows == 10


def test_names_are_kept_as_text(frames):
    assets, factors = frames
    name = "<script>alert(1)</script>"
    panel = open_panel(assets.rename(columns={"Alder": name}), factors)
    assert name in panel.assets.columns


def test_more_assets_than_periods_is_no_error_of_the_intake():
    rng = np.random.default_rng(1)
    dates = pd.period_range("2001-01", periods=12, freq="M")
    wide = pd.DataFrame(rng.normal(0, 0.05, (12, 40)), index=dates, columns=[f"A{i}" for i in range(40)])
    factor = pd.DataFrame({"M": rng.normal(0, 0.05, 12)}, index=dates)
    assert open_panel(wide, factor).assets.shape == (12, 40)


def test_a_wrong_choice_names_the_nearest(frames):
    assets, factors = frames
    with pytest.raises(SettingError, match="did you mean 'percent'"):
        open_panel(assets, factors, units="percnt")
    with pytest.raises(InputError, match="did you mean 'RF'"):
        open_panel(assets, factors, risk_free="Rff")
    with pytest.raises(InputError, match="did you mean 'SMB'"):
        open_panel(assets, factors, roles={"SMBB": "ignored"})


def test_copies_and_constants(frames):
    assets, factors = frames
    with pytest.raises(InputError, match="The factor 'Flat' is constant"):
        open_panel(assets, factors.assign(Flat=0.01))
    with pytest.raises(InputError, match="The factor 'Twin' is a copy of 'SMB'"):
        open_panel(assets, factors.assign(Twin=factors["SMB"]))
    with pytest.raises(InputError, match="'MktRF', 'SMB' and 'Sum' are tied"):
        open_panel(assets, factors.assign(Sum=factors["SMB"] + factors["MktRF"]))
    with pytest.raises(InputError, match="The asset 'Fund' equals the factor 'SMB'"):
        open_panel(assets.assign(Fund=factors["SMB"] + factors["RF"]), factors)
    twins = open_panel(assets.assign(Twin=assets["Elm"]), factors)
    assert said(twins, EntryKind.COPIES, "'Twin' is a copy of 'Elm'", Severity.WARNING)


def test_the_french_file_of_arch_as_it_comes():
    # Mean, standard deviation and so the ratio: arch's copy of the French factors, divisor T-1.
    from arch.data import frenchdata

    panel = open_panel(frenchdata.load())
    market = panel.factors.loc[:"2018-10", "Mkt-RF"]
    assert str(market.index[0].date()) == "1926-07-31"
    assert market.mean() / market.std() * np.sqrt(12) == pytest.approx(0.43, abs=0.005)
    assert said(
        panel,
        EntryKind.DATES,
        "whole numbers such as 192607 had been taken for a time since 1970",
        Severity.REPAIRED,
    )
    assert said(panel, EntryKind.UNITS, "percent, told from their size and divided by 100", Severity.REPAIRED)
    assert panel.record.reconciles()


def test_one_frame_with_assets_and_factors():
    from linearmodels.datasets import french

    data = french.load()
    panel = open_panel(data)
    assert list(panel.factors.columns) == ["MktRF", "SMB", "HML", "Mom"]
    assert panel.assets.shape == (819, 30)
    np.testing.assert_array_equal(panel.assets["NoDur"], data["NoDur"] - data["RF"])
