"""Panels: what an analyst touches in a notebook. The only place that knows widgets."""

from soffit.panels.ceiling_panel import CeilingPanel
from soffit.panels.session import Session

__all__ = ["CeilingPanel", "Session"]
