"""Panels: what an analyst touches in a notebook. The only place that knows widgets."""

from soffit.panels.ceiling_panel import CeilingPanel
from soffit.panels.desk import Desk
from soffit.panels.exhibit_panel import (
    PANELS,
    BookPanel,
    ExhibitPanel,
    FactorSetsPanel,
    HedgeCostsPanel,
    HedgePanel,
    IntakePanel,
    JointPanel,
    ManyAlphasPanel,
    PricesPanel,
    RegressionPanel,
    SharpePanel,
    ShrinkagePanel,
    WalkForwardPanel,
    panel_of,
)
from soffit.panels.session import Session

__all__ = [
    "PANELS",
    "BookPanel",
    "CeilingPanel",
    "Desk",
    "ExhibitPanel",
    "FactorSetsPanel",
    "HedgeCostsPanel",
    "HedgePanel",
    "IntakePanel",
    "JointPanel",
    "ManyAlphasPanel",
    "PricesPanel",
    "RegressionPanel",
    "Session",
    "SharpePanel",
    "ShrinkagePanel",
    "WalkForwardPanel",
    "panel_of",
]
