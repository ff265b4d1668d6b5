"""What a person is shown, as pure data: figures, tables, findings, and the exhibit that joins them.

Panels draw these with bqplot, memos with matplotlib and document writers. Values are as shown
(annual where a rate), never as text, except where a field says text.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import StrEnum

import numpy as np
import numpy.typing as npt
import pandas as pd

__all__ = [
    "Axis",
    "AxisScale",
    "Band",
    "Bars",
    "Column",
    "Exhibit",
    "FigureSpec",
    "Finding",
    "Line",
    "Mark",
    "NumberForm",
    "Orientation",
    "Points",
    "Role",
    "Rule",
    "Segments",
    "TableSpec",
]

Floats = npt.NDArray[np.float64]


class NumberForm(StrEnum):
    """How a kind of number is written; :mod:`soffit.present.wording` holds the formats."""

    PERCENT = "percent"  # decimal in, per cent out, two decimals: alphas, means, volatilities
    SHARE = "share"  # decimal in, whole per cent out: R squared, confidence levels
    RATIO = "ratio"  # two decimals: Sharpe and appraisal ratios, t ratios, betas
    STATISTIC = "statistic"  # three decimals: test statistics
    PVALUE = "p-value"
    COUNT = "count"
    BASIS_POINTS = "basis points"  # decimal in, bp out
    MONEY = "money"
    DATE = "date"
    TEXT = "text"


class Role(StrEnum):
    """What a mark stands for; :mod:`soffit.present.theme` gives it a colour and a shape."""

    INSIDE = "inside"
    STRADDLES = "straddles"
    OUTSIDE = "outside"
    CEILING = "ceiling"
    FACTORS = "factors"
    MARKET = "market"
    ESTIMATE = "estimate"
    SECOND = "second"
    THIRD = "third"
    PROMISED = "promised"
    DELIVERED = "delivered"
    REFERENCE = "reference"
    MUTED = "muted"


class AxisScale(StrEnum):
    """Kind of scale."""

    LINEAR = "linear"
    LOG = "log"
    DATE = "date"
    CATEGORY = "category"


class Orientation(StrEnum):
    """Which way a rule, an interval or a bar runs."""

    HORIZONTAL = "horizontal"
    VERTICAL = "vertical"


@dataclass(frozen=True, eq=False)
class Axis:
    """One axis.

    Parameters
    ----------
    label : str
        Title with the unit in it: ``"Alpha, % a year"``.
    form : NumberForm
        How tick labels are written.
    limits : tuple of float, optional
        Lowest and highest value shown; from the marks if None.
    scale : AxisScale
        Kind of scale. On a category axis positions are 0 … n−1 and `categories` names them.
    categories : tuple of str
        Names on a category axis.
    """

    label: str
    form: NumberForm = NumberForm.RATIO
    limits: tuple[float, float] | None = None
    scale: AxisScale = AxisScale.LINEAR
    categories: tuple[str, ...] = ()


@dataclass(frozen=True, eq=False)
class Mark:
    """Base of the marks. `key` is unique in its figure, so that a drawing can be updated in place."""

    key: str


@dataclass(frozen=True, eq=False)
class Points(Mark):
    """Points with a name, a role and a hover text each.

    Parameters
    ----------
    x, y : ndarray, shape (n,)
        Positions.
    names : tuple of str
        Names of the assets or factors; a click selects by name.
    roles : tuple of Role
        One role a point, or a single one for all.
    hover : tuple of str
        Text shown under the pointer; empty for the name alone.
    labelled : tuple of int
        Positions of the points whose names are written beside them.
    label : str
        Legend text; empty for none.
    selectable : bool
        Whether a click on a point selects the asset of that name.
    """

    x: Floats
    y: Floats
    names: tuple[str, ...]
    roles: tuple[Role, ...] = (Role.ESTIMATE,)
    hover: tuple[str, ...] = ()
    labelled: tuple[int, ...] = ()
    label: str = ""
    selectable: bool = False


@dataclass(frozen=True, eq=False)
class Segments(Mark):
    """Intervals: from `low` to `high` at each position `at`, along the orientation."""

    at: Floats
    low: Floats
    high: Floats
    orientation: Orientation = Orientation.VERTICAL
    roles: tuple[Role, ...] = (Role.MUTED,)
    label: str = ""


@dataclass(frozen=True, eq=False)
class Line(Mark):
    """A line through points; dates as datetime64 on a date axis. `label` is written at its end."""

    x: npt.NDArray[np.float64] | npt.NDArray[np.datetime64]
    y: Floats
    role: Role = Role.ESTIMATE
    label: str = ""
    dashed: bool = False


@dataclass(frozen=True, eq=False)
class Band(Mark):
    """An area between two lines."""

    x: npt.NDArray[np.float64] | npt.NDArray[np.datetime64]
    low: Floats
    high: Floats
    role: Role = Role.CEILING
    label: str = ""


@dataclass(frozen=True, eq=False)
class Rule(Mark):
    """A straight line across the whole figure at one value, with its label written on it.

    A vertical rule stands at ``x = at``; a horizontal one at ``y = at``.
    """

    at: float
    orientation: Orientation = Orientation.HORIZONTAL
    role: Role = Role.REFERENCE
    label: str = ""
    dashed: bool = False


@dataclass(frozen=True, eq=False)
class Bars(Mark):
    """Bars from zero at each position; `names` for hover and for category axes."""

    at: Floats
    length: Floats
    names: tuple[str, ...]
    orientation: Orientation = Orientation.VERTICAL
    roles: tuple[Role, ...] = (Role.ESTIMATE,)
    label: str = ""


@dataclass(frozen=True, eq=False)
class FigureSpec:
    """A figure, independent of what draws it.

    Parameters
    ----------
    key : str
        Stable name, used in file names: ``"ceiling-alpha-sigma"``.
    title : str
        Short title (plain text).
    x, y : Axis
        The axes.
    marks : tuple of Mark
        Drawn in order, first at the back.
    alt : str
        Text alternative: what the figure shows, in words with its main numbers.
    footnote : str
        Sample, units, error type.
    aspect : float
        Width over height.
    """

    key: str
    title: str
    x: Axis
    y: Axis
    marks: tuple[Mark, ...]
    alt: str
    footnote: str = ""
    aspect: float = 1.6


@dataclass(frozen=True)
class Column:
    """A column of a table: its key in the frame, heading (with unit) and number form."""

    key: str
    heading: str
    form: NumberForm = NumberForm.RATIO


@dataclass(frozen=True, eq=False)
class TableSpec:
    """A table, independent of what renders it.

    Parameters
    ----------
    key : str
        Stable name.
    title : str
        Short title.
    columns : tuple of Column
        Columns shown, in order. The frame's index is shown first under `index_heading`.
    frame : DataFrame
        Full-precision values; NaN is shown as a dash.
    index_heading : str
        Heading of the row names.
    footnote : str
        Sample, units, error type, what a dash means.
    row_forms : tuple of NumberForm
        For a table of unlike quantities, one a row: the form of each row's numbers, in place of the columns'.
    """

    key: str
    title: str
    columns: tuple[Column, ...]
    frame: pd.DataFrame
    index_heading: str = "Asset"
    footnote: str = ""
    row_forms: tuple[NumberForm, ...] = ()

    def form_at(self, row: int, column: Column) -> NumberForm:
        """How the cell in a row, counted from 0, and a column is written."""
        return self.row_forms[row] if self.row_forms else column.form


@dataclass(frozen=True)
class Finding:
    """One or two plain sentences with the numbers a memo needs; the words are made in `wording`."""

    text: str

    def __str__(self) -> str:
        return self.text


@dataclass(frozen=True, eq=False)
class Exhibit:
    """Everything that one result shows: what a panel displays and what a memo keeps.

    Parameters
    ----------
    key : str
        Stable name: ``"ceiling"``.
    title : str
        Title of the panel and of the memo section.
    sample : str
        Span, T, N, K, frequency, error type and lag, dropped rows.
    finding : Finding
        The sentence.
    figures : tuple of FigureSpec
        In order of importance.
    tables : tuple of TableSpec
        In order of importance.
    sources : tuple of str
        Keys in :mod:`soffit.present.sources` of the methods used.
    cautions : tuple of str
        Cautions that belong to this result beyond the general ones.
    notes : tuple of str
        What does not exist for this sample, with the reasons.
    """

    key: str
    title: str
    sample: str
    finding: Finding
    figures: tuple[FigureSpec, ...] = ()
    tables: tuple[TableSpec, ...] = ()
    sources: tuple[str, ...] = ()
    cautions: tuple[str, ...] = ()
    notes: tuple[str, ...] = field(default=())
