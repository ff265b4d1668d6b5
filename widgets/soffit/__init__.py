"""Which alphas can a market sustain: factor regressions under a Sharpe ceiling, on screen and in a memo.

>>> import soffit as sf
>>> study = sf.Study.open("returns.csv", factors="factors.csv")  # doctest: +SKIP
>>> sf.CeilingPanel(study)  # doctest: +SKIP
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

# Names are imported when they are first used, so that `import soffit` stays quick.
_HOMES: dict[str, str] = {
    "BookAlpha": "soffit.study",
    "CeilingForm": "soffit.settings",
    "CeilingPanel": "soffit.panels",
    "ErrorType": "soffit.settings",
    "Histories": "soffit.settings",
    "Instrument": "soffit.hedge.ticket",
    "LegKind": "soffit.hedge.costs",
    "LagRule": "soffit.settings",
    "Pack": "soffit.memo",
    "Rounding": "soffit.hedge.ticket",
    "Settings": "soffit.settings",
    "Study": "soffit.study",
    "build": "soffit.present.exhibits",
    "demo_study": "soffit.demo",
    "open_panel": "soffit.intake",
    "write": "soffit.memo",
}

__all__ = [
    "BookAlpha",
    "CeilingForm",
    "CeilingPanel",
    "ErrorType",
    "Histories",
    "Instrument",
    "LagRule",
    "LegKind",
    "Pack",
    "Rounding",
    "Settings",
    "Study",
    "__version__",
    "build",
    "demo_study",
    "open_panel",
    "write",
]


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        value = getattr(import_module(_HOMES[name]), name)
        globals()[name] = value
        return value
    from soffit.errors import nearest

    raise AttributeError(f"soffit has no '{name}': {nearest(name, _HOMES)}")


def __dir__() -> list[str]:
    return sorted(__all__)
