"""The ceiling panel: drag the highest Sharpe ratio that a market could sustain, and read which alphas fit."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from html import escape
from typing import Any

import ipywidgets
import numpy as np
import numpy.typing as npt

from soffit.panels.painter import ASSETS, MOVING, CeilingPainter, Score, base_of, moved
from soffit.panels.panel_base import Panel
from soffit.panels.styles import STATUS_ROLES, glyph, line_glyph, status_marker
from soffit.present.draw_bqplot import DrawnFigure, point_area
from soffit.present.exhibits import ceiling as ceiling_exhibit
from soffit.present.spec import Exhibit, FigureSpec, Points, Role
from soffit.present.theme import look
from soffit.present.wording.sample import sample_line
from soffit.study import Study

__all__ = ["CeilingPanel"]

Floats = npt.NDArray[np.float64]


# In the order in which the exhibit has them.
_FIGURES = (ceiling_exhibit.alpha_sigma_figure, ceiling_exhibit.alpha_r2_figure, ceiling_exhibit.p_figure)

_MEANING = {
    "inside": "the whole interval of the alpha fits under the ceiling",
    "straddles": "part of the interval of the alpha fits under the ceiling",
    "outside": "no part of the interval of the alpha fits under the ceiling",
    "undefined": "the factors alone break the ceiling",
}


@dataclass(frozen=True, eq=False)
class _Shown:
    """What the panel shows of a study: the score, and figures at the study's ceiling."""

    study: Study
    score: Score
    specs: tuple[FigureSpec, ...]
    bases: dict[str, Floats]
    notes: tuple[str, ...]

    @property
    def points(self) -> Points:
        """The assets as points, with their names and hover texts."""
        return next(mark for mark in self.specs[0].marks if isinstance(mark, Points) and mark.key == ASSETS)


class CeilingPanel(Panel):
    """Alphas under a Sharpe ceiling that can be dragged from 0 to 3 a year.

    While the slider is dragged the browser plays a score written beforehand: points change status, the bound
    moves and the finding is rewritten without the kernel. At release the kernel settles: one computation, one draw.

    Parameters
    ----------
    study : Study
        The study.

    Examples
    --------
    >>> import soffit as sf                                      # doctest: +SKIP
    >>> sf.CeilingPanel(sf.Study.open("returns.csv", "factors.csv"))     # doctest: +SKIP
    """

    controls = ("ceiling", "ceiling_form")
    moving = MOVING

    def _build(self) -> None:
        guard = self.session.guard
        self._asset = ipywidgets.Combobox(
            description="Asset",
            placeholder="type or click a point",
            ensure_option=True,
            continuous_update=False,
            style={"description_width": "initial"},
            layout={"width": "260px"},
        )
        self._asset.observe(guard(self._on_asset), "value")
        self._reading = ipywidgets.HTML()
        self._reading.add_class("soffit-reading")
        self._row = ipywidgets.Box([self._asset, self._reading])
        self._row.add_class("soffit-foot")
        super()._build()
        self._painter = CeilingPainter(self.session.control("ceiling").widget, self._finding)
        self.widget.children = (*self.widget.children, self._painter)
        self.widget.add_class("soffit-selectable")
        self._shown: _Shown | None = None

    def _below(self) -> Sequence[ipywidgets.DOMWidget]:
        return (self._row,)

    def exhibit(self) -> Exhibit:
        """Build the exhibit in full at the settled ceiling."""
        return ceiling_exhibit.exhibit(self.session.study)

    def compute(self, study: Study) -> _Shown:
        """Compute what follows from the ceiling, and the rest only where something else changed."""
        self.computed += 1
        settings = study.settings
        found, form, ceiling = study.ceiling_map(), settings.ceiling_form, settings.ceiling
        before = self._shown
        if before is not None and before.score.map is found and before.score.form is form:
            factor = float(found.factor([ceiling], form)[0])
            specs = tuple(
                replace(
                    spec, marks=tuple(moved(m, before.bases[spec.key], factor, ceiling) for m in spec.marks)
                )
                for spec in before.specs
            )
            return replace(before, study=study, specs=specs)
        score = Score.of(found, form)
        exhibit = ceiling_exhibit.exhibit(study)
        return _Shown(study, score, exhibit.figures, _bases(study, exhibit.figures), exhibit.notes)

    def show(self, computed: _Shown) -> None:
        """Draw what was computed."""
        self.drawn += 1
        before, self._shown = self._shown, computed
        rewritten = before is None or before.score is not computed.score
        if rewritten:
            self._painter.load(computed.score)
            names = computed.points.names
            if tuple(self._asset.options) != names:
                self._asset.options = names
            self._set_point_size(len(names))
        self._show_figures(computed.specs)
        if rewritten:
            self._attach()
        settings = computed.study.settings
        self._show_texts(
            sample_line(computed.study), computed.score.finding(settings.ceiling), computed.notes
        )
        self._read()
        self._redraw_still()

    def _in_view(self) -> tuple[FigureSpec, ...]:
        # What is on screen was moved; words and labels for a reader are made again for this ceiling.
        study = self.session.study
        if self._shown is None or self._shown.study is not study or not self._specs:
            return super()._in_view()
        figure = _FIGURES[self._views.index or 0](study, study.ceiling())
        self._finding.alts = {**self._finding.alts, self.css(figure.key): figure.alt}
        return (figure,)

    def key_html(self, spec: FigureSpec) -> str:
        """Legend of the statuses, with a count that the painter keeps."""
        line = line_glyph(Role.CEILING)
        if not any(mark.key == ASSETS for mark in spec.marks):
            return f'<div class="soffit-key"><span>{line}the ceiling</span></div>'
        parts = []
        for status, role in STATUS_ROLES.items():
            filled = look(role).filled and status != "undefined"
            svg = glyph(role, status_marker(status), filled=filled)
            count = f'<b class="soffit-count-{status}"></b>'
            parts.append(f'<span title="{_MEANING[status]}">{svg}{status} {count}</span>')
        parts.append(f"<span>{line}largest alpha that the ceiling sustains</span>")
        return f'<div class="soffit-key">{"".join(parts)}</div>'

    def _set_point_size(self, count: int) -> None:
        for area in {point_area(n) for n in (1, 100, 1000)} - {point_area(count)}:
            self.widget.remove_class(f"soffit-points-{area}")
        self.widget.add_class(f"soffit-points-{point_area(count)}")

    def _figure_made(self, figure: DrawnFigure) -> None:
        self._attach()

    def _attach(self) -> None:
        if self._shown is not None:
            drawn = {self.css(key): figure for key, figure in self._figures.items()}
            bases = {self.css(key): base for key, base in self._shown.bases.items()}
            self._painter.attach(drawn, bases, self._shown.score)

    def _on_asset(self, change: Any) -> None:
        if change["new"] in ("", *self._asset.options):
            self.session.select(change["new"])

    def _on_selected(self, _: Any = None) -> None:
        super()._on_selected()
        if self._asset.value != self.session.selected and self.session.selected in ("", *self._asset.options):
            self._asset.value = self.session.selected
        self._read()

    def _read(self) -> None:
        """Write the reading line of the selected asset."""
        shown, name = self._shown, self.session.selected
        if shown is None or name not in shown.points.names:
            self._reading.value = "" if not name else f"{escape(name)} is not in this sample."
            return
        at = shown.points.names.index(name)
        status = shown.score.status(at, shown.study.settings.ceiling)
        role = STATUS_ROLES[status]
        mark = glyph(role, status_marker(status), filled=look(role).filled and status != "undefined")
        self._reading.value = f"{mark} <b>{status}</b> · {escape(shown.points.hover[at])}"


def _bases(study: Study, specs: tuple[FigureSpec, ...]) -> dict[str, Floats]:
    """Heights of the bounds for a unit of appraisal ratio, by figure."""
    found, settings = study.ceiling_map(), study.settings
    factor = float(found.factor([settings.ceiling], settings.ceiling_form)[0])
    if not factor > 0:
        # At this ceiling there is no band to read them off; a ceiling high enough has one.
        high = 1.0 + 2.0 * found.joint.factors_sharpe
        factor = float(found.factor([high], settings.ceiling_form)[0])
        specs = ceiling_exhibit.ceiling_figures(study.changed(ceiling=high))
    return {spec.key: base_of(spec, factor) for spec in specs}
