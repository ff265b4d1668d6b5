"""Exhibits as plain JSON values and back, at full precision: for manifests, audits and the report cache.

Only the classes named here are ever made again; nothing in a file can name another.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import fields, is_dataclass
from datetime import date
from enum import Enum
from typing import Any

import numpy as np
import pandas as pd

from soffit.errors import InputError
from soffit.estimate.statistic import NotApplicable
from soffit.present.spec import (
    Axis,
    AxisScale,
    Band,
    Bars,
    Column,
    Exhibit,
    FigureSpec,
    Finding,
    Line,
    NumberForm,
    Orientation,
    Points,
    Role,
    Rule,
    Segments,
    TableSpec,
)

__all__ = ["exhibit_from_json", "exhibit_to_json"]

_CLASSES = {
    kind.__name__: kind
    for kind in (
        *(Axis, Band, Bars, Column, Exhibit, FigureSpec, Finding, Line, Points, Rule, Segments, TableSpec),
        NotApplicable,
    )
}
_ENUMS = {kind.__name__: kind for kind in (AxisScale, NumberForm, Orientation, Role)}
_NOT_FINITE = {"nan": math.nan, "inf": math.inf, "-inf": -math.inf}


def exhibit_to_json(exhibit: Exhibit) -> dict[str, Any]:
    """Plain values of an exhibit: dicts, lists, text, numbers; no NaN, which JSON does not know."""
    made: dict[str, Any] = _encode(exhibit)
    return made


def exhibit_from_json(values: Mapping[str, Any]) -> Exhibit:
    """Exhibit from :func:`exhibit_to_json`.

    Raises
    ------
    InputError
        If the values are not those of an exhibit.
    """
    try:
        made = _decode(values)
    except (KeyError, TypeError, ValueError) as error:
        raise InputError(f"A stored exhibit cannot be read ({error})") from error
    if not isinstance(made, Exhibit):
        raise InputError("A stored exhibit cannot be read: it holds something else")
    return made


def _encode(value: Any) -> Any:
    if isinstance(value, Enum):
        return {"enum": type(value).__name__, "is": value.value}
    if isinstance(value, pd.DataFrame):
        return {
            "frame": [
                [str(name), str(column.dtype), _encode(column.array)] for name, column in value.items()
            ],
            "index": _encode(value.index.array),
        }
    if is_dataclass(value) and not isinstance(value, type):
        made = {item.name: _encode(getattr(value, item.name)) for item in fields(value)}
        return {"kind": type(value).__name__, **made}
    if isinstance(value, np.ndarray):
        return (
            {"array": [_encode(item) for item in value.tolist()], "dtype": str(value.dtype)}
            if (value.dtype.kind != "M")
            else {"dates": [str(item) for item in value.astype("datetime64[ns]")]}
        )
    if isinstance(value, tuple | list | pd.api.extensions.ExtensionArray):
        return [_encode(item) for item in value]
    return _encode_scalar(value)


def _encode_scalar(value: Any) -> Any:
    if isinstance(value, np.generic):
        value = value.item()
    if value is None or isinstance(value, bool | str | int):
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else {"float": str(value)}
    if value is pd.NaT or value is pd.NA:
        return None
    if isinstance(value, pd.Timestamp | date):
        return {"date": pd.Timestamp(value).isoformat()}
    raise TypeError(f"a {type(value).__name__} stands in an exhibit")


def _decode(value: Any) -> Any:
    if isinstance(value, list):
        return tuple(_decode(item) for item in value)
    if not isinstance(value, Mapping):
        return value
    if "kind" in value:
        kind = _CLASSES[value["kind"]]
        return kind(**{name: _decode(item) for name, item in value.items() if name != "kind"})
    if "enum" in value:
        return _ENUMS[value["enum"]](value["is"])
    if "float" in value:
        return _NOT_FINITE[value["float"]]
    if "date" in value:
        return pd.Timestamp(value["date"])
    if "dates" in value:
        return np.array(value["dates"], dtype="datetime64[ns]")
    if "array" in value:
        return np.array([_decode(item) for item in value["array"]], dtype=value["dtype"])
    if "frame" in value:
        index = pd.Index(list(_decode(value["index"])))
        columns = {name: _column(items, dtype, index) for name, dtype, items in value["frame"]}
        return pd.DataFrame(columns, index=index)
    raise KeyError("nothing known by its names")


def _column(items: Any, dtype: str, index: pd.Index) -> pd.Series[Any]:
    values = list(_decode(items))
    if dtype.startswith(("float", "int", "bool")):
        return pd.Series([math.nan if item is None else item for item in values], index=index, dtype=dtype)
    return pd.Series(values, index=index, dtype="datetime64[ns]" if dtype.startswith("datetime") else object)
