"""A clean panel, corrupted at random, comes out equal, refused, or named in the record; never silently different.

A value that is changed within the range of its own series cannot be told from a true one, and is not tried here.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, event, given, settings
from hypothesis import strategies as st

from soffit.errors import InputError
from soffit.intake import Panel, Severity, Source, open_panel

Frame = pd.DataFrame


@dataclass
class Data:
    """What a corruption works on: assets and factors as objects, and how they will be handed over."""

    assets: Frame
    factors: Frame
    named: list[str]
    refused: bool = False


Corruption = Callable[[Data, int, str], None]


def set_cell(data: Data, row: int, name: str, value: Any) -> None:
    data.assets[name] = data.assets[name].astype(object)
    data.assets.iloc[row, data.assets.columns.get_loc(name)] = value


def blank_cell(data: Data, row: int, name: str) -> None:
    set_cell(data, row, name, None)
    data.named.append(name)


def code_999(data: Data, row: int, name: str) -> None:
    set_cell(data, row, name, -999)
    data.named.append(name)


def text_code(data: Data, row: int, name: str) -> None:
    set_cell(data, row, name, "n/a")
    data.named.append(name)


def word(data: Data, row: int, name: str) -> None:
    set_cell(data, row, name, "unknown")
    data.refused = True


def infinite(data: Data, row: int, name: str) -> None:
    set_cell(data, row, name, np.inf)
    data.refused = True


def slipped_point(data: Data, row: int, name: str) -> None:
    set_cell(data, row, name, 1.7)
    data.named.append(name)


def more_than_all(data: Data, row: int, name: str) -> None:
    set_cell(data, row, name, -1.7)
    data.refused = True


def per_cent_column(data: Data, row: int, name: str) -> None:
    values = data.assets[name]
    if all(isinstance(value, float) and abs(value) < 1 for value in values):
        data.assets[name] = values * 100


def frozen_stretch(data: Data, row: int, name: str) -> None:
    start = min(row, 48)
    for step in range(8):
        set_cell(data, start + step, name, 0.0123)
    data.named.append(name)


def row_left_out(data: Data, row: int, name: str) -> None:
    month = f"{data.assets.index[row]:%Y-%m}"
    data.assets = data.assets.drop(data.assets.index[row])
    data.named.append(month)


def factor_blank(data: Data, row: int, name: str) -> None:
    data.factors.iloc[row, 1] = np.nan
    data.named.append("SMB")


def factor_copied(data: Data, row: int, name: str) -> None:
    data.factors["Copy"] = data.factors["SMB"]
    data.refused = True


def factors_cut(data: Data, row: int, name: str) -> None:
    data.factors = data.factors.iloc[: max(row, 30)]
    data.named.append(f"{data.assets.index[-1]:%Y-%m}")


def factors_per_cent(data: Data, row: int, name: str) -> None:
    data.factors = data.factors * 100


def row_again(data: Data, row: int, name: str) -> None:
    data.assets = pd.concat([data.assets, data.assets.iloc[[row]]])


def row_again_and_different(data: Data, row: int, name: str) -> None:
    again = data.assets.iloc[[row]].copy()
    again[name] = 0.777
    data.assets = pd.concat([data.assets, again])
    data.refused = True


def shuffled(data: Data, row: int, name: str) -> None:
    data.assets = data.assets.sample(frac=1, random_state=row)


def turned(data: Data, row: int, name: str) -> None:
    data.assets = data.assets[::-1]


# In the order in which they are applied: cells, then rows, then the order of rows.
CELLS = (
    blank_cell,
    code_999,
    text_code,
    word,
    infinite,
    slipped_point,
    more_than_all,
    per_cent_column,
    frozen_stretch,
)
FACTORS = (factor_blank, factor_copied, factors_cut, factors_per_cent)
ROWS = (row_left_out, row_again, row_again_and_different, shuffled, turned)


def as_months(index: pd.DatetimeIndex) -> Any:
    return index.to_period("M")


def as_first_days(index: pd.DatetimeIndex) -> Any:
    return index.to_period("M").to_timestamp()


def as_numbers(index: pd.DatetimeIndex) -> Any:
    return (index.year * 100 + index.month).to_numpy()


def as_nanoseconds(index: pd.DatetimeIndex) -> Any:
    return pd.DatetimeIndex(as_numbers(index).astype("datetime64[ns]"))


def as_texts(index: pd.DatetimeIndex) -> Any:
    return index.strftime("%d %b %Y")


def as_zoned(index: pd.DatetimeIndex) -> Any:
    return index.tz_localize("Asia/Tokyo")


DATES = (None, as_months, as_first_days, as_numbers, as_nanoseconds, as_texts, as_zoned)


def as_frame(data: Data, folder: Path) -> Any:
    return data.assets


def as_csv(data: Data, folder: Path) -> Any:
    data.assets.to_csv(folder / "returns.csv", index_label="date")
    return folder / "returns.csv"


def as_comma_csv(data: Data, folder: Path) -> Any:
    path = folder / "returns.csv"
    body = data.assets.map(lambda value: repr(value).replace(".", ",") if isinstance(value, float) else value)
    path.write_text(
        "Fund returns\n\n" + body.to_csv(sep=";", index_label="date", lineterminator="\n") + "\nend of file\n"
    )
    return path


def as_long(data: Data, folder: Path) -> Any:
    columns = [data.assets[name].rename("ret").to_frame().assign(fund=name) for name in data.assets]
    table = pd.concat(columns).rename_axis("date").reset_index()
    table.to_csv(folder / "returns.csv", index=False)
    return Source(folder / "returns.csv", series="fund", value="ret")


WRITINGS = (as_frame, as_csv, as_comma_csv, as_long)


@settings(
    max_examples=80,
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
    derandomize=True,
)
@given(
    cells=st.lists(st.sampled_from(CELLS), max_size=2, unique=True),
    factors=st.lists(st.sampled_from(FACTORS), max_size=1),
    rows=st.lists(st.sampled_from(ROWS), max_size=2, unique=True),
    places=st.lists(st.integers(0, 59), min_size=5, max_size=5, unique=True),
    names=st.permutations(["Alder", "Birch", "Cedar", "Doum", "Elm"]),
    dates=st.sampled_from(DATES),
    writing=st.sampled_from(WRITINGS),
)
def test_never_silently_different(cells, factors, rows, places, names, dates, writing, clean_data, tmp_path):
    clean_assets, clean_factors = clean_data
    clean = open_panel(clean_assets, clean_factors)
    data = Data(clean_assets.copy(), clean_factors.copy(), [])
    applied = [*sorted(cells, key=CELLS.index), *factors, *sorted(rows, key=ROWS.index)]
    for corruption, place, name in zip(applied, places, names, strict=False):
        corruption(data, min(place, len(data.assets) - 1), name)
    if dates is not None:
        data.assets.index = dates(data.assets.index)
    panel, problem = opened(writing(data, tmp_path), data.factors)
    event("refused" if panel is None else "equal" if same(panel, clean) else "named in the record")
    if panel is None:
        assert data.refused or data.named, f"refused although nothing was lost: {problem}"
        return
    assert not data.refused, f"{[one.__name__ for one in applied]} should have been refused"
    assert panel.record.reconciles()
    if same(panel, clean):
        return
    said = " ".join(e.message for e in panel.record.entries if e.severity is not Severity.NOTE)
    assert data.named, f"{[one.__name__ for one in applied]} changed the panel and nothing is said"
    for named in data.named:
        assert named in said, f"'{named}' is not named: {said}"


@pytest.fixture
def clean_data(frames) -> tuple[Frame, Frame]:
    return frames


def opened(returns: Any, factors: Frame) -> tuple[Panel | None, str]:
    try:
        return open_panel(returns, factors), ""
    except InputError as error:
        return None, str(error)


def same(panel: Panel, clean: Panel) -> bool:
    if panel.assets.shape != clean.assets.shape or not panel.dates.equals(clean.dates):
        return False
    pairs = ((panel.assets[clean.assets.columns], clean.assets), (panel.factors, clean.factors))
    return all(np.allclose(a, b, rtol=0, atol=1e-12, equal_nan=True) for a, b in pairs)
