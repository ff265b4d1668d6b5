"""Malformed inputs, each with its exact outcome."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from soffit.errors import SoffitError
from soffit.intake import Layout, Limits, Panel, Source, open_panel

Frame = pd.DataFrame
Make = Callable[[Frame, Frame, Path], dict[str, Any]]


@dataclass(frozen=True)
class Case:
    """A malformed input and what becomes of it.

    Parameters
    ----------
    name : str
        What is wrong.
    make : callable
        From clean assets, clean factors and a folder to the arguments of `open_panel`.
    says : tuple of str
        Words of the error, or of a record entry.
    error : bool
        Whether it is refused.
    same : bool
        Whether the panel equals that of the clean data.
    rows : tuple of int
        In, used, dropped and merged rows of the returns, when it is no error.
    """

    name: str
    make: Make
    says: tuple[str, ...]
    error: bool = False
    same: bool = True
    rows: tuple[int, int, int, int] = (60, 60, 0, 0)
    more: dict[str, Any] = field(default_factory=dict)


CASES: list[Case] = []


def refused(*says: str, **more: Any) -> Callable[[Make], Make]:
    def add(make: Make) -> Make:
        CASES.append(Case(make.__name__, make, says, error=True, more=more))
        return make

    return add


def repaired(
    *says: str, same: bool = True, rows: tuple[int, int, int, int] = (60, 60, 0, 0)
) -> Callable[[Make], Make]:
    def add(make: Make) -> Make:
        CASES.append(Case(make.__name__, make, says, same=same, rows=rows))
        return make

    return add


def text(folder: Path, content: str, name: str = "returns.csv", encoding: str = "utf-8") -> Path:
    path = folder / name
    path.write_bytes(content.encode(encoding))
    return path


def lines(assets: Frame) -> list[str]:
    return assets.to_csv(lineterminator="\n").splitlines()


def edited(assets: Frame, folder: Path, line: int, old: str, new: str) -> Path:
    rows = lines(assets)
    assert old in rows[line - 1]
    rows[line - 1] = rows[line - 1].replace(old, new, 1)
    return text(folder, "\n".join(rows))


# --- files -------------------------------------------------------------------------------------------------------


@refused("The file 'returns.csv' is empty. To mend it: export it again.")
def empty_file(a, f, d):
    return {"returns": text(d, ""), "factors": f}


@refused("returns.csv holds nothing but blanks")
def file_of_blank_lines(a, f, d):
    return {"returns": text(d, "\n \n,,\n"), "factors": f}


@refused("There is no file", "did you mean 'returns.csv'?")
def misspelt_path(a, f, d):
    text(d, "\n".join(lines(a)))
    return {"returns": d / "retruns.csv", "factors": f}


@refused("is not a file. Allowed: the path of one file.")
def path_of_a_folder(a, f, d):
    return {"returns": d, "factors": f}


@refused("returns.csv has names but no rows")
def header_only(a, f, d):
    return {"returns": text(d, lines(a)[0] + "\n"), "factors": f}


@refused("returns.csv begins with data in line 1: the names of the columns are missing")
def no_header(a, f, d):
    return {"returns": text(d, "\n".join(lines(a)[1:])), "factors": f}


@refused("'returns.csv' is not a text file")
def workbook_called_csv(a, f, d):
    return {"returns": text(d, "PK\x03\x04junk"), "factors": f}


@refused("Files that end in '.pkl' are not read", "a pickle can run code")
def pickle(a, f, d):
    return {"returns": text(d, "x", "returns.pkl"), "factors": f}


@refused("'returns.xlsx' is not a workbook")
def text_called_xlsx(a, f, d):
    return {"returns": text(d, "date,A\n", "returns.xlsx"), "factors": f}


@refused("'returns.parquet' cannot be read as Parquet")
def text_called_parquet(a, f, d):
    return {"returns": text(d, "date,A\n", "returns.parquet"), "factors": f}


@refused("The file 'returns.csv' has", "at most 100 bytes", "raise limits=Limits(file_bytes=...)")
def file_over_the_limit(a, f, d):
    return {"returns": text(d, "\n".join(lines(a))), "factors": f, "limits": Limits(file_bytes=100)}


@refused("returns frame has 60 rows and 5 columns. Allowed: at most 200 cells.")
def frame_over_the_limit(a, f, d):
    return {"returns": a, "factors": f, "limits": Limits(cells=200)}


@refused("returns is a list. Allowed: a path, a DataFrame, a database URL or a Source.")
def a_list(a, f, d):
    return {"returns": [1.0, 2.0], "factors": f}


@refused("'returns.csv' cannot be read as utf-8", "leave encoding out")
def wrong_encoding_declared(a, f, d):
    path = text(d, "\n".join(lines(a)).replace("Alder", "Ålder"), encoding="cp1252")
    return {"returns": Source(path, encoding="utf-8"), "factors": f}


@repaired("The file is not UTF-8; it was read as cp1252.", same=False)
def western_encoding(a, f, d):
    return {
        "returns": text(d, "\n".join(lines(a)).replace("Alder", "Ålder"), encoding="cp1252"),
        "factors": f,
    }


@repaired("The file is not UTF-8; it was read as utf-16.")
def utf16_file(a, f, d):
    return {"returns": text(d, "\n".join(lines(a)), encoding="utf-16"), "factors": f}


@repaired("Read 60 rows; 5 series.")
def byte_order_mark(a, f, d):
    return {"returns": text(d, "\n".join(lines(a)), encoding="utf-8-sig"), "factors": f}


# --- layout of text files ----------------------------------------------------------------------------------------


@repaired("3 lines before the names (line 5) were passed over.", "Fields are separated by ';'.")
def preamble_and_semicolons(a, f, d):
    body = a.to_csv(sep=";", lineterminator="\n")
    return {"returns": text(d, "Fund returns\nSource: desk\nAll rights reserved\n\n" + body), "factors": f}


@repaired("2 lines after the data (from line 63: 'Total of five funds') were passed over.")
def footer(a, f, d):
    return {"returns": text(d, "\n".join(lines(a)) + "\n\nTotal of five funds\n(c) the desk\n"), "factors": f}


@repaired("A further table begins at line 63; its 2 rows (from line 65) were not read.", rows=(62, 60, 2, 0))
def annual_table_below(a, f, d):
    below = "\n\n Annual returns: January-December\n,Alder,Birch,Cedar,Doum,Elm\n2001,.1,.1,.1,.1,.1\n"
    below += "2002,.1,.1,.1,.1,.1\n"
    return {"returns": text(d, "\n".join(lines(a)) + below), "factors": f}


@refused("Line 11 of returns.csv ('checked by hand') interrupts the data")
def a_remark_among_the_rows(a, f, d):
    rows = lines(a)
    return {"returns": text(d, "\n".join([*rows[:10], "checked by hand", *rows[10:]])), "factors": f}


@refused("Line 11 of returns.csv ('see') interrupts the data")
def a_wide_remark_among_the_rows(a, f, d):
    rows = lines(a)
    return {"returns": text(d, "\n".join([*rows[:10], "see,the,note,of,the,desk", *rows[10:]])), "factors": f}


@repaired("2 lines that repeat the names among the data were passed over.", "1 blank lines among the data")
def names_on_every_page(a, f, d):
    rows = lines(a)
    pages = [*rows[:20], rows[0], *rows[20:40], "", rows[0], *rows[40:]]
    return {"returns": text(d, "\n".join(pages)), "factors": f}


@refused("'x' in line 2 of returns.csv is not a date")
def first_date_spoilt_under_names_without_one(a, f, d):
    rows = lines(a)
    rows[0], rows[1] = rows[0].removeprefix("date,"), "x" + rows[1].removeprefix("2001-01-31")
    return {"returns": text(d, "\n".join(rows)), "factors": f}


@repaired("2 blank lines among the data were passed over.")
def blank_lines_among_the_rows(a, f, d):
    rows = lines(a)
    return {"returns": text(d, "\n".join([*rows[:10], "", ",,,,,", *rows[10:]])), "factors": f}


@refused("Line 61 of returns.csv has 3 fields, and there are 6 names in line 1")
def file_cut_off(a, f, d):
    rows = lines(a)
    return {"returns": text(d, "\n".join([*rows[:-1], ",".join(rows[-1].split(",")[:3])])), "factors": f}


@refused("Line 8 of returns.csv has 7 fields, and there are 6 names in line 1")
def a_field_too_many(a, f, d):
    rows = lines(a)
    rows[7] += ",0.01"
    return {"returns": text(d, "\n".join(rows)), "factors": f}


@refused("Lines 1 and 2 of returns.csv both look like names", "header=1")
def two_lines_of_names(a, f, d):
    rows = lines(a)
    return {
        "returns": text(d, "\n".join([rows[0], "date,fund,fund,fund,fund,fund", *rows[1:]])),
        "factors": f,
    }


@repaired("1 lines between the names and the data were passed over.")
def two_lines_of_names_and_the_first_declared(a, f, d):
    rows = lines(a)
    path = text(d, "\n".join([rows[0], "date,fund,fund,fund,fund,fund", *rows[1:]]))
    return {"returns": Source(path, header=1), "factors": f}


@repaired("1 columns without a name and without values were left out.")
def trailing_delimiters(a, f, d):
    return {"returns": text(d, "\n".join(row + "," for row in lines(a))), "factors": f}


@repaired(
    "A column without a name that only counts rows was left out.", "The dates were taken from column 'date'."
)
def a_counter_before_the_dates(a, f, d):
    return {"returns": text(d, a.reset_index().to_csv(lineterminator="\n")), "factors": f}


@repaired("Fields are separated by blanks.")
def columns_of_blanks(a, f, d):
    return {
        "returns": text(d, a.to_string(index_names=False).replace("0.0 ", "0.0 "), "returns.txt"),
        "factors": f,
    }


# --- names -------------------------------------------------------------------------------------------------------


@refused("Two columns of returns.csv are called 'Birch' (columns 2 and 4)")
def a_name_twice(a, f, d):
    return {"returns": edited(a, d, 1, "Doum", "Birch"), "factors": f}


@refused("Column 3 of returns.csv has no name")
def a_name_missing(a, f, d):
    return {"returns": edited(a, d, 1, "Cedar", ""), "factors": f}


@refused("'MktRF' is a column of returns frame and of factors frame")
def an_asset_named_like_a_factor(a, f, d):
    return {"returns": a.rename(columns={"Elm": "MktRF"}), "factors": f}


@refused("returns frame has column names of several levels")
def names_of_two_levels(a, f, d):
    return {"returns": pd.concat({"fund": a}, axis=1), "factors": f}


@repaired("Names were turned into text without surrounding blanks: 'Alder'.")
def a_name_with_blanks(a, f, d):
    return {"returns": a.rename(columns={"Alder": " Alder "}), "factors": f}


@refused("control character")
def a_name_with_a_line_break(a, f, d):
    return {"returns": a.rename(columns={"Alder": "Al\nder"}), "factors": f}


@repaired("'<img src=x onerror=alert(1)>'", same=False)
def a_name_of_markup(a, f, d):
    return {"returns": a.rename(columns={"Alder": "<img src=x onerror=alert(1)>"}), "factors": f}


# --- dates -------------------------------------------------------------------------------------------------------


@repaired("Dates were out of order, first in line 6 (2001-03-31) of returns.csv; the rows were sorted.")
def dates_out_of_order(a, f, d):
    rows = lines(a)
    rows[3], rows[4], rows[5] = rows[4], rows[5], rows[3]
    return {"returns": text(d, "\n".join(rows)), "factors": f}


@repaired("Rows ran from the latest date to the earliest; they were sorted.")
def newest_first(a, f, d):
    rows = lines(a)
    return {"returns": text(d, "\n".join([rows[0], *rows[:0:-1]])), "factors": f}


@repaired(
    "2 rows repeat another row of the same date (first: line 5 (2001-03-31) of returns.csv)",
    rows=(62, 60, 0, 2),
)
def rows_repeated(a, f, d):
    rows = lines(a)
    return {"returns": text(d, "\n".join([*rows[:4], rows[3], *rows[4:], rows[-1]])), "factors": f}


@refused("Lines 4 and 62 of returns.csv are both for date 2001-03-31 but differ, first in 'Alder'")
def rows_in_conflict(a, f, d):
    rows = lines(a)
    return {
        "returns": text(
            d, "\n".join([*rows, rows[3].replace("2001-03-31,", "2001-03-31,1e-2,").rsplit(",", 1)[0]])
        ),
        "factors": f,
    }


@refused("Rows 5 and 6 of returns frame are both for month 2001-05-31 but differ")
def two_days_of_one_month(a, f, d):
    index = a.index.to_list()
    index[5] = pd.Timestamp("2001-05-31")
    index[4] = pd.Timestamp("2001-05-02")
    return {"returns": a.set_axis(pd.DatetimeIndex(index)), "factors": f}


@refused("'2001-13-31' in line 14 of returns.csv is not a date written like the others (1990-03-31)")
def month_thirteen(a, f, d):
    return {"returns": edited(a, d, 14, "2002-01-31", "2001-13-31"), "factors": f}


@refused("'2001-02-30' in line 3 of returns.csv is not a date")
def the_thirtieth_of_february(a, f, d):
    return {"returns": edited(a, d, 3, "2001-02-28", "2001-02-30"), "factors": f}


@refused("'x' in line 2 of returns.csv is not a date")
def first_date_spoilt(a, f, d):
    return {"returns": edited(a, d, 2, "2001-01-31", "x"), "factors": f}


@refused("The date is missing in line 9 of returns.csv")
def a_date_missing(a, f, d):
    return {"returns": edited(a, d, 9, "2001-08-31", ""), "factors": f}


@refused("The date is missing in row 3 of returns frame")
def a_date_nat(a, f, d):
    return {"returns": a.set_axis(a.index.where(np.arange(60) != 2)), "factors": f}


@refused("can be read with the day or the month first", "date_format='%d/%m/%Y'")
def ambiguous_days(a, f, d):
    return {"returns": a.set_axis([f"0{1 + i % 9}/0{1 + i % 7}/{2001 + i}" for i in range(60)]), "factors": f}


@repaired("Dates such as '31/01/2001' are read as 2001-01-31: the day comes first.")
def day_first(a, f, d):
    return {"returns": a.set_axis(a.index.strftime("%d/%m/%Y")), "factors": f}


@repaired("Dates such as '01/31/2001' are read as 2001-01-31: the month comes first.")
def month_first(a, f, d):
    return {"returns": a.set_axis(a.index.strftime("%m/%d/%Y")), "factors": f}


@repaired("Dates such as 'Jan-01' are read as 2001-01-01: two-digit years are read as 1969 to 2068.")
def two_digit_years(a, f, d):
    return {"returns": a.set_axis(a.index.strftime("%b-%y")), "factors": f}


@repaired("whole numbers such as 200101 had been taken for a time since 1970", "read again as 2001-01")
def months_taken_for_nanoseconds(a, f, d):
    numbers = a.index.year * 100 + a.index.month
    return {
        "returns": a.set_axis(pd.DatetimeIndex(numbers.to_numpy().astype("datetime64[ns]"))),
        "factors": f,
    }


@repaired("whole numbers such as 20010131 had been taken for a time since 1970", "read again as 2001-01-31")
def days_taken_for_seconds(a, f, d):
    numbers = (a.index.year * 100 + a.index.month) * 100 + a.index.day
    return {"returns": a.set_axis(pd.DatetimeIndex(numbers.to_numpy().astype("datetime64[s]"))), "factors": f}


@repaired("a spreadsheet's count of days")
def spreadsheet_days(a, f, d):
    return {"returns": a.set_axis((a.index - pd.Timestamp("1899-12-30")).days), "factors": f}


@repaired("The time zone US/Eastern was taken off: a row counts for its local day.")
def time_zone(a, f, d):
    return {"returns": a.tz_localize("US/Eastern"), "factors": f}


@repaired("Times of day were taken off.")
def times_of_day(a, f, d):
    return {"returns": a.set_axis(a.index + pd.Timedelta(hours=16)), "factors": f}


@repaired("Periods of type 'period[M]' stand for their last day.")
def periods(a, f, d):
    return {"returns": a.to_period("M"), "factors": f}


@repaired("60 dates were moved to the end of their month (the first day of a period counts for that period)")
def first_of_the_month(a, f, d):
    return {"returns": a.set_axis(a.index.to_period("M").to_timestamp()), "factors": f}


@repaired("dates were moved to the end of their month: 2001-03-30 became 2001-03-31.")
def last_business_days(a, f, d):
    return {"returns": a.set_axis(pd.date_range("2001-01-31", periods=60, freq="BME")), "factors": f}


@refused("returns frame has no dates: its index only counts rows", "Source(frame, date='...')")
def no_dates(a, f, d):
    return {"returns": a.reset_index(drop=True), "factors": f}


@refused("The date 2999-12-31 in row 60 of returns frame is out of range")
def a_date_of_the_far_future(a, f, d):
    index = a.index.to_numpy().astype("datetime64[s]").copy()
    index[-1] = np.datetime64("2999-12-31", "s")
    return {"returns": a.set_axis(pd.DatetimeIndex(index)), "factors": f}


@refused("No column of returns.csv holds dates; line 2 begins with 'one'")
def words_for_dates(a, f, d):
    return {"returns": text(d, "\n".join(["when,A,B", "one,0.01,0.02", "two,0.01,0.03"])), "factors": f}


# --- frequency ---------------------------------------------------------------------------------------------------


@refused("returns frame has dates whose usual distance is no day, week, month, quarter or year")
def odd_distances(a, f, d):
    return {"returns": a.set_axis(pd.date_range("2001-01-31", periods=60, freq="50D")), "factors": f}


@refused("returns frame has one date", "frequency='monthly'")
def one_row(a, f, d):
    return {"returns": a.iloc[:1], "factors": f}


@refused("returns frame is daily, but monthly from 2001-01-31 to 2003-01-01", "frequency='monthly'")
def months_then_days(a, f, d):
    days = pd.bdate_range("2003-01-01", periods=120)
    rng = np.random.default_rng(0)
    tail = pd.DataFrame(rng.normal(0, 0.01, (120, 5)), days, a.columns)
    return {"returns": pd.concat([a.iloc[:23], tail]), "factors": f}


@refused("returns frame is monthly; daily returns cannot be made from it")
def a_finer_frequency_asked_for(a, f, d):
    return {"returns": a, "factors": f, "frequency": "daily"}


@refused("returns frame is weekly, and weeks do not fit into months")
def weeks_against_months(a, f, d):
    return {"returns": a.set_axis(pd.date_range("2001-01-05", periods=60, freq="W-FRI")), "factors": f}


@refused(
    "The sources have 0 dates in common: returns frame has 2001-01 to 2005-12 "
    "and factors frame has 1951-01 to 1955-12"
)
def no_common_dates(a, f, d):
    return {"returns": a, "factors": f.set_axis(pd.date_range("1951-01-31", periods=60, freq="ME"))}


@repaired("1 months have no row: 2001-08. Nothing was filled in.", same=False, rows=(59, 59, 0, 0))
def a_month_left_out(a, f, d):
    return {"returns": a.drop(a.index[7]), "factors": f}


# --- cells -------------------------------------------------------------------------------------------------------


def cell(a: Frame, row: int, name: str, value: Any) -> Frame:
    out = a.astype(object)
    out.loc[out.index[row], name] = value
    return out


@refused("Column 'Cedar' has 'n.m.' in line 7 of returns.csv", "missing=('n.m.',)", "'Cedar': 'ignored'")
def text_in_a_number_column(a, f, d):
    return {"returns": text(d, "\n".join(lines(cell(a, 5, "Cedar", "n.m.")))), "factors": f}


@refused("Column 'Cedar' has '#DIV/0!' in row 6 of returns frame")
def a_spreadsheet_error(a, f, d):
    return {"returns": cell(a, 5, "Cedar", "#DIV/0!"), "factors": f}


@repaired(
    "Cells with 'n.m.' count as no value: 'Cedar' (1).",
    "No value inside their history: 'Cedar' (1)",
    same=False,
)
def a_declared_missing_text(a, f, d):
    return {"returns": cell(a, 5, "Cedar", "n.m."), "factors": f, "missing": ("n.m.",)}


@repaired("Cells with 'N/A' count as no value: 'Cedar' (1).", same=False)
def a_known_missing_text(a, f, d):
    return {"returns": cell(a, 5, "Cedar", "N/A"), "factors": f}


@repaired("Cells with -99.99 count as no value: 'Doum' (1).", same=False)
def a_missing_code(a, f, d):
    return {"returns": cell(a, 5, "Doum", -99.99), "factors": f}


@repaired("Cells with -999 count as no value: 'Doum' (2).", "'Doum' (2001-03 to 2005-12)", same=False)
def a_missing_code_before_the_start(a, f, d):
    a.iloc[:2, 3] = -999
    return {"returns": a, "factors": f}


@repaired("Blank cells count as no value: 'Elm' (1).", "No value inside their history: 'Elm' (1)", same=False)
def a_blank_cell(a, f, d):
    return {"returns": text(d, "\n".join(lines(cell(a, 9, "Elm", "")))), "factors": f}


@refused("Column 'Elm' is infinite in row 10 of returns frame")
def an_infinite_value(a, f, d):
    a.iloc[9, 4] = np.inf
    return {"returns": a, "factors": f}


@refused("Column 'Note' holds bool, not numbers", "'Note': 'ignored'")
def true_and_false(a, f, d):
    return {"returns": a.assign(Note=True), "factors": f}


@repaired("Left out as declared: 'Note'.")
def a_text_column_ignored(a, f, d):
    return {"returns": a.assign(Note="seen"), "factors": f, "roles": {"Note": "ignored"}}


@repaired("Decimal comma read: 'Alder' (60)", "Fields are separated by ';'.")
def decimal_commas(a, f, d):
    return {"returns": text(d, a.to_csv(sep=";", decimal=",", lineterminator="\n")), "factors": f}


@refused("Numbers are written both with a decimal comma ('0,5') and with 'a decimal point'")
def decimal_commas_and_points(a, f, d):
    return {"returns": cell(a.astype(str), 3, "Birch", "0,5"), "factors": f}


@refused("'1,234' can be a thousand or a decimal number", "decimal=','")
def thousand_or_decimal(a, f, d):
    index = a.index
    return {
        "returns": pd.DataFrame({"A": [f"{1 + i % 8},{234 + i}" for i in range(60)]}, index),
        "factors": f,
    }


@repaired(
    "Thousands mark ',' taken out: 'Fund' (60).",
    "Read as prices and turned into simple returns: 'Fund'",
    same=False,
    rows=(60, 60, 0, 0),
)
def thousands_marks(a, f, d):
    prices = [f"{1000 * (1 + 0.01 * i) + (i % 7):,.2f}" for i in range(60)]
    return {"returns": a.assign(Fund=prices), "factors": f}


@repaired("Brackets read as a minus: 'Birch' (")
def negative_numbers_in_brackets(a, f, d):
    return {"returns": a.assign(Birch=[f"({-x!r})" if x < 0 else repr(x) for x in a["Birch"]]), "factors": f}


@repaired("Returns taken as percent, by their per-cent signs and divided by 100: 'Birch'.")
def per_cent_signs(a, f, d):
    return {"returns": a.assign(Birch=[f"{100 * x:.4f}%" for x in a["Birch"]]), "factors": f}


@refused("Column 'Birch' has a per-cent sign on 1 of its values and none on the rest")
def one_per_cent_sign(a, f, d):
    return {"returns": cell(a, 3, "Birch", "3.2%"), "factors": f}


# --- units, prices, excess ---------------------------------------------------------------------------------------


@refused("'Birch' of returns frame has per-cent signs but is declared decimal")
def per_cent_signs_declared_decimal(a, f, d):
    return {
        "returns": a.assign(Birch=[f"{100 * x:.4f}%" for x in a["Birch"]]),
        "factors": f,
        "units": "decimal",
    }


@repaired("'Cedar': declared percent but decimal by their size; the declaration was followed.", same=False)
def decimals_declared_per_cent(a, f, d):
    return {"returns": a, "factors": f, "units": {"Cedar": "percent"}}


@repaired(
    "'RF' could be decimal or per cent by their size; they were taken as decimal, like the returns of the other",
    same=False,
)
def a_high_risk_free_return_on_its_own(a, f, d):
    return {"returns": a, "factors": f.drop(columns="RF"), "risk_free": 2.5 * f["RF"]}


@repaired(
    "The risk-free return 'RF' is usually 18.0% a year; if the column holds yearly yields, divide it by 12",
    same=False,
)
def yearly_yields(a, f, d):
    return {"returns": a, "factors": f.assign(RF=0.015)}


@repaired("Returns taken as percent, told from their size and divided by 100: 'Cedar'.")
def one_column_in_per_cent(a, f, d):
    return {"returns": a.assign(Cedar=100 * a["Cedar"]), "factors": f}


@repaired("Returns taken as percent, told from their size and divided by 100: 'Alder'")
def per_cent_against_decimal_factors(a, f, d):
    return {"returns": 100 * a, "factors": f}


@refused("'Alder' in returns frame could be decimal or per cent: a typical value is", "units='decimal'")
def a_column_that_could_be_either(a, f, d):
    return {"returns": a[["Alder"]] * 8, "factors": f}


@repaired("'Alder' could be decimal or per cent by their size; they were taken as decimal", same=False)
def a_column_that_follows_its_neighbours(a, f, d):
    return {"returns": a.assign(Alder=3.4 * a["Alder"]), "factors": f}


@refused("is too large for returns in per cent")
def basis_points_not_declared(a, f, d):
    return {"returns": 10_000 * a, "factors": f}


@repaired("Returns taken as basis points, as declared and divided by 10,000")
def basis_points_declared(a, f, d):
    return {"returns": 10_000 * a, "factors": f, "units": dict.fromkeys(a, "basis points")}


@repaired(
    "Read as prices and turned into simple returns: 'Alder'",
    "has no return and was dropped",
    rows=(61, 60, 1, 0),
)
def prices(a, f, d):
    first = pd.DataFrame(1.0, [a.index[0] - pd.offsets.MonthEnd()], a.columns)
    return {"returns": 250 * pd.concat([first, 1 + a]).cumprod(), "factors": f}


@refused("The price of 'Alder' is -1 in row 4 (2001-04) of returns frame")
def a_negative_price(a, f, d):
    return {"returns": cell((100 * (1 + a).cumprod()), 3, "Alder", -1.0), "factors": f, "content": "prices"}


@refused("Column 'Cash' of returns frame is always positive and moves little", "content={'Cash': 'prices'}")
def prices_or_returns(a, f, d):
    return {"returns": a.assign(Cash=0.3 + 0.001 * np.arange(60)), "factors": f}


@refused("'Birch' returns -150.0% in row 8 (2001-08) of returns frame: nothing loses more than all its value")
def below_minus_one(a, f, d):
    return {"returns": cell(a, 7, "Birch", -1.5), "factors": f}


@repaired("'Birch' returns -100.0% in row 8 (2001-08) of returns frame; kept.", same=False)
def a_total_loss(a, f, d):
    return {"returns": cell(a, 7, "Birch", -1.0), "factors": f}


@refused("The name of 'Alder-RF' says that it is already an excess return", "excess=True")
def an_excess_name_beside_a_risk_free_return(a, f, d):
    return {"returns": a.rename(columns={"Alder": "Alder-RF"}), "factors": f}


@refused("Returns are declared raw, but there is no risk-free return to take off")
def raw_without_a_risk_free_return(a, f, d):
    return {"returns": a, "factors": f.drop(columns="RF"), "excess": False}


@refused("'RF' and 'T-Bill' could all be the risk-free return")
def two_risk_free_returns(a, f, d):
    return {"returns": a, "factors": f.assign(**{"T-Bill": f["RF"] * 1.01})}


@repaired("'T-Bill' has the name of a risk-free return, but another one was declared; it was left out.")
def two_risk_free_returns_and_one_declared(a, f, d):
    return {"returns": a, "factors": f.assign(**{"T-Bill": f["RF"] * 1.01}), "risk_free": "RF"}


@repaired("'RF' is in returns frame and in factors frame with the same values; it was taken once.")
def the_risk_free_return_in_both(a, f, d):
    return {"returns": a.assign(RF=f["RF"]), "factors": f}


@refused("'RF' is a column of returns frame and of factors frame")
def the_risk_free_return_in_both_and_different(a, f, d):
    return {"returns": a.assign(RF=f["RF"] + 0.001), "factors": f}


@repaired("The risk-free return 'RF' is 360.0% a year in row 6 (2001-06) of factors frame; kept.", same=False)
def a_wild_risk_free_return(a, f, d):
    return {"returns": a, "factors": cell(f, 5, "RF", 0.3)}


# --- series that say nothing, or too much ------------------------------------------------------------------------


@refused("The factor 'SMB' is constant (0.01)")
def a_constant_factor(a, f, d):
    return {"returns": a, "factors": f.assign(SMB=0.01)}


@refused("The factor 'Copy' is a copy of 'SMB'", "roles={'Copy': 'ignored'}")
def a_copied_factor(a, f, d):
    return {"returns": a, "factors": f.assign(Copy=f["SMB"])}


@refused("The factor 'Half' is an exact multiple of 'SMB'")
def a_scaled_factor(a, f, d):
    return {"returns": a, "factors": f.assign(Half=f["SMB"] / 2)}


@refused("The factors 'MktRF', 'SMB' and 'Both' are tied")
def factors_that_add_up(a, f, d):
    return {"returns": a, "factors": f.assign(Both=f["SMB"] - f["MktRF"])}


@refused("The asset 'Fund' equals the factor 'SMB' on every date", "roles={'Fund': 'ignored'}")
def an_asset_that_is_a_factor(a, f, d):
    return {"returns": a.assign(Fund=f["SMB"] + f["RF"]), "factors": f}


@repaired("The asset 'Twin' is a copy of 'Elm'; both were kept", same=False)
def an_asset_twice(a, f, d):
    return {"returns": a.assign(Twin=a["Elm"]), "factors": f}


@repaired("No value on the dates in use: 'Void'. They were left out.")
def an_asset_without_values(a, f, d):
    return {"returns": a.assign(Void=np.nan), "factors": f}


@repaired("The same return again and again (months): 'Doum' (8 from 2001-11)", same=False)
def a_stretch_that_does_not_move(a, f, d):
    a.iloc[10:18, 3] = 0.004
    return {"returns": a, "factors": f}


@repaired("Signs of stale prices: 'Doum' (40% of the returns are zero)", same=False)
def many_zeros(a, f, d):
    a.iloc[::5, 3] = 0.0
    a.iloc[1::5, 3] = 0.0
    return {"returns": a, "factors": f}


@repaired("Signs of stale prices: 'Doum' (autocorrelation 0.", same=False)
def smoothed_returns(a, f, d):
    return {"returns": a.assign(Doum=a["Doum"].rolling(4, min_periods=1).mean()), "factors": f}


@repaired("Far from the rest of their series, and kept: 'Alder' (", "% in 2002-09)", same=False)
def a_slipped_decimal_point(a, f, d):
    a.iloc[20, 0] = 0.9
    return {"returns": a, "factors": f}


@repaired("5 rows were dropped: no value of 'SMB' (2001-01 to 2001-05).", same=False, rows=(60, 55, 5, 0))
def a_factor_that_starts_late(a, f, d):
    f.iloc[:5, 1] = np.nan
    return {"returns": a, "factors": f}


@repaired(
    "6 rows were dropped: the other sources have nothing to go with them (2005-07 to 2005-12).",
    same=False,
    rows=(60, 54, 6, 0),
)
def factors_that_end_early(a, f, d):
    return {"returns": a, "factors": f.iloc[:54]}


# --- arguments ---------------------------------------------------------------------------------------------------


@refused("There is no risk-free column 'Rff'", "did you mean 'RF'")
def a_misspelt_risk_free_column(a, f, d):
    return {"returns": a, "factors": f, "risk_free": "Rff"}


@refused("A role is declared for 'SBM', but no column has that name", "did you mean 'SMB'?")
def a_misspelt_role(a, f, d):
    return {"returns": a, "factors": f, "roles": {"SBM": "ignored"}}


@refused("roles['SMB']='factr' is not known", "did you mean 'traded factor'")
def an_unknown_role(a, f, d):
    return {"returns": a, "factors": f, "roles": {"SMB": "factr"}}


@refused("units='percents' is not known", "did you mean 'percent'")
def an_unknown_unit(a, f, d):
    return {"returns": a, "factors": f, "units": "percents"}


@refused("is not TOML")
def a_broken_mapping_file(a, f, d):
    return {"returns": a, "factors": f, "roles": text(d, "[roles\n", "roles.toml")}


@refused("has 'role'. Allowed: tables [roles] and [labels]", "did you mean 'roles'?")
def a_misspelt_section_of_the_mapping_file(a, f, d):
    return {"returns": a, "factors": f, "roles": text(d, "[role]\nSMB = 'ignored'\n", "roles.toml")}


@refused("The series differ in currencies (USD: 'Alder'; EUR: 'Birch')", "mismatch='label'")
def two_currencies(a, f, d):
    return {
        "returns": a,
        "factors": f,
        "labels": {"Alder": {"currency": "usd"}, "Birch": {"currency": "EUR"}},
    }


@repaired(
    "The series differ in fees (gross: 'Alder'; net: 'Birch'); they were kept and labelled, as declared."
)
def gross_and_net(a, f, d):
    return {
        "returns": a,
        "factors": f,
        "mismatch": "label",
        "labels": {"Alder": {"fees": "gross"}, "Birch": {"fees": "net"}},
    }


@repaired("By their names the series differ in currencies (EUR: 'Doum EUR'; USD: 'Elm (USD)').", same=False)
def names_of_two_currencies(a, f, d):
    return {"returns": a.rename(columns={"Doum": "Doum EUR", "Elm": "Elm (USD)"}), "factors": f}


# --- long tables, workbooks, databases ---------------------------------------------------------------------------


def long(a: Frame) -> Frame:
    return a.rename_axis(columns="fund").stack().rename("ret").reset_index()


@repaired(
    "A long table: series named by 'fund', values from 'ret'; 300 rows became 60 dates of 5 series.",
    rows=(300, 60, 0, 240),
)
def long_table(a, f, d):
    return {"returns": text(d, long(a).to_csv(index=False)), "factors": f}


@repaired("1 rows repeat a value of the same date and series; they were merged.", rows=(301, 60, 0, 241))
def long_table_with_a_row_repeated(a, f, d):
    table = long(a)
    return {"returns": pd.concat([table, table.iloc[[7]]], ignore_index=True), "factors": f}


@refused("Rows 8 and 301 of returns frame both give 'Cedar' on one date, but differ")
def long_table_in_conflict(a, f, d):
    table = long(a)
    again = table.iloc[[7]].assign(ret=0.5)
    return {"returns": pd.concat([table, again], ignore_index=True), "factors": f}


@refused(
    "It is not plain which column of returns frame holds the values: ret, size", "Source(path, value='...')"
)
def long_table_with_two_values(a, f, d):
    return {"returns": Source(long(a).assign(size=1.0), layout=Layout.LONG), "factors": f}


@refused("returns.xlsx has no sheet 'Retrns'", "did you mean 'Returns'?")
def a_misspelt_sheet(a, f, d):
    a.to_excel(d / "returns.xlsx", sheet_name="Returns")
    return {"returns": Source(d / "returns.xlsx", name="returns.xlsx", sheet="Retrns"), "factors": f}


@repaired("2 rows before the names (row 4) were passed over.")
def a_workbook_with_a_title(a, f, d):
    book = d / "returns.xlsx"
    with pd.ExcelWriter(book) as writer:
        pd.DataFrame([["Fund returns"], ["per month"]]).to_excel(writer, index=False, header=False)
        a.to_excel(writer, startrow=3)
    return {"returns": book, "factors": f}


@refused("The query begins with 'DROP'")
def a_query_that_drops(a, f, d):
    return {"returns": Source(text(d, "x", "funds.duckdb"), query="DROP TABLE returns"), "factors": f}


@refused("The query holds several statements")
def two_statements(a, f, d):
    return {
        "returns": Source(text(d, "x", "funds.duckdb"), query="SELECT 1; DROP TABLE returns"),
        "factors": f,
    }


@refused("The query holds the word INSERT, which writes")
def a_query_that_writes_in_a_with(a, f, d):
    query = "WITH x AS (INSERT INTO r VALUES (1) RETURNING *) SELECT * FROM x"
    return {"returns": Source("sqlite:///" + str(d / "x.db"), query=query), "factors": f}


@refused("A database URL came without a query")
def a_url_without_a_query(a, f, d):
    return {"returns": "sqlite:///funds.db", "factors": f}


# --- the test ----------------------------------------------------------------------------------------------------


@pytest.fixture
def clean(frames) -> Panel:
    assets, factors = frames
    return open_panel(assets, factors)


def test_the_table_is_long_enough():
    assert len({case.name for case in CASES}) == len(CASES) >= 60


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.name)
def test_malformed_input(case: Case, frames, clean, tmp_path):
    assets, factors = (frame.copy() for frame in frames)
    arguments = case.make(assets, factors, tmp_path)
    if case.error:
        with pytest.raises(SoffitError) as caught:
            open_panel(**arguments)
        for words in case.says:
            assert words in str(caught.value)
        return
    panel = open_panel(**arguments)
    messages = [entry.message for entry in panel.record.entries]
    for words in case.says:
        assert any(words in message for message in messages), "\n".join(messages)
    assert tuple(panel.record.rows.iloc[0]) == case.rows
    assert panel.record.reconciles()
    assert same(panel, clean) is case.same


def same(panel: Panel, clean: Panel) -> bool:
    try:
        pd.testing.assert_frame_equal(panel.assets, clean.assets, rtol=0, atol=1e-12, check_freq=False)
        pd.testing.assert_frame_equal(panel.factors, clean.factors, rtol=0, atol=1e-12, check_freq=False)
    except AssertionError:
        return False
    assert panel.risk_free is not None
    assert clean.risk_free is not None
    return bool(np.allclose(panel.risk_free, clean.risk_free, rtol=0, atol=1e-12))
