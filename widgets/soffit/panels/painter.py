"""The score of the ceiling slider: all that a drag shows, written once, so that the browser can play it alone."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import anywidget
import numpy as np
import numpy.typing as npt
from traitlets import Bytes, Dict, Float, List, Unicode

from soffit.panels.controls import NumberSlider
from soffit.panels.panel_base import FindingLine
from soffit.panels.styles import STATUS_ROLES, marker_path, status_marker
from soffit.present.draw_bqplot import DrawnFigure, point_area
from soffit.present.exhibits.ceiling import CEILING_STEPS
from soffit.present.spec import Band, FigureSpec, Line, Mark, Orientation, Rule
from soffit.present.wording.ceiling import ceiling_finding
from soffit.settings import CeilingForm
from soffit.study import CeilingMap

__all__ = ["CeilingPainter", "Score", "moved"]

Floats = npt.NDArray[np.float64]

ASSETS = "assets"
MOVING = frozenset({ASSETS, "band", "upper", "lower", "ceiling"})


@dataclass(frozen=True, eq=False)
class Score:
    """What every step of the slider shows, for one set of regressions and one form of the ceiling.

    Parameters
    ----------
    map : CeilingMap
        What it was written from.
    form : CeilingForm
        Which portfolio the ceiling binds.
    factor : ndarray, shape (steps,)
        Largest appraisal ratio that each step sustains; NaN where undefined.
    sentences : tuple of str
        The finding at each step.
    turns : tuple of ndarray
        Ceilings from which each asset is defined, no longer outside, and inside; shape (N,) each.
    """

    map: CeilingMap
    form: CeilingForm
    factor: Floats
    sentences: tuple[str, ...]
    turns: tuple[Floats, Floats, Floats]

    @classmethod
    def of(cls, found: CeilingMap, form: CeilingForm) -> Score:
        """Write the score of a ceiling map."""
        facts = found.facts(CEILING_STEPS, form)
        sentences = tuple(str(ceiling_finding(fact)) for fact in facts)
        return cls(found, form, found.factor(CEILING_STEPS, form), sentences, found.thresholds(form))

    def finding(self, ceiling: float) -> str:
        """The finding at any ceiling."""
        at = np.flatnonzero(np.abs(CEILING_STEPS - ceiling) < 1e-9)
        if len(at):
            return self.sentences[int(at[0])]
        return str(ceiling_finding(self.map.facts([ceiling], self.form)[0]))

    def status(self, asset: int, ceiling: float) -> str:
        """Status of one asset at a ceiling: inside, straddles, outside or undefined."""
        defined, no_longer_outside, inside = (float(turn[asset]) for turn in self.turns)
        if ceiling < defined:
            return "undefined"
        if ceiling < no_longer_outside:
            return "outside"
        return "straddles" if ceiling < inside else "inside"


def moved(mark: Mark, base: Floats, factor: float, ceiling: float) -> Mark:
    """A mark where it stands at another ceiling; marks that do not move come back as they are.

    Parameters
    ----------
    mark : Mark
        Mark of one of the ceiling figures.
    base : ndarray
        Height of the figure's bound for each unit of appraisal ratio.
    factor : float
        Largest appraisal ratio that the ceiling sustains; NaN where undefined.
    ceiling : float
        The ceiling, annual.
    """
    height = np.nan_to_num(factor, nan=0.0) * base
    if isinstance(mark, Band) and mark.key == "band":
        return Band(mark.key, mark.x, -height, height, mark.role, mark.label)
    if isinstance(mark, Line) and mark.key in ("upper", "lower"):
        side = height if mark.key == "upper" else -height
        return Line(mark.key, mark.x, side, mark.role, mark.label, mark.dashed)
    if isinstance(mark, Rule) and mark.key == "ceiling":
        return Rule(mark.key, ceiling, Orientation.VERTICAL, mark.role, mark.label, mark.dashed)
    return mark


class CeilingPainter(anywidget.AnyWidget):
    """Listens to the slider in the browser and plays the score; shows nothing of its own.

    Parameters
    ----------
    slider : NumberSlider
        Whose value is the ceiling.
    finding : FindingLine
        Where the sentence is written.
    """

    _esm = Path(__file__).parent / "static" / "ceiling_painter.js"

    slider = Unicode().tag(sync=True)
    finding = Unicode().tag(sync=True)
    low = Float().tag(sync=True)
    step = Float().tag(sync=True)
    sentences = List(Unicode()).tag(sync=True)
    defined_from = Bytes().tag(sync=True)
    outside_below = Bytes().tag(sync=True)
    inside_from = Bytes().tag(sync=True)
    figures = List(Dict()).tag(sync=True)
    shapes = List(Unicode()).tag(sync=True)

    def __init__(self, slider: NumberSlider, finding: FindingLine) -> None:
        super().__init__(
            slider=_reference(slider),
            finding=_reference(finding),
            low=float(CEILING_STEPS[0]),
            step=float(CEILING_STEPS[1] - CEILING_STEPS[0]),
        )

    def load(self, score: Score) -> None:
        """Send a score to the browser."""
        count = len(score.turns[1])
        sent = [turn.astype("<f8").tobytes() for turn in score.turns]
        with self.hold_sync():
            self.sentences = list(score.sentences)
            self.defined_from, self.outside_below, self.inside_from = sent
            area = point_area(count)
            self.shapes = [marker_path(status_marker(status), area) for status in STATUS_ROLES]

    def attach(self, drawn: Mapping[str, DrawnFigure], bases: Mapping[str, Floats], score: Score) -> None:
        """Say which marks of which figures move, and where they stand at each step."""
        self.figures = [
            {
                "css": css,
                "marks": len(figure.widget.marks),
                "count": len(score.turns[1]),
                "points": figure.position(ASSETS),
                "moving": [
                    {"mark": figure.position(mark.key), **_tables(mark, figure, bases[css], score)}
                    for mark in figure.spec.marks
                    if mark.key in MOVING - {ASSETS}
                ],
            }
            for css, figure in drawn.items()
        ]


def _tables(mark: Mark, figure: DrawnFigure, base: Floats, score: Score) -> dict[str, Any]:
    """How a mark is painted, and where it stands at every step, in shares of the plot area."""
    at = [
        moved(mark, base, float(factor), float(ceiling))
        for factor, ceiling in zip(score.factor, CEILING_STEPS, strict=True)
    ]
    if isinstance(mark, Band):
        # Round the area: along its lower edge and back along the upper one.
        across, role = np.concatenate([mark.x, mark.x[::-1]]), mark.role
        up = np.array([np.concatenate([b.low, b.high[::-1]]) for b in at if isinstance(b, Band)])
    elif isinstance(mark, Line):
        across, role = np.asarray(mark.x), mark.role
        up = np.array([line.y for line in at if isinstance(line, Line)])
    else:
        assert isinstance(mark, Rule)
        across, role = np.array([[rule.at, rule.at] for rule in at if isinstance(rule, Rule)]), mark.role
        up = np.array(figure.limits[1])
    across, up = figure.shares(across, up)
    return {
        "kind": "area" if isinstance(mark, Band) else "line",
        "role": role.value,
        "across": across.astype("<f4").tobytes(),
        "up": up.astype("<f4").tobytes(),
    }


def base_of(spec: FigureSpec, factor: float) -> Floats:
    """Height of a figure's bound for each unit of appraisal ratio, read off the figure itself."""
    for mark in spec.marks:
        if isinstance(mark, Line) and mark.key == "upper":
            return np.asarray(mark.y / factor)
    return np.zeros(2)


def _reference(widget: Any) -> str:
    return f"IPY_MODEL_{widget.model_id}"
