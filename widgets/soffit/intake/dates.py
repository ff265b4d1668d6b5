"""Dates as they come, read as naive days; and the frequency they tell."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from soffit.errors import InputError
from soffit.intake.options import Frequency
from soffit.intake.record import EntryKind, Severity

__all__ = ["Dates", "looks_like_dates", "read_dates"]

Stamps = NDArray[np.datetime64]
_Day = tuple[int, int, int]

_MONTHS = {
    name: number
    for number, names in enumerate(
        ["jan january", "feb february", "mar march", "apr april", "may", "jun june", "jul july", "aug august",
         "sep sept september", "oct october", "nov november", "dec december"],
        start=1,
    )
    for name in names.split()
}  # fmt: skip
_MONTH = "(" + "|".join(sorted(_MONTHS, key=len, reverse=True)) + r")\.?"


@dataclass
class Dates:
    """Dates read, with what had to be assumed.

    Parameters
    ----------
    stamps : ndarray of datetime64[ns]
        One naive day a row.
    told : Frequency or None
        The coarsest frequency that the form of the dates can express, such as monthly for ``199003``.
    notes : list of (EntryKind, str, Severity)
        What goes in the record.
    """

    stamps: Stamps
    told: Frequency | None = None
    notes: list[tuple[EntryKind, str, Severity]] = field(default_factory=list)

    def note(self, message: str, severity: Severity = Severity.NOTE) -> None:
        """Add a note about the dates."""
        self.notes.append((EntryKind.DATES, message, severity))


@dataclass(frozen=True)
class _Form:
    """One way to write a date."""

    example: str
    pattern: re.Pattern[str]
    read: Callable[[re.Match[str]], _Day]
    told: Frequency | None = None
    remark: str = ""


def _two_digit(year: str) -> int:
    number = int(year)
    return number if len(year) == 4 else 1900 + number if number >= 69 else 2000 + number


def _spreadsheet_day(count: int) -> _Day:
    day = np.datetime64("1899-12-30", "D") + np.timedelta64(count, "D")
    year, month, number = str(day).split("-")
    return int(year), int(month), int(number)


def _form(
    example: str,
    pattern: str,
    read: Callable[[re.Match[str]], _Day],
    told: Frequency | None = None,
    remark: str = "",
) -> _Form:
    return _Form(example, re.compile(pattern, re.IGNORECASE | re.ASCII), read, told, remark)


_CLOCK = r"(?:[T ]\d{1,2}:\d{2}(?::\d{2}(?:\.\d+)?)?(?:Z|[+-]\d{2}:?\d{2})?)?"
_FIRST_YEAR, _LAST_YEAR = 1700, 2200
_EPOCH = re.compile(r"1970-\d{2}-\d{2}[T ]\d{2}:\d{2}:\d{2}(?:\.\d+)?", re.ASCII)
_Y_END = "years stand for their last day"
_Q_END = "quarters stand for their last day"
_PIVOT = "two-digit years are read as 1969 to 2068"
_FORMS = (
    _form("1990-03-31", rf"(\d{{4}})([-/.])(\d{{1,2}})\2(\d{{1,2}}){_CLOCK}",
          lambda m: (int(m[1]), int(m[3]), int(m[4]))),
    _form("19900331", r"(\d{4})(\d{2})(\d{2})(?:\.0)?", lambda m: (int(m[1]), int(m[2]), int(m[3]))),
    _form("199003", r"(\d{4})(\d{2})(?:\.0)?", lambda m: (int(m[1]), int(m[2]), 1), Frequency.MONTHLY),
    _form("1990-03", r"(\d{4})[-/. ]?m?(?:(?<=[-/. m]))(\d{1,2})", lambda m: (int(m[1]), int(m[2]), 1),
          Frequency.MONTHLY),
    _form("03/1990", r"(\d{1,2})[-/.](\d{4})", lambda m: (int(m[2]), int(m[1]), 1), Frequency.MONTHLY),
    _form("32963", r"([1-9]\d{4})(?:\.0)?", lambda m: _spreadsheet_day(int(m[1])), None,
          "whole numbers of five digits are a spreadsheet's count of days"),
    _form("1990Q1", r"(\d{4})[-/. ]?q([1-4])", lambda m: (int(m[1]), 3 * int(m[2]), 1), Frequency.QUARTERLY,
          _Q_END),
    _form("Q1 1990", r"q([1-4])[-/. ]?(\d{4})", lambda m: (int(m[2]), 3 * int(m[1]), 1), Frequency.QUARTERLY,
          _Q_END),
    _form("1990", r"(\d{4})(?:\.0)?", lambda m: (int(m[1]), 12, 31), Frequency.ANNUAL, _Y_END),
    _form("31 Mar 1990", rf"(\d{{1,2}})[-/. ]{_MONTH}[-/., ]*(\d{{4}})",
          lambda m: (int(m[3]), _MONTHS[m[2].lower()], int(m[1]))),
    _form("Mar 31, 1990", rf"{_MONTH}[-/. ]?(\d{{1,2}}),? (\d{{4}})",
          lambda m: (int(m[3]), _MONTHS[m[1].lower()], int(m[2]))),
    _form("31-Mar-90", rf"(\d{{1,2}})[-/ ]{_MONTH}[-/ ](\d{{2}})",
          lambda m: (_two_digit(m[3]), _MONTHS[m[2].lower()], int(m[1])), None, _PIVOT),
    _form("Mar 1990", rf"{_MONTH}[-/. ]*(\d{{4}})", lambda m: (int(m[2]), _MONTHS[m[1].lower()], 1),
          Frequency.MONTHLY),
    _form("Mar-90", rf"{_MONTH}[-/' ]+(\d{{2}})", lambda m: (_two_digit(m[2]), _MONTHS[m[1].lower()], 1),
          Frequency.MONTHLY, _PIVOT),
)  # fmt: skip
_DAY_FIRST = _form(
    "31/03/1990",
    rf"(\d{{1,2}})([-/.])(\d{{1,2}})\2(\d{{4}}){_CLOCK}",
    lambda m: (int(m[4]), int(m[3]), int(m[1])),
    None,
    "the day comes first",
)
_MONTH_FIRST = _form(
    "03/31/1990",
    rf"(\d{{1,2}})([-/.])(\d{{1,2}})\2(\d{{4}}){_CLOCK}",
    lambda m: (int(m[4]), int(m[1]), int(m[3])),
    None,
    "the month comes first",
)


def _stamp(day: _Day) -> np.datetime64 | None:
    year, month, number = day
    if not (_FIRST_YEAR <= year <= _LAST_YEAR and 1 <= month <= 12 and number >= 1):
        return None
    first = np.datetime64(f"{year:04d}-{month:02d}", "M")
    result = first.astype("datetime64[D]") + np.timedelta64(number - 1, "D")
    return result if result.astype("datetime64[M]") == first else None


def read_dates(values: Any, place: Callable[[int], str], date_format: str | None = None) -> Dates:
    """Read a column of dates in whatever form it has.

    Parameters
    ----------
    values : array-like
        Datetimes (naive or with a time zone), Periods, dates, integers such as ``199003``, or text.
    place : callable
        Says where the analyst finds the row at a position: ``place(3)`` is ``"line 5"``.
    date_format : str, optional
        A strptime format that all dates have.

    Raises
    ------
    InputError
        If a date cannot be read, is missing, or could mean two days.
    """
    index: pd.Index[Any] = values if isinstance(values, pd.Index) else pd.Index(values)
    if date_format is not None:
        return _by_format(index, place, date_format)
    if isinstance(index, pd.PeriodIndex):
        return _from_periods(index)
    if isinstance(index, pd.DatetimeIndex):
        return _from_datetimes(index, place)
    if pd.api.types.is_bool_dtype(index.dtype):
        raise InputError("The dates are True and False", remedy="name the column that holds the dates")
    if pd.api.types.is_numeric_dtype(index.dtype):
        return _from_numbers(index.to_numpy(dtype=float, na_value=np.nan), place)
    items: Any = index.to_numpy(dtype=object)
    if any(isinstance(item, pd.Period) for item in items):
        return _from_objects(items, place)
    if any(
        not isinstance(item, (str, int, float, np.integer, np.floating)) and item is not None
        for item in items
    ):
        return _from_objects(items, place)
    return _from_text(["" if _absent(item) else str(item).strip() for item in items], place)


def looks_like_dates(texts: Sequence[str]) -> bool:
    """Whether all of a few texts are written as dates."""
    forms = (*_FORMS, _DAY_FIRST, _MONTH_FIRST)
    return bool(texts) and all(_readable(text.strip(), forms) for text in texts)


def _readable(text: str, forms: Sequence[_Form]) -> bool:
    return any(
        (hit := form.pattern.fullmatch(text)) is not None and _stamp(form.read(hit)) is not None
        for form in forms
    )


def _absent(item: Any) -> bool:
    return item is None or item is pd.NaT or item is pd.NA or (isinstance(item, float) and np.isnan(item))


def _from_periods(index: pd.PeriodIndex) -> Dates:
    if index.hasnans:
        raise InputError("A date is missing among the Periods", remedy="remove the rows without a date")
    code = str(index.dtype).removeprefix("period[").rstrip("]").split("-")[0].upper()
    told = {
        "M": Frequency.MONTHLY,
        "Q": Frequency.QUARTERLY,
        "Y": Frequency.ANNUAL,
        "A": Frequency.ANNUAL,
        "W": Frequency.WEEKLY,
    }.get(code)
    dates = Dates(_days(index.to_timestamp(how="end")), told)
    dates.note(f"Periods of type '{index.dtype}' stand for their last day.")
    return dates


def _from_objects(items: NDArray[np.object_], place: Callable[[int], str]) -> Dates:
    for row, item in enumerate(items):
        if _absent(item):
            raise InputError(f"The date is missing in {place(row)}", remedy="give the date or remove the row")
    if all(isinstance(item, pd.Period) for item in items):
        return _from_periods(pd.PeriodIndex(items))
    stamps: list[np.datetime64] = []
    for row, item in enumerate(items):
        try:
            stamps.append(np.datetime64(pd.Timestamp(item).tz_localize(None).date(), "D"))
        except (TypeError, ValueError, OverflowError) as error:
            raise InputError(
                f"{item!r} in {place(row)} is not a date",
                allowed="dates, such as 1990-03-31, or 199003 for a month",
            ) from error
    return _clock(Dates(np.array(stamps).astype("datetime64[ns]")), items)


def _clock(dates: Dates, items: NDArray[np.object_]) -> Dates:
    if any(getattr(item, "tzinfo", None) is not None for item in items):
        dates.note("Time zones were taken off: a row counts for its local day.", Severity.REPAIRED)
    if any(getattr(item, "hour", 0) or getattr(item, "minute", 0) for item in items):
        dates.note("Times of day were taken off.", Severity.REPAIRED)
    return dates


def _from_datetimes(index: pd.DatetimeIndex, place: Callable[[int], str]) -> Dates:
    if index.hasnans:
        row = int(np.flatnonzero(index.isna())[0])
        raise InputError(f"The date is missing in {place(row)}", remedy="give the date or remove the row")
    broken = _misread_integers(index)
    if broken is not None:
        dates = _from_numbers(broken.astype(float), place)
        dates.note(
            f"The dates read {index[0]}: whole numbers such as {broken[0]} had been taken for a time since 1970. "
            f"They were read again as {_spelled(dates.stamps[0], dates.told)}.",
            Severity.REPAIRED,
        )
        return dates
    wild = np.flatnonzero((index.year < _FIRST_YEAR) | (index.year > _LAST_YEAR))
    if len(wild):
        raise InputError(
            f"The date {str(index[wild[0]])[:10]} in {place(int(wild[0]))} is out of range",
            allowed=f"the years {_FIRST_YEAR} to {_LAST_YEAR}",
            remedy="correct the date",
        )
    dates = Dates(_days(index))
    if index.tz is not None:
        dates.note(
            f"The time zone {index.tz} was taken off: a row counts for its local day.", Severity.REPAIRED
        )
    if bool((index != index.normalize()).any()):
        dates.note("Times of day were taken off.", Severity.REPAIRED)
    return dates


def _days(index: pd.DatetimeIndex) -> Stamps:
    return index.tz_localize(None).to_numpy().astype("datetime64[D]").astype("datetime64[ns]")


def _spelled(stamp: np.datetime64, told: Frequency | None) -> str:
    return str(stamp.astype("datetime64[M]" if told is Frequency.MONTHLY else "datetime64[D]"))


def _misread_integers(index: pd.DatetimeIndex) -> NDArray[np.int64] | None:
    """Whole numbers YYYYMM or YYYYMMDD behind dates of 1970, whatever the unit they were taken in."""
    if len(index) == 0 or index.tz is not None or not bool((index.year == 1970).all()):
        return None
    if bool((index == index.normalize()).all()):
        return None
    nanoseconds = index.to_numpy().astype("datetime64[ns]").astype(np.int64)
    for unit in (1, 10**3, 10**6, 10**9):
        numbers, rest = np.divmod(nanoseconds, unit)
        if not rest.any() and _calendar_numbers(numbers):
            return numbers
    return None


def _calendar_numbers(numbers: NDArray[np.int64]) -> bool:
    month, year = numbers % 100, numbers // 100
    if bool(((month >= 1) & (month <= 12) & (year >= 1800) & (year <= 2200)).all()):
        return True
    day, month, year = numbers % 100, numbers // 100 % 100, numbers // 10_000
    fits = (day >= 1) & (day <= 31) & (month >= 1) & (month <= 12) & (year >= 1800) & (year <= 2200)
    return bool(fits.all())


def _from_numbers(numbers: NDArray[np.float64], place: Callable[[int], str]) -> Dates:
    if np.isnan(numbers).any():
        raise InputError(
            f"The date is missing in {place(int(np.flatnonzero(np.isnan(numbers))[0]))}",
            remedy="give the date or remove the row",
        )
    whole = numbers.astype(np.int64)
    if bool((whole != numbers).any()):
        row = int(np.flatnonzero(whole != numbers)[0])
        raise InputError(
            f"{numbers[row]:g} in {place(row)} is not a date",
            allowed="dates, or whole numbers such as 199003 or 19900331",
        )
    return _from_text([str(number) for number in whole], place)


def _by_format(index: pd.Index, place: Callable[[int], str], date_format: str) -> Dates:
    texts = [str(item).strip() for item in index]
    stamps = pd.to_datetime(pd.Series(texts, dtype=object), format=date_format, errors="coerce")
    if bool(stamps.isna().any()):
        row = int(np.flatnonzero(stamps.isna().to_numpy())[0])
        raise InputError(
            f"'{texts[row]}' in {place(row)} is not a date of the form '{date_format}'",
            remedy="correct the row, or change date_format",
        )
    dates = Dates(_days(pd.DatetimeIndex(stamps)))
    dates.note(f"Dates are read as '{date_format}', as declared.")
    return dates


def _from_text(texts: list[str], place: Callable[[int], str]) -> Dates:
    if texts and all(_EPOCH.fullmatch(text) for text in texts):
        index = pd.DatetimeIndex(pd.to_datetime(pd.Series(texts, dtype=object), format="ISO8601"))
        if _misread_integers(index) is not None:
            return _from_datetimes(index, place)
    codes, unique = pd.factorize(np.array(texts, dtype=object))
    form = _form_of(list(unique), lambda item: place(int(np.flatnonzero(codes == item)[0])))
    days: list[np.datetime64] = []
    for item, text in enumerate(unique):
        hit = form.pattern.fullmatch(text)
        stamp = _stamp(form.read(hit)) if hit else None
        if stamp is None:
            where = place(int(np.flatnonzero(codes == item)[0]))
            if not text:
                raise InputError(f"The date is missing in {where}", remedy="give the date or remove the row")
            raise InputError(
                f"'{text}' in {where} is not a date written like the others ({form.example})",
                remedy="correct the row, or remove it if it is not data",
            )
        days.append(stamp)
    dates = Dates(np.array(days, dtype="datetime64[D]")[codes].astype("datetime64[ns]"), form.told)
    if form.remark:
        dates.note(f"Dates such as '{unique[0]}' are read as {days[0]}: {form.remark}.")
    return dates


def _form_of(unique: list[str], place: Callable[[int], str]) -> _Form:
    """The form that most of the dates have."""
    share = {
        form.example: sum(_readable(text, (form,)) for text in unique)
        for form in (*_FORMS, _DAY_FIRST, _MONTH_FIRST)
    }
    best = max(share.values(), default=0)
    if best == 0:
        shown = next((text for text in unique if text), "")
        raise InputError(
            f"'{shown}' in {place(unique.index(shown))} is not a date" if shown else "The dates are empty",
            allowed="dates such as 1990-03-31, 1990-03, 199003, 19900331, 1990Q1, 1990, 31/03/1990 or 31 Mar 1990",
            remedy="name the date column, or give its date_format",
        )
    if best == share[_DAY_FIRST.example] == share[_MONTH_FIRST.example]:
        clear = next((text for text in unique if _DAY_FIRST.pattern.fullmatch(text)), "")
        if all(_same_day(text) for text in unique):
            return _DAY_FIRST
        raise InputError(
            f"Dates such as '{clear}' in {place(unique.index(clear))} can be read with the day or the month first",
            remedy="say which with date_format='%d/%m/%Y' or date_format='%m/%d/%Y'",
        )
    return next(form for form in (*_FORMS, _DAY_FIRST, _MONTH_FIRST) if share[form.example] == best)


def _same_day(text: str) -> bool:
    hits = (_DAY_FIRST.pattern.fullmatch(text), _MONTH_FIRST.pattern.fullmatch(text))
    return all(hits) and _DAY_FIRST.read(hits[0]) == _MONTH_FIRST.read(hits[1])  # type: ignore[arg-type]
