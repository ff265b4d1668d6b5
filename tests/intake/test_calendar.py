"""Frequencies, period ends, compounding, and prices on the way."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from soffit.errors import InputError
from soffit.intake import Frequency, Severity, open_panel
from soffit.intake.record import EntryKind


def numbers(index: pd.DatetimeIndex, columns: int, seed: int, size: float) -> pd.DataFrame:
    rng = np.random.default_rng(seed)
    return pd.DataFrame(rng.normal(0, size, (len(index), columns)), index, [f"A{i}" for i in range(columns)])


def messages(panel, kind: EntryKind) -> str:
    return " ".join(entry.message for entry in panel.record.of(kind))


@pytest.mark.parametrize(
    ("freq", "frequency", "ends"),
    [
        ("B", Frequency.DAILY, ["2001-01-01", "2001-01-02"]),
        ("W-FRI", Frequency.WEEKLY, ["2001-01-05", "2001-01-12"]),
        ("W-WED", Frequency.WEEKLY, ["2001-01-03", "2001-01-10"]),
        ("MS", Frequency.MONTHLY, ["2001-01-31", "2001-02-28"]),
        ("BME", Frequency.MONTHLY, ["2001-01-31", "2001-02-28"]),
        ("QE-DEC", Frequency.QUARTERLY, ["2001-03-31", "2001-06-30"]),
        ("QS-JAN", Frequency.QUARTERLY, ["2001-03-31", "2001-06-30"]),
        ("QE-JAN", Frequency.QUARTERLY, ["2001-01-31", "2001-04-30"]),
        ("YE-DEC", Frequency.ANNUAL, ["2001-12-31", "2002-12-31"]),
        ("YS-JAN", Frequency.ANNUAL, ["2001-12-31", "2002-12-31"]),
        ("YE-JUN", Frequency.ANNUAL, ["2001-06-30", "2002-06-30"]),
    ],
)
def test_frequency_is_told_and_dates_are_period_ends(freq, frequency, ends):
    index = pd.date_range("2001-01-01", periods=40, freq=freq)
    panel = open_panel(numbers(index, 2, 1, 0.03), excess=True)
    assert panel.frequency is frequency
    assert [str(day.date()) for day in panel.dates[:2]] == ends
    assert len(panel.dates) == 40


def test_periods_a_year():
    assert [one.periods_per_year for one in Frequency] == [252, 52, 12, 4, 1]
    assert [one.noun for one in Frequency] == ["day", "week", "month", "quarter", "year"]


def test_years_and_quarters_as_text():
    years = numbers(pd.RangeIndex(40), 1, 3, 0.1).set_axis([str(1970 + i) for i in range(40)])
    panel = open_panel(years, excess=True)
    assert panel.frequency is Frequency.ANNUAL
    assert str(panel.dates[0].date()) == "1970-12-31"
    quarters = numbers(pd.RangeIndex(40), 1, 3, 0.1).set_axis(
        [f"{1970 + i // 4}Q{1 + i % 4}" for i in range(40)]
    )
    assert open_panel(quarters, excess=True).frequency is Frequency.QUARTERLY


def test_weeks_that_end_on_different_days_are_refused():
    fridays = numbers(pd.date_range("2001-01-05", periods=60, freq="W-FRI"), 1, 1, 0.02)
    wednesdays = numbers(pd.date_range("2001-01-03", periods=60, freq="W-WED"), 1, 2, 0.02).rename(
        columns={"A0": "F"}
    )
    with pytest.raises(InputError, match="weeks of the sources end on different days"):
        open_panel(fridays, wednesdays)


def test_months_are_compounded_to_quarters():
    months = numbers(pd.date_range("2001-01-31", periods=60, freq="ME"), 2, 1, 0.03)
    panel = open_panel(months, frequency="quarterly", excess=True)
    expected = (1 + months).to_numpy().reshape(20, 3, 2).prod(axis=1) - 1
    np.testing.assert_allclose(panel.assets, expected, rtol=0, atol=1e-15)


def test_daily_prices_become_monthly_returns_from_the_last_prices():
    days = pd.bdate_range("2000-12-20", "2003-12-31")
    returns = numbers(days, 2, 4, 0.01)
    prices = 100 * (1 + returns).cumprod()
    prices.iloc[100:103, 1] = np.nan
    factors = numbers(pd.date_range("2001-01-31", "2003-12-31", freq="ME"), 1, 5, 0.04).rename(
        columns={"A0": "F"}
    )
    panel = open_panel(prices, factors)
    last = prices.ffill().groupby(prices.index.to_period("M")).last()
    np.testing.assert_allclose(panel.assets, last.pct_change().iloc[1:], rtol=0, atol=1e-13)
    assert panel.record.coverage.loc["A0", "unit"] == "prices"


def test_no_return_across_a_gap_of_prices():
    months = pd.date_range("2000-12-31", periods=61, freq="ME")
    prices = 100 * (1 + numbers(months, 2, 4, 0.03)).cumprod()
    prices.iloc[20, 0] = np.nan
    panel = open_panel(prices.drop(months[40]), excess=True)
    assert list(panel.assets.index[panel.assets["A0"].isna()]) == [months[20], months[21]]
    assert not panel.assets["A1"].isna().any()
    assert months[41] not in panel.dates
    assert "1 rows were dropped: no asset has a value" in messages(panel, EntryKind.ALIGNMENT)
    assert "prices follow a gap and so have no return" in messages(panel, EntryKind.PRICES)


def test_a_monthly_column_among_daily_ones():
    days = pd.bdate_range("2001-01-01", "2003-12-31")
    daily = numbers(days, 2, 6, 0.01)
    ends = daily.groupby(days.to_period("M")).tail(1).index
    slow = pd.Series(np.random.default_rng(1).normal(0, 0.04, len(ends)), ends)
    panel = open_panel(daily.assign(Index=slow), roles={"Index": "traded factor"}, excess=True)
    assert panel.frequency is Frequency.MONTHLY
    np.testing.assert_array_equal(panel.factors["Index"], slow)
    expected = (1 + daily).groupby(days.to_period("M")).prod() - 1
    np.testing.assert_allclose(panel.assets, expected, rtol=0, atol=1e-14)
    assert "'Index' has monthly values among daily rows" in messages(panel, EntryKind.FREQUENCY)


def test_a_part_month_is_dropped_and_a_thin_one_has_no_value():
    days = pd.bdate_range("2001-01-20", "2003-12-31")
    daily = numbers(days, 2, 6, 0.01)
    daily.loc["2002-03-05":"2002-03-25", "A1"] = np.nan
    daily.loc["2002-05-07", "A1"] = np.nan
    panel = open_panel(daily, frequency="monthly", excess=True)
    assert str(panel.dates[0].date()) == "2001-02-28"
    assert "2001-01 is not complete" in messages(panel, EntryKind.FREQUENCY)
    assert list(panel.assets.index[panel.assets["A1"].isna()]) == [pd.Timestamp("2002-03-31")]
    assert "no value for a month with too few rows, in 'A1' (1)" in messages(panel, EntryKind.MISSING)
    assert "compounded over the rows that have a value, in 'A1' (1)" in messages(panel, EntryKind.MISSING)
    assert panel.record.dropped_rows == 1
    assert panel.record.reconciles()


def test_a_thin_month_inside_is_kept_and_said_and_a_nearly_empty_one_dropped():
    days = pd.bdate_range("2001-01-01", "2002-12-31")
    thin = days[(days >= "2001-09-11") & (days <= "2001-09-18")]
    empty = days[(days >= "2002-03-04") & (days <= "2002-03-26")]
    panel = open_panel(numbers(days.drop(thin).drop(empty), 1, 6, 0.01), frequency="monthly", excess=True)
    assert "2001-09 has only 14 daily rows, against 22 usually" in messages(panel, EntryKind.GAPS)
    assert pd.Timestamp("2001-09-30") in panel.dates
    assert "2002-03 is not complete (4 daily rows, against 22 usually) and was dropped" in messages(
        panel, EntryKind.FREQUENCY
    )
    assert pd.Timestamp("2002-03-31") not in panel.dates


def test_a_mixed_source_is_compounded_when_asked():
    days = pd.bdate_range("2003-01-01", "2004-12-31")
    months = pd.date_range("2001-01-31", "2002-12-31", freq="ME")
    mixed = pd.concat([numbers(months, 1, 1, 0.03), numbers(days, 1, 2, 0.01)])
    panel = open_panel(mixed, frequency="monthly", units="decimal", excess=True)
    np.testing.assert_allclose(panel.assets["A0"].iloc[:24], mixed["A0"].iloc[:24], rtol=0, atol=1e-15)
    assert len(panel.dates) == 48
    assert any(
        e.severity is Severity.WARNING and "mixes daily and monthly rows" in e.message
        for e in panel.record.entries
    )


def test_non_traded_series_keep_their_units_and_last_value():
    days = pd.bdate_range("2001-01-01", "2002-12-31")
    level = pd.Series(20 + np.arange(len(days)) / 10, days)
    panel = open_panel(
        numbers(days, 1, 3, 0.01).assign(Level=level),
        roles={"Level": "non-traded factor"},
        frequency="monthly",
        excess=True,
    )
    np.testing.assert_array_equal(panel.non_traded["Level"], level.groupby(days.to_period("M")).last())


def test_holidays_and_long_gaps_of_daily_rows():
    days = pd.bdate_range("2001-01-01", "2001-12-31")
    holes = days.drop(days[(days > "2001-09-10") & (days < "2001-09-24")])
    panel = open_panel(numbers(holes, 1, 3, 0.01), excess=True)
    assert "9 weekdays have no row" in messages(panel, EntryKind.GAPS)
    assert "14 days after 2001-09-10" in messages(panel, EntryKind.GAPS)
