"""One builder a result: what a panel displays and what a memo keeps."""

from __future__ import annotations

from collections.abc import Callable
from importlib import import_module

from soffit.errors import SettingError, nearest
from soffit.present.spec import Exhibit
from soffit.study import Study

__all__ = ["EXHIBITS", "build"]

# Key of the exhibit and the module whose function ``exhibit(study)`` builds it, in the order of a memo.
EXHIBITS: dict[str, str] = {
    "intake": "soffit.present.exhibits.intake",
    "sharpe-ratios": "soffit.present.exhibits.sharpe_ratios",
    "regression": "soffit.present.exhibits.regression",
    "many-alphas": "soffit.present.exhibits.many_alphas",
    "joint": "soffit.present.exhibits.joint",
    "ceiling": "soffit.present.exhibits.ceiling",
    "alphas-under-ceiling": "soffit.present.exhibits.alphas_under_ceiling",
    "factor-sets": "soffit.present.exhibits.factor_sets",
    "prices-of-risk": "soffit.present.exhibits.prices_of_risk",
    "hedge": "soffit.present.exhibits.hedge",
    "hedge-walk": "soffit.present.exhibits.hedge_walk",
    "hedge-costs": "soffit.present.exhibits.hedge_costs",
    "book": "soffit.present.exhibits.book",
}


def build(key: str, study: Study) -> Exhibit:
    """Build one exhibit of a study.

    Parameters
    ----------
    key : str
        One of :data:`EXHIBITS`.
    study : Study
        What it is about.

    Raises
    ------
    SettingError
        For an unknown key, with the nearest known ones.
    """
    if key not in EXHIBITS:
        raise SettingError(f"There is no exhibit '{key}'", remedy=nearest(key, EXHIBITS))
    builder: Callable[[Study], Exhibit] = import_module(EXHIBITS[key]).exhibit
    return builder(study)
