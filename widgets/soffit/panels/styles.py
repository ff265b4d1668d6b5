"""The one style sheet of all panels: colours from the theme, light and dark."""

from __future__ import annotations

import math
from pathlib import Path

from soffit.present.draw_bqplot import point_area
from soffit.present.spec import Role
from soffit.present.theme import Marker, look

__all__ = ["STATUS_ROLES", "glyph", "line_glyph", "marker_path", "status_marker", "stylesheet"]

_STATIC = Path(__file__).parent / "static"

# In the order of the codes that the painter uses.
STATUS_ROLES = {
    "inside": Role.INSIDE,
    "straddles": Role.STRADDLES,
    "outside": Role.OUTSIDE,
    "undefined": Role.MUTED,
}

# What a page is made of, in JupyterLab's own variables with a fallback for other front ends.
_PAGE = {
    "ink": ("var(--jp-ui-font-color0, #1F1F1F)", "var(--jp-ui-font-color0, #F0F0F0)"),
    "paper": ("var(--jp-layout-color0, #FFFFFF)", "var(--jp-layout-color0, #111111)"),
    "soft": ("var(--jp-ui-font-color2, #5C5C5C)", "var(--jp-ui-font-color1, #C8C8C8)"),
    "grid": ("#E6E6E6", "#3A3A3A"),
}


def marker_path(marker: Marker, area: float) -> str:
    """SVG path of a marker of some area, in square pixels, centred on the origin; in the shapes that bqplot draws."""
    if marker is Marker.CIRCLE:
        r = math.sqrt(area / math.pi)
        return f"M{r:.2f},0A{r:.2f},{r:.2f},0,1,1,{-r:.2f},0A{r:.2f},{r:.2f},0,1,1,{r:.2f},0Z"
    if marker is Marker.TRIANGLE:
        h = math.sqrt(area / (3 * math.sqrt(3)))
        w = math.sqrt(3) * h
        return f"M0,{-2 * h:.2f}L{w:.2f},{h:.2f}L{-w:.2f},{h:.2f}Z"
    half = math.sqrt(area) / 2
    if marker is Marker.DIAMOND:
        h = math.sqrt(area * math.sqrt(3) / 2)
        w = h / math.sqrt(3)
        return f"M0,{-h:.2f}L{w:.2f},0L0,{h:.2f}L{-w:.2f},0Z"
    if marker is Marker.SQUARE:
        return f"M{-half:.2f},{-half:.2f}H{half:.2f}V{half:.2f}H{-half:.2f}Z"
    return f"M{-half:.2f},{-half:.2f}L{half:.2f},{half:.2f}M{-half:.2f},{half:.2f}L{half:.2f},{-half:.2f}"


def status_marker(status: str) -> Marker:
    """Shape of a status; an undefined one is a cross, as nothing can be said of it."""
    return Marker.CROSS if status == "undefined" else look(STATUS_ROLES[status]).marker


def glyph(role: Role, marker: Marker, *, filled: bool) -> str:
    """Small inline SVG of a point, for keys and legends."""
    paint = f"var(--soffit-{role.value})"
    inside = paint if filled else "none"
    path = marker_path(marker, 56)
    return (
        '<svg width="14" height="14" viewBox="-7 -7 14 14" aria-hidden="true">'
        f'<path d="{path}" style="stroke:{paint};fill:{inside};stroke-width:1.5"/></svg>'
    )


def line_glyph(role: Role) -> str:
    """Small inline SVG of a line, for keys."""
    return (
        '<svg width="20" height="14" viewBox="0 0 20 14" aria-hidden="true">'
        f'<path d="M1,7H19" style="stroke:var(--soffit-{role.value});stroke-width:2"/></svg>'
    )


def _variables(dark: bool) -> str:
    roles = {role.value: look(role).dark if dark else look(role).light for role in Role}
    page = {name: pair[dark] for name, pair in _PAGE.items()}
    return "".join(f"--soffit-{name}:{value};" for name, value in {**page, **roles}.items())


def _status_rules() -> str:
    rules = []
    for status, role in STATUS_ROLES.items():
        drawn = look(role)
        paint = f"var(--soffit-{role.value})"
        fill = paint if drawn.filled and status != "undefined" else "var(--soffit-paper)"
        dot = f".soffit-figure .object_grp.soffit-{status} > path.dot"
        rules.append(f"{dot}{{fill:{fill} !important;stroke:{paint} !important;}}")
        for area in sorted({point_area(n) for n in (1, 100, 1000)}):
            shape = marker_path(status_marker(status), area)
            rules.append(f".soffit-points-{area} {dot}{{d:path('{shape}');}}")
    return "".join(rules)


def stylesheet() -> str:
    """All rules, with the theme's colours for light and dark pages."""
    return (
        f":root{{{_variables(dark=False)}}}"
        f'[data-jp-theme-light="false"]{{{_variables(dark=True)}}}'
        + _status_rules()
        + (_STATIC / "panel.css").read_text(encoding="utf-8")
    )
