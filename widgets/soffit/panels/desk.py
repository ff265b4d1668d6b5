"""The desk: every panel of one study in tabs, under one bar of settings."""

from __future__ import annotations

from html import escape
from typing import Any

import ipywidgets
from IPython.display import HTML, DisplayHandle, display

from soffit.errors import SettingError, SoffitError, nearest
from soffit.panels.exhibit_panel import ExhibitPanel, panel_of
from soffit.panels.panel_base import Panel, _displayed
from soffit.panels.session import Session
from soffit.panels.still import LIVE
from soffit.panels.table_view import CopyText
from soffit.present.freeing import free
from soffit.settings import Settings
from soffit.study import Study

__all__ = ["TABS", "Desk"]

TABS = {
    "intake": "Intake",
    "sharpe-ratios": "Sharpe ratios",
    "regression": "Regressions",
    "many-alphas": "Many alphas",
    "joint": "Joint test",
    "ceiling": "Ceiling",
    "alphas-under-ceiling": "Shrunk alphas",
    "factor-sets": "Factor sets",
    "prices-of-risk": "Prices of risk",
    "hedge": "Hedge ratios",
    "hedge-walk": "Walk-forward",
    "hedge-costs": "Costs",
    "book": "Book",
}
"""Short titles of the panels, in the order of the tabs."""

_BEFORE_FACTORS = ("start", "end")
_AFTER_FACTORS = (
    "histories",
    "error_type",
    "lag_rule",
    "lags",
    "trials",
    "ceiling",
    "ceiling_form",
)
_BAR = (*_BEFORE_FACTORS, *_AFTER_FACTORS)

_ALL, _OTHER = "all factors", "as set in code"


class Desk:
    """All panels on one study, in tabs; a panel is made when its tab is first opened.

    Only the panel in view follows the settings. One that comes back into view catches up first.

    Parameters
    ----------
    study : Study
        The study.
    tab : str
        Key of the panel shown first.

    Raises
    ------
    SettingError
        For an unknown tab, with the nearest known ones.

    Examples
    --------
    >>> import soffit as sf                                      # doctest: +SKIP
    >>> sf.Desk(sf.Study.open("returns.csv", "factors.csv"))     # doctest: +SKIP
    """

    def __init__(self, study: Study, tab: str = "ceiling") -> None:
        if tab not in TABS:
            raise SettingError(f"The desk has no tab '{tab}'", remedy=nearest(tab, TABS))
        self._opened = study
        self.session = Session.of(study)
        self.panels: dict[str, Panel] = {}
        self._seen: dict[str, Study] = {}
        self._current = ""
        self._handle: DisplayHandle | None = None
        self._build(tab)
        self.session.follow(self)
        self.session.observe(self._on_problem, "problem")
        self.session.observe(self._on_settings, "settings")
        self._on_problem()
        self.open(tab)

    @property
    def panel(self) -> Panel | None:
        """The panel in view; None where it cannot be made of this sample."""
        return self.panels.get(self._current)

    def open(self, tab: str) -> None:
        """Bring a panel into view.

        Raises
        ------
        SettingError
            For an unknown tab, with the nearest known ones.
        """
        if tab not in TABS:
            raise SettingError(f"The desk has no tab '{tab}'", remedy=nearest(tab, TABS))
        index = list(TABS).index(tab)
        if self._tabs.index != index:
            self._tabs.index = index  # comes back here through the observer
            return
        if tab == self._current and tab in self.panels:
            return
        self._rest()
        self._current = tab
        try:
            panel = self._woken(tab)
        except SoffitError as error:
            self._reason.value = f"<p>This cannot be shown for this sample. {escape(str(error))}</p>"
            self._place.children = (self._reason,)
            return
        self._place.children = (panel.widget,)
        if self._handle is not None:
            panel._stills = [self._handle]
            panel._redraw_still()

    def close(self) -> None:
        """Free all panels and the bar."""
        self.session.unobserve(self._on_problem, "problem")
        self.session.unobserve(self._on_settings, "settings")
        for panel in self.panels.values():
            panel.close()
        self.panels.clear()
        free([self.widget, self._reason], sparing=[self.session.control(name).view for name in _BAR])
        self.session.leave(self)

    # What follows the session

    def compute(self, study: Study) -> None:
        """Refuse what the regressions refuse, whatever tab is open."""
        study.regression()

    def show(self, computed: None) -> None:
        """Try again to make a panel that an earlier sample did not allow."""
        if self.panel is None:
            tab, self._current = self._current, ""
            self.open(tab)

    # Parts

    def _build(self, tab: str) -> None:
        guard, control = self.session.guard, self.session.control
        self._factors = ipywidgets.Dropdown(
            description="Factors",
            tooltip="Which set of factors the regressions use",
            style={"description_width": "initial"},
            layout={"width": "auto", "max_width": "260px"},
        )
        self._on_settings()
        self._factors.observe(guard(self._on_factors), "value")
        before = [control(name).view for name in _BEFORE_FACTORS]
        after = [control(name).view for name in _AFTER_FACTORS]
        bar = ipywidgets.Box([*before, self._factors, *after])
        bar.add_class("soffit-controls")
        self._problem = ipywidgets.HTML()
        self._problem.add_class("soffit-problem")
        self._tabs = ipywidgets.ToggleButtons(options=list(TABS.values()), index=list(TABS).index(tab))
        self._tabs.add_class("soffit-tabs")
        self._tabs.observe(guard(self._on_tab), "index")
        self._reason = ipywidgets.HTML()
        self._place = ipywidgets.VBox([])
        self._place.add_class("soffit-desk-place")
        # Never seen: it brings the style sheet of tables and desk.
        style = CopyText(layout={"display": "none"})
        self.widget = ipywidgets.VBox([bar, self._problem, self._tabs, self._place, style])
        for name in ("soffit-panel", "soffit-desk", LIVE):
            self.widget.add_class(name)

    def _woken(self, tab: str) -> Panel:
        study = self.session.study
        panel = self.panels.get(tab)
        if panel is None:
            panel = self.panels[tab] = panel_of(self._opened, tab)
            controls = panel.widget.children[2 if isinstance(panel, ExhibitPanel) else 1]
            own = [control for control in controls.children if control not in self._shared]
            controls.children = own
            controls.layout.display = None if own else "none"
            return panel
        if self._seen.get(tab) is not study:
            panel.show(panel.compute(study))
        self.session.follow(panel)
        panel._on_selected()
        return panel

    @property
    def _shared(self) -> list[Any]:
        return [self.session.control(name).view for name in _BAR]

    def _rest(self) -> None:
        """Let the panel in view follow no more."""
        panel = self.panel
        if panel is not None:
            panel._stills = []
            self._seen[self._current] = self.session.study
            self.session.leave(panel)

    # Events

    def _on_tab(self, change: Any) -> None:
        self.open(list(TABS)[change["new"]])

    def _on_problem(self, _: Any = None) -> None:
        text = self.session.problem
        html = f'<div role="alert"><strong>Not done.</strong> {escape(text)}</div>' if text else ""
        self._problem.value = html
        self._problem.layout.display = None if text else "none"

    def _on_settings(self, _: Any = None) -> None:
        """Show which set of factors holds."""
        settings = self.session.settings
        sets = self._sets(settings)
        held = next((name for name, factors in sets.items() if factors == settings.factors), _OTHER)
        options = (*sets, _OTHER) if held == _OTHER else tuple(sets)
        if tuple(self._factors.options) != options:
            self._factors.options = options
        if self._factors.value != held:
            self._factors.value = held

    @staticmethod
    def _sets(settings: Settings) -> dict[str, tuple[str, ...] | None]:
        return {_ALL: None, **settings.factor_sets}

    def _on_factors(self, change: Any) -> None:
        sets = self._sets(self.session.settings)
        if change["new"] in sets and sets[change["new"]] != self.session.settings.factors:
            self.session.propose({"factors": sets[change["new"]]})
            self._on_settings()

    # Life

    def _ipython_display_(self) -> None:
        _displayed(self)  # type: ignore[arg-type]
        live = {**(self.widget._repr_mimebundle_() or {}), "text/plain": ""}
        display(live, raw=True)  # type: ignore[no-untyped-call]
        picture = HTML(self.panel._still() if self.panel else "")  # type: ignore[no-untyped-call]
        self._handle = display(picture, display_id=True)  # type: ignore[no-untyped-call]
        if self.panel is not None and self._handle is not None:
            self.panel._stills = [self._handle]
