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
_ROOMS: dict[str, tuple[str, ...]] = {
    "soffit.demo": ("demo_frames", "demo_study"),
    "soffit.hedge.costs": ("LegKind",),
    "soffit.hedge.ticket": ("Instrument", "Rounding"),
    "soffit.intake": ("Source", "compare_vintages", "open_panel"),
    "soffit.memo": ("Inputs", "Label", "Pack", "StudyFile", "verify", "write"),
    "soffit.memo.notebook": ("run_report",),
    "soffit.memo.sweep": ("run_sweep",),
    "soffit.panels": (
        "BookPanel",
        "CeilingPanel",
        "Desk",
        "FactorSetsPanel",
        "HedgeCostsPanel",
        "HedgePanel",
        "IntakePanel",
        "JointPanel",
        "ManyAlphasPanel",
        "PricesPanel",
        "RegressionPanel",
        "SharpePanel",
        "ShrinkagePanel",
        "WalkForwardPanel",
    ),
    "soffit.present.exhibits": ("build",),
    "soffit.settings": ("CeilingForm", "ErrorType", "Histories", "LagRule", "Settings"),
    "soffit.study": ("BookAlpha", "Study"),
}
_HOMES: dict[str, str] = {name: room for room, names in _ROOMS.items() for name in names}

__all__ = sorted(["__version__", *_HOMES])


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        value = getattr(import_module(_HOMES[name]), name)
        globals()[name] = value
        return value
    from soffit.errors import nearest

    raise AttributeError(f"soffit has no '{name}': {nearest(name, _HOMES)}")


def __dir__() -> list[str]:
    return sorted(__all__)
