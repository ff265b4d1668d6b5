"""Panels that show one exhibit of a study: figures, the finding and tables, on the shared session."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from html import escape
from importlib import import_module
from typing import Any, ClassVar

import ipywidgets

from soffit.engine import Steps, beside
from soffit.errors import SettingError, SoffitError, nearest
from soffit.intake import Role
from soffit.panels.ceiling_panel import CeilingPanel
from soffit.panels.panel_base import Panel
from soffit.panels.table_view import TableView
from soffit.panels.work import Unfinished, Work, try_now
from soffit.present.exhibits import EXHIBITS, build
from soffit.present.freeing import free
from soffit.present.live.axes import MOST_NAMES
from soffit.present.spec import Exhibit, FigureSpec, Points
from soffit.study import Study

__all__ = [
    "PANELS",
    "BookPanel",
    "ExhibitPanel",
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
    "panel_of",
]


# Pixels of a figure that lists names: so much for each, and for the axis below.
_ROW, _AXIS, _LEAST = 22, 90, 400


@dataclass(frozen=True, eq=False)
class _Answer:
    """An exhibit, and the asset that was selected when it was built."""

    exhibit: Exhibit
    selected: str


class ExhibitPanel(Panel):
    """Base of the panels that show an exhibit as it is built; a subclass names it and its controls.

    Parameters
    ----------
    study : Study
        The study.
    """

    key: ClassVar[str] = ""
    heavy: ClassVar[bool] = False
    """Whether the result can take so long that the panel answers meanwhile."""
    follows_asset: ClassVar[bool] = False
    """Whether the figures are about the selected asset."""

    def __init__(self, study: Study) -> None:
        self._answer: _Answer | None = None
        try:
            super().__init__(study)
        except BaseException:
            # A panel that cannot show anything leaves nothing behind in the browser.
            self._free_parts()
            free([self.widget], sparing=self._views_of_controls())
            raise

    # What it shows

    def exhibit(self) -> Exhibit:
        """What the panel shows now."""
        if self._answer is None or self._work.running or self._stale:
            return self._made(self.session.study)
        return self._answer.exhibit

    def compute(self, study: Study) -> _Answer | Unfinished:
        """Compute the exhibit, or begin to where that takes long."""
        self.computed += 1
        if not self.heavy:
            return self._answered(study)
        # What the data refuse is refused now, before anything is left to the background.
        study.joint_test()
        answer: _Answer | Unfinished = try_now(self.steps(study))
        return answer

    def steps(self, study: Study) -> Steps[_Answer]:
        """Steps of the computation."""
        return (yield from beside(lambda: self._answered(study), "Computing"))

    def show(self, computed: _Answer | Unfinished) -> None:
        """Draw an exhibit, or wait for it while the panel answers."""
        if isinstance(computed, Unfinished):
            self._set_stale(True)
            self._show_parts(self._answer is not None)
            self._work.begin(computed.steps, self.show)
            return
        self._work.drop()
        if self.follows_asset and computed.selected != self.session.selected:
            computed = self._answered(self.session.study)
        self._set_stale(False)
        self._show_parts(True)
        self._draw(computed)

    def _answered(self, study: Study) -> _Answer:
        selected = self.session.selected
        return _Answer(self._made(study), selected)

    def _made(self, study: Study) -> Exhibit:
        if not self.follows_asset:
            return build(self.key, study)
        names = _assets(study)
        selected = self.session.selected
        found: Exhibit = import_module(EXHIBITS[self.key]).exhibit(
            study, selected if selected in names else None
        )
        return found

    def _draw(self, answer: _Answer) -> None:
        self.drawn += 1
        self._answer = answer
        exhibit, names = answer.exhibit, _assets(self.session.study)
        self._title.value = escape(exhibit.title)
        if self.follows_asset and tuple(self._asset.options) != names:
            self._asset.options = names
        self._show_figures(exhibit.figures)
        chosen = any(
            isinstance(mark, Points) and mark.selectable for f in exhibit.figures for mark in f.marks
        )
        (self.widget.add_class if chosen else self.widget.remove_class)("soffit-selectable")
        self._tables.show(exhibit.tables, names)
        self._show_texts(exhibit.sample, exhibit.finding.text, (*exhibit.notes, *exhibit.cautions))
        self._redraw_still()

    # Parts

    def _build(self) -> None:
        guard = self.session.guard
        self._title = ipywidgets.HTML()
        self._title.add_class("soffit-title")
        self._work = Work(self.session, lambda: self._set_stale(True), self._compute_after_all)
        self._stale = False
        self._tables = TableView(guard(self.session.select), guard)
        self._asset = ipywidgets.Combobox(
            description="Asset",
            placeholder="type or click a name",
            ensure_option=True,
            continuous_update=False,
            style={"description_width": "initial"},
            layout={"width": "260px", "display": None if self.follows_asset else "none"},
        )
        self._asset.observe(guard(self._on_asset), "value")
        super()._build()
        sample, controls, *middle, notes, foot, problem = self.widget.children
        # The finding stands with the figure; tables are for who wants to read on.
        self.widget.children = (
            self._title,
            sample,
            controls,
            *middle,
            foot,
            problem,
            self._tables.widget,
            notes,
        )
        controls.layout.display = None if self.controls else "none"
        self._show_figures(())

    def _between(self) -> Sequence[ipywidgets.DOMWidget]:
        return (self._work.widget, self._asset)

    def _show_figures(self, specs: tuple[FigureSpec, ...]) -> None:
        """Draw or update figures, and stay with the one in view where it is still there."""
        at = self._specs[self._views.index or 0].key if self._specs else ""
        keys = [spec.key for spec in specs]
        super()._show_figures(specs)
        if at in keys and self._views.index != keys.index(at):
            self._views.index = keys.index(at)

    def _show_view(self) -> None:
        super()._show_view()
        if self._specs:
            spec = self._specs[self._views.index or 0]
            height = f"{_height(spec)}px"
            layout = self._figures[spec.key].widget.layout
            if layout.height != height:
                layout.height = height

    def key_html(self, spec: FigureSpec) -> str:
        """Legend of what is not labelled in the figure itself; none where all marks are of one kind."""
        html = super().key_html(spec)
        return "" if html.count("<span>") == 1 else html

    def _set_stale(self, stale: bool) -> None:
        self._stale = stale
        (self.widget.add_class if stale else self.widget.remove_class)("soffit-stale")
        self._keep.disabled = stale

    def _show_parts(self, there: bool) -> None:
        """Show or hide what is empty before the first result is there."""
        for part in (self._finding, self._keep, self._tables.widget, self._notes):
            part.layout.display = None if there else "none"

    def _compute_after_all(self) -> None:
        self.show(self.compute(self.session.study))

    # Events

    def _on_asset(self, change: Any) -> None:
        if change["new"] in ("", *self._asset.options):
            self.session.select(change["new"])

    def _on_selected(self, _: Any = None) -> None:
        super()._on_selected()
        name = self.session.selected
        self._tables.select(name)
        if not self.follows_asset or self._answer is None or self._stale:
            return
        if self not in self.session.followers:
            return  # out of view on a desk; it catches up when it comes back
        if self._asset.value != name and name in ("", *self._asset.options):
            self._asset.value = name
        if self._answer.selected != name:
            self.session.guard(self._draw_selected)()

    def _draw_selected(self) -> None:
        self.computed += 1
        self._draw(self._answered(self.session.study))

    # Life

    def _views_of_controls(self) -> list[Any]:
        return [self.session.control(name).view for name in self.controls]

    def _free_parts(self) -> None:
        self._work.drop()
        self._tables.close()

    def close(self) -> None:
        """Stop what runs, leave the session and free everything in the browser."""
        self._free_parts()
        super().close()


def _height(spec: FigureSpec) -> int:
    """Height of a figure, in pixels: every name that its vertical axis lists needs a line."""
    return max(_LEAST, _AXIS + _ROW * min(len(spec.y.categories), MOST_NAMES))


def _assets(study: Study) -> tuple[str, ...]:
    return tuple(str(name) for name in study.sample().assets)


class IntakePanel(ExhibitPanel):
    """What was read, converted and dropped, and when each series has returns."""

    key = "intake"
    controls = ("start", "end", "histories")

    def _build(self) -> None:
        guard = self.session.guard
        self._series = ipywidgets.Dropdown(description="Series", style={"description_width": "initial"})
        self._role = ipywidgets.Dropdown(
            description="is read as",
            options=[(str(role), role) for role in Role],
            style={"description_width": "initial"},
        )
        self._read_again = ipywidgets.Button(
            description="Read again", tooltip="Read the sources again with this role; every panel follows"
        )
        self._series.observe(guard(self._on_series), "value")
        self._read_again.on_click(guard(self._on_read_again))
        row = ipywidgets.Box([self._series, self._role, self._read_again])
        row.add_class("soffit-controls")
        self._roles: dict[str, Role] = {}
        super()._build()
        *rest, notes = self.widget.children
        self.widget.children = (*rest, row, notes)

    def _draw(self, answer: _Answer) -> None:
        super()._draw(answer)
        found = self.session.study.record.coverage["role"]
        # A series that was ignored is in no table any more, but can be taken in again.
        self._roles = {name: role for name, role in self._roles.items() if role is Role.IGNORED} | {
            str(name): Role(str(role)) for name, role in found.items()
        }
        names = tuple(self._roles)
        if tuple(self._series.options) != names:
            self._series.options = names
        self._on_series()

    def _on_series(self, _: Any = None) -> None:
        if self._series.value in self._roles:
            self._role.value = self._roles[self._series.value]

    def _on_read_again(self, _: Any = None) -> None:
        name, role = self._series.value, self._role.value
        before = dict(self._roles)
        try:
            study = self.session.study.with_roles({name: role})
        except SoffitError as error:
            self.session.refuse(str(error))
            self._on_series()
            return
        self._roles[name] = role
        if not self.session.reopen(study):
            self._roles = before
            self._on_series()


class SharpePanel(ExhibitPanel):
    """Sharpe ratios of factors and assets with their intervals."""

    key = "sharpe-ratios"
    controls = ("level", "lag_rule", "lags", "trials")


class RegressionPanel(ExhibitPanel):
    """Factor regressions: alphas with their intervals, betas, fit."""

    key = "regression"
    controls = ("error_type", "lag_rule", "lags", "reference", "level")


class ManyAlphasPanel(ExhibitPanel):
    """Alphas judged together: p-values adjusted for the number of tests."""

    key = "many-alphas"
    controls = ("error_type", "level", "trials")


class JointPanel(ExhibitPanel):
    """Are all alphas zero? The exact and the asymptotic tests, their true sizes and their assumptions."""

    key = "joint"
    heavy = True
    controls = ("error_type", "lag_rule", "lags", "level", "power_sharpe")

    def steps(self, study: Study) -> Steps[_Answer]:
        """Simulate the sizes of the Wald tests first, which takes longest and can tell how far it is."""
        yield from study.wald_sizes_steps()
        return (yield from super().steps(study))


class ShrinkagePanel(ExhibitPanel):
    """Alphas shrunk by what a Sharpe ceiling makes of them."""

    key = "alphas-under-ceiling"
    controls = ("ceiling", "ceiling_form")


class FactorSetsPanel(ExhibitPanel):
    """Sets of factors held against the same assets."""

    key = "factor-sets"
    controls = ("histories", "error_type", "level")


class PricesPanel(ExhibitPanel):
    """What the factors' risks get paid in the cross-section."""

    key = "prices-of-risk"
    heavy = True
    controls = (
        "cross_section.second_pass",
        "cross_section.constant",
        "cross_section.betas",
        "cross_section.window",
        "lag_rule",
        "lags",
        "level",
    )


class HedgePanel(ExhibitPanel):
    """Hedge ratios and what the hedge takes off."""

    key = "hedge"
    controls = (
        "hedge.beta",
        "hedge.dimson_lags",
        "hedge.ridge",
        "hedge.gross_cap",
        "hedge.leg_cap",
        "hedge.drop_legs",
        "hedge.risk_aversion",
    )


class WalkForwardPanel(ExhibitPanel):
    """The hedge walked through the sample without look-ahead: what was promised and what came."""

    key = "hedge-walk"
    heavy = True
    follows_asset = True
    controls = ("hedge.window_kind", "hedge.window", "hedge.hold", "hedge.lag", "hedge.beta")


class HedgeCostsPanel(ExhibitPanel):
    """What the walked hedge costs, and the alphas net of it."""

    key = "hedge-costs"
    heavy = True
    follows_asset = True
    controls = (
        "costs.asset_half_spread",
        "costs.factor_half_spread",
        "costs.financing",
        "costs.borrow",
        "hedge.hold",
    )


class BookPanel(ExhibitPanel):
    """Hedged assets weighed as one book."""

    key = "book"
    controls = ("hedge.risk_aversion",)


PANELS: dict[str, type[Panel]] = {
    "intake": IntakePanel,
    "sharpe-ratios": SharpePanel,
    "regression": RegressionPanel,
    "many-alphas": ManyAlphasPanel,
    "joint": JointPanel,
    "ceiling": CeilingPanel,
    "alphas-under-ceiling": ShrinkagePanel,
    "factor-sets": FactorSetsPanel,
    "prices-of-risk": PricesPanel,
    "hedge": HedgePanel,
    "hedge-walk": WalkForwardPanel,
    "hedge-costs": HedgeCostsPanel,
    "book": BookPanel,
}
"""The panel of each exhibit, in the order of a memo."""


def panel_of(study: Study, key: str) -> Panel:
    """Open the panel of an exhibit.

    Parameters
    ----------
    study : Study
        The study.
    key : str
        One of :data:`PANELS`, such as ``"hedge-walk"``.

    Raises
    ------
    SettingError
        For an unknown key, with the nearest known ones.
    """
    if key not in PANELS:
        raise SettingError(f"There is no panel '{key}'", remedy=nearest(key, PANELS))
    return PANELS[key](study)
