"""Two downloads of the same factors: which dates, columns and values changed, and by how much."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from soffit.errors import InputError
from soffit.intake.opening import open_panel
from soffit.intake.options import Role
from soffit.intake.panel import Panel

__all__ = ["VintageComparison", "compare_vintages", "open_vintage"]


@dataclass(frozen=True, eq=False)
class VintageComparison:
    """What changed between two vintages.

    Parameters
    ----------
    old_fingerprint, new_fingerprint : str
        Fingerprints of the two, over cleaned values.
    dates_added, dates_removed : DatetimeIndex
        Dates that only the new, or only the old, vintage has.
    columns_added, columns_removed : tuple of str
        Series that only the new, or only the old, vintage has.
    changes : DataFrame
        One row a changed value: ``date``, ``series``, ``old``, ``new``, ``difference``; decimal per period.
    by_series : DataFrame
        One row a common series: ``dates`` in common, ``changed``, ``mean difference``, ``largest difference`` in
        absolute value, and its ``date``, and the ``correlation`` of the two vintages.
    """

    old_fingerprint: str
    new_fingerprint: str
    dates_added: pd.DatetimeIndex
    dates_removed: pd.DatetimeIndex
    columns_added: tuple[str, ...]
    columns_removed: tuple[str, ...]
    changes: pd.DataFrame
    by_series: pd.DataFrame

    @property
    def same(self) -> bool:
        """Whether nothing changed."""
        return self.extended and not len(self.dates_added) and not self.columns_added

    @property
    def extended(self) -> bool:
        """Whether the new vintage only adds dates or series and revises none."""
        return not len(self.changes) and not len(self.dates_removed) and not self.columns_removed


def compare_vintages(old: Any, new: Any, *, tolerance: float = 1e-9) -> VintageComparison:
    """Compare two vintages of factors.

    Parameters
    ----------
    old, new : Panel, DataFrame, path or Source
        Two downloads; what is no Panel is opened as one, with every series a factor. Of a Panel, the traded
        factors, the non-traded ones and the risk-free return are compared.
    tolerance : float, optional
        Differences up to this size, in decimals, are no change.

    Returns
    -------
    VintageComparison
        What changed.

    Raises
    ------
    InputError
        If the two have no series or no dates in common, or differ in frequency.
    """
    first, second = open_vintage(old), open_vintage(new)
    if first.frequency is not second.frequency:
        raise InputError(
            f"The old vintage is {first.frequency.value}, the new one {second.frequency.value}",
            remedy="compare vintages of one frequency",
        )
    a, b = _series(first), _series(second)
    common = [name for name in a.columns if name in b.columns]
    dates = pd.DatetimeIndex(a.index.intersection(b.index))
    if not common or not len(dates):
        raise InputError(
            f"The vintages have {len(common)} series and {len(dates)} dates in common",
            remedy="check that both are the same kind of file, with the same names",
        )
    x, y = a.loc[dates, common].to_numpy(), b.loc[dates, common].to_numpy()
    changed = ~((np.abs(x - y) <= tolerance) | (np.isnan(x) & np.isnan(y)))
    return VintageComparison(
        old_fingerprint=first.fingerprint,
        new_fingerprint=second.fingerprint,
        dates_added=pd.DatetimeIndex(b.index.difference(a.index)),
        dates_removed=pd.DatetimeIndex(a.index.difference(b.index)),
        columns_added=tuple(name for name in b.columns if name not in a.columns),
        columns_removed=tuple(name for name in a.columns if name not in b.columns),
        changes=_changes(dates, common, x, y, changed),
        by_series=_by_series(dates, common, x, y, changed),
    )


def open_vintage(vintage: Any) -> Panel:
    """Open a vintage with every series a traded factor; a Panel stays as it is.

    Raises
    ------
    InputError
        If the data cannot be used as they are.
    """
    if isinstance(vintage, Panel):
        return vintage
    opened = open_panel(vintage, progress=False)
    if opened.assets.shape[1]:
        names = [str(name) for frame in (opened.assets, opened.factors) for name in frame.columns]
        opened = open_panel(vintage, roles=dict.fromkeys(names, Role.FACTOR), progress=False)
    return opened


def _series(panel: Panel) -> pd.DataFrame:
    pieces = [panel.factors, panel.non_traded]
    if panel.risk_free is not None:
        pieces.append(panel.risk_free.to_frame())
    return pd.concat(pieces, axis=1)


def _changes(dates: pd.DatetimeIndex, names: list[str], x: Any, y: Any, changed: Any) -> pd.DataFrame:
    row, column = np.nonzero(changed)
    return pd.DataFrame(
        {
            "date": dates[row],
            "series": np.array(names, dtype=object)[column],
            "old": x[row, column],
            "new": y[row, column],
            "difference": y[row, column] - x[row, column],
        }
    )


def _by_series(dates: pd.DatetimeIndex, names: list[str], x: Any, y: Any, changed: Any) -> pd.DataFrame:
    rows = []
    for i, name in enumerate(names):
        both = ~(np.isnan(x[:, i]) | np.isnan(y[:, i]))
        off = np.where(both, y[:, i] - x[:, i], 0.0)
        u, v = x[both, i], y[both, i]
        moves = len(u) > 1 and u.std() > 0 and v.std() > 0
        largest = int(np.abs(off).argmax())
        rows.append(
            {
                "series": name,
                "dates": int(both.sum()),
                "changed": int(changed[:, i].sum()),
                "mean difference": float(off[both].mean()) if both.any() else np.nan,
                "largest difference": float(off[largest]),
                "date": dates[largest] if changed[:, i].any() else pd.NaT,
                "correlation": float(np.corrcoef(u, v)[0, 1]) if moves else np.nan,
            }
        )
    return pd.DataFrame(rows).set_index("series")
