"""Sentences about sets of factors."""

from __future__ import annotations

from soffit.present.spec import Finding, NumberForm
from soffit.present.wording.numbers import join_names, plural, show
from soffit.study import FactorSets

__all__ = ["factor_sets_finding"]


def factor_sets_finding(found: FactorSets) -> Finding:
    """Say which set earns most, which the assets reject, and which factors the others do not span."""
    return Finding(f"{_best(found)} {_rejected(found)} {_spanned(found)}")


def _ratio(value: float) -> str:
    return show(value, NumberForm.RATIO)


def _best(found: FactorSets) -> str:
    table = found.table
    place = list(table.index).index(found.best)
    adjusted, plain = (float(table[column].iloc[place]) for column in ("sharpe_unbiased", "sharpe"))
    earned = f"{_ratio(adjusted)} a year after the bias adjustment ({_ratio(plain)} in sample)"
    if len(table) == 1:
        return f"The factors '{found.best}' earn a Sharpe ratio of {earned}."
    least = str(table["mean_abs_alpha"].idxmin())
    alpha = show(float(table["mean_abs_alpha"].min()), NumberForm.PERCENT)
    who = "it also leaves" if least == found.best else f"'{least}' leaves"
    return (
        f"Of {plural(len(table), 'factor set')}, '{found.best}' earns the highest Sharpe ratio, {earned}; {who} the "
        f"smallest mean |alpha|, {alpha} a year."
    )


def _rejected(found: FactorSets) -> str:
    size, table = show(1.0 - found.level, NumberForm.SHARE), found.table
    known = table["p"].dropna()
    if known.empty:
        return "There is no GRS test in this sample."
    rejected = [f"'{name}'" for name in known.index[known < 1.0 - found.level]]
    if not rejected:
        return f"The GRS test rejects none of them at {size}."
    if len(rejected) == len(table):
        return f"The GRS test rejects {'it' if len(table) == 1 else 'every one'} at {size}."
    return f"The GRS test rejects {join_names(rejected)} at {size}."


def _spanned(found: FactorSets) -> str:
    table, size = found.spanning_table, 1.0 - found.level
    at = show(size, NumberForm.SHARE)
    if len(table) == 1:
        verdict = "differs" if table["p"].iloc[0] < size else "does not differ"
        return f"The mean of {table.index[0]} {verdict} from zero at {at}."
    inside = [str(name) for name in table.index[table["p"] >= size]]
    if not inside:
        return f"Every factor earns an alpha on the others at {at}."
    verb = "earns" if len(inside) == 1 else "earn"
    return f"{join_names(inside)} {verb} no alpha on the other factors that differs from zero at {at}."
