"""Still pictures: what is drawn, that nothing overlaps, that bytes repeat, that nothing global changes."""

from __future__ import annotations

import io
import itertools
import re
import subprocess
import sys

import matplotlib as mpl
import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from matplotlib.colors import to_rgb
from matplotlib.figure import Figure
from matplotlib.image import imread

from soffit.errors import SettingError, SoffitWarning
from soffit.present.draw_mpl import MemoWidth, draw, pdf_bytes, png_bytes, svg_bytes
from soffit.present.spec import (
    Axis,
    AxisScale,
    Band,
    Bars,
    FigureSpec,
    Line,
    NumberForm,
    Orientation,
    Points,
    Role,
    Rule,
    Segments,
)
from soffit.present.still.places import Box, Places, around, spread
from soffit.present.still.scales import ticks_of
from soffit.present.theme import MEMO_WIDTHS, look

NASTY = (
    "<script>alert(1)</script>",
    '=HYPERLINK("http://x")',
    r"$\alpha_{x",
    r"\input{x} % & # _ ^ ~",
    "a‮b",
    "a\x00b",
)


def scatter(n: int = 30, names: tuple[str, ...] = ()) -> FigureSpec:
    rng = np.random.default_rng(3)
    x, y = rng.uniform(0.05, 0.25, n), rng.normal(0, 0.08, n)
    roles = tuple([Role.INSIDE, Role.STRADDLES, Role.OUTSIDE][i % 3] for i in range(n))
    ends = np.linspace(0, 0.27, 40)
    return FigureSpec(
        "alpha-sigma",
        "Alpha against residual volatility",
        Axis("Residual volatility, % a year", NumberForm.PERCENT),
        Axis("Alpha, % a year", NumberForm.PERCENT),
        (
            Band("band", ends, -0.8 * ends, 0.8 * ends, label="allowed"),
            Line("upper", ends, 0.8 * ends, Role.CEILING, "ceiling 0.80"),
            Segments("interval", x, y - 0.02, y + 0.02),
            Points(
                "assets",
                x,
                y,
                names or tuple(f"Fund {i}" for i in range(n)),
                roles,
                labelled=tuple(range(0, n, 2)),
            ),
            Rule("zero", 0.0, label="zero"),
            Rule("market", 0.1, Orientation.VERTICAL, Role.MARKET, "market"),
        ),
        "Alphas of thirty funds against residual volatility.",
        "2003-01 to 2023-12, T = 252.",
    )


def dated() -> FigureSpec:
    dates = pd.date_range("1999-01-31", periods=120, freq="ME").to_numpy()
    steps = np.linspace(0, 1, 120)
    return FigureSpec(
        "rolling",
        "Rolling alpha",
        Axis("Month", NumberForm.DATE, scale=AxisScale.DATE),
        Axis("Alpha, % a year", NumberForm.PERCENT),
        (
            Line("a", dates, 0.01 * steps, Role.PROMISED, "promised"),
            Line("b", dates, 0.0101 * steps, Role.DELIVERED, "delivered"),
            Line("c", dates, 0.0102 * steps, Role.THIRD, "third"),
        ),
        "Three lines.",
    )


def bars() -> FigureSpec:
    names = tuple(f"Industry portfolio {i}" for i in range(14))
    roles = tuple([Role.INSIDE, Role.OUTSIDE][i % 2] for i in range(14))
    return FigureSpec(
        "bars",
        "Ceilings needed",
        Axis("", scale=AxisScale.CATEGORY, categories=names),
        Axis("Sharpe ratio, a year"),
        (Bars("b", np.arange(14.0), np.linspace(-1, 2, 14), names, roles=roles),),
        "Bars.",
    )


SPECS = [scatter(), dated(), bars()]
SAVERS = {"png": png_bytes, "svg": svg_bytes, "pdf": pdf_bytes}


def texts(figure: Figure) -> list[str]:
    return [
        text.get_text() for text in figure.findobj(mpl.text.Text) if text.get_visible() and text.get_text()
    ]


def boxes_of(figure: Figure) -> list[tuple[str, object]]:
    figure.draw_without_rendering()
    renderer = figure.canvas.get_renderer()
    shown = [t for t in figure.findobj(mpl.text.Text) if t.get_visible() and t.get_text().strip()]
    return [(text.get_text(), mpl.text.Text.get_window_extent(text, renderer)) for text in shown]


@pytest.mark.parametrize("width", list(MemoWidth))
@pytest.mark.parametrize("spec", SPECS, ids=lambda spec: spec.key)
def test_no_text_covers_another_or_leaves_the_sheet(spec: FigureSpec, width: MemoWidth) -> None:
    figure = draw(spec, width=width, footnote=True)
    found = boxes_of(figure)
    sheet = figure.bbox
    assert len(found) > 5
    for (one, a), (other, b) in itertools.combinations(found, 2):
        across = min(a.x1, b.x1) - max(a.x0, b.x0)
        up = min(a.y1, b.y1) - max(a.y0, b.y0)
        assert across < 1 or up < 1, f"'{one}' and '{other}' overlap"
    for name, box in found:
        assert min(box.x0, box.y0, sheet.x1 - box.x1, sheet.y1 - box.y1) >= -1, name


@pytest.mark.parametrize("width", list(MemoWidth))
def test_the_sheet_has_the_width_of_the_page_or_of_a_column(width: MemoWidth) -> None:
    assert draw(scatter(), width=width).get_size_inches()[0] == MEMO_WIDTHS[width]
    assert imread(io.BytesIO(png_bytes(scatter(), width=width, dpi=300))).shape[1] == round(
        300 * MEMO_WIDTHS[width]
    )


def test_an_unknown_width_is_refused_with_what_is_allowed() -> None:
    with pytest.raises(SettingError, match="'column', 'page'"):
        draw(scatter(), width="poster")


@pytest.mark.parametrize("spec", SPECS, ids=lambda spec: spec.key)
def test_titles_units_and_direct_labels_are_written(spec: FigureSpec) -> None:
    written = " ".join(texts(draw(spec)))
    wanted = [spec.title, spec.x.label, spec.y.label, *(getattr(mark, "label", "") for mark in spec.marks)]
    for text in wanted:
        assert text in written
    assert spec.title not in texts(draw(spec, title=False))


def test_the_legend_names_the_roles_in_the_figure_and_only_those() -> None:
    written = texts(draw(scatter()))
    assert {"inside", "straddles", "outside"} <= set(written)
    assert "outside" not in texts(draw(dated()))


def test_names_that_find_no_room_are_counted_on_the_sheet() -> None:
    n = 60
    spot = np.full(n, 0.5)
    names = tuple(f"A rather long name of a fund, number {i}" for i in range(n))
    crowd = FigureSpec(
        "crowd",
        "Crowd",
        Axis("x"),
        Axis("y"),
        (Points("p", spot, spot, names, labelled=tuple(range(n))),),
        "Crowd.",
    )
    written = texts(draw(crowd, width=MemoWidth.COLUMN))
    said = [text for text in written if "not written for want of room" in text]
    assert len(said) == 1
    shown = sum(text.startswith("A rather long name") for text in written)
    assert int(re.match(r"\d+", said[0])[0]) == n - shown


# Colour is never the only sign: each role that stands for a status has a shape or a filling of its own.
def test_statuses_differ_by_shape_and_by_grey() -> None:
    shapes = {
        role: (look(role).marker, look(role).filled) for role in (Role.INSIDE, Role.STRADDLES, Role.OUTSIDE)
    }
    assert len(set(shapes.values())) == 3
    drawn = {
        (line.get_marker(), line.get_markerfacecolor() == "white")
        for line in draw(scatter()).axes[0].lines
        if line.get_linestyle() == "None"
    }
    assert len(drawn) == 3
    for role in Role:
        red, green, blue = to_rgb(look(role).light)
        # Relative luminance, WCAG 2.2: at least 3:1 against white for graphical objects, 2.6 for muted ones.
        linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in (red, green, blue)]
        contrast = 1.05 / (np.dot(linear, [0.2126, 0.7152, 0.0722]) + 0.05)
        assert contrast >= (2.6 if role is Role.MUTED else 3.0), role


def test_bars_of_several_roles_carry_their_shapes() -> None:
    tips = [line for line in draw(bars()).axes[0].lines if line.get_linestyle() == "None"]
    assert len({line.get_marker() for line in tips}) == 2
    assert sum(len(line.get_xdata()) for line in tips) == 14


def test_curves_that_differ_by_role_differ_by_markers() -> None:
    markers = [line.get_marker() for line in draw(dated()).axes[0].lines]
    assert len(set(markers)) == 3


@pytest.mark.parametrize("kind", list(SAVERS))
@pytest.mark.parametrize("spec", SPECS, ids=lambda spec: spec.key)
def test_two_runs_give_the_same_bytes(spec: FigureSpec, kind: str) -> None:
    assert SAVERS[kind](spec) == SAVERS[kind](spec)


@pytest.mark.parametrize("kind", list(SAVERS))
def test_another_process_gives_the_same_bytes(kind: str) -> None:
    code = (
        "import numpy as np, hashlib\n"
        "from soffit.present.spec import *\n"
        f"from soffit.present.draw_mpl import {SAVERS[kind].__name__} as save\n"
        "x = np.linspace(0, 1, 9)\n"
        "spec = FigureSpec('k', 'T', Axis('x'), Axis('y'), (Line('l', x, x * x, label='line'),"
        " Points('p', x, x, tuple('abcdefghi'), labelled=(1, 2))), 'alt')\n"
        "print(hashlib.sha256(save(spec)).hexdigest())\n"
    )
    runs = {
        subprocess.run(
            [sys.executable, "-c", code],
            capture_output=True,
            text=True,
            check=True,
            env={"PYTHONHASHSEED": seed},
        ).stdout
        for seed in ("1", "2")
    }
    assert len(runs) == 1


@pytest.mark.parametrize("name", NASTY)
def test_names_are_text_and_never_markup(name: str) -> None:
    spec = scatter(3, (name, name + "1", name + "2"))
    figure = draw(spec)
    seen = [text for text in figure.findobj(mpl.text.Text) if text.get_text()]
    assert not any(text.get_parse_math() for text in seen if "$" in text.get_text())
    svg = svg_bytes(spec).decode()
    assert "<script>alert" not in svg
    assert "\x00" not in svg
    assert "‮" not in svg
    for save in SAVERS.values():
        assert len(save(spec)) > 1000


def test_svg_holds_text_as_text_and_the_text_alternative() -> None:
    svg = svg_bytes(scatter()).decode()
    assert "Alphas of thirty funds against residual volatility." in svg
    assert re.search(r"<text[^>]*>Alpha against residual volatility</text>", svg)
    assert not re.search(r"\d{4}-\d\d-\d\dT\d\d:\d\d", svg)
    assert mpl.__version__ not in svg


def test_nothing_global_changes_and_a_foreign_style_plays_no_part() -> None:
    before = dict(mpl.rcParams)
    plain = png_bytes(scatter())
    assert dict(mpl.rcParams) == before
    with mpl.rc_context({"font.size": 30, "axes.facecolor": "black", "text.usetex": True}):
        assert png_bytes(scatter()) == plain
    assert "matplotlib.pyplot" not in sys.modules or not sys.modules["matplotlib.pyplot"].get_fignums()


def test_a_character_without_a_glyph_is_said() -> None:
    with pytest.warns(SoffitWarning, match="stand as boxes"):
        png_bytes(scatter(2, ("基金", "Fund")))


@pytest.mark.parametrize(
    "marks",
    [
        (),
        (Points("p", np.array([np.nan]), np.array([np.nan]), ("a",), labelled=(0,)),),
        (Line("l", np.array([]), np.array([]), label="none"),),
        (Line("l", np.array([1.0]), np.array([2.0]), label="one"),),
        (Band("b", np.array([]), np.array([]), np.array([]), label="none"),),
        (Rule("r", 0.0, label="zero"),),
        (Bars("b", np.array([0.0]), np.array([0.0]), ("a",)),),
        (Line("l", np.array([0.0, 1, 2, 3]), np.array([1.0, np.inf, np.nan, 2]), label="gap"),),
    ],
)
def test_degenerate_marks_still_give_a_picture(marks: tuple[object, ...]) -> None:
    for scale in (AxisScale.LINEAR, AxisScale.LOG):
        spec = FigureSpec("d", "Degenerate", Axis("x"), Axis("y", scale=scale), marks, "Nothing.")
        assert png_bytes(spec).startswith(b"\x89PNG")


def test_ten_thousand_points_stay_small_in_svg() -> None:
    n = 10_000
    rng = np.random.default_rng(0)
    points = Points("p", rng.normal(size=n), rng.normal(size=n), tuple(map(str, range(n))))
    spec = FigureSpec("many", "Many", Axis("x"), Axis("y"), (points,), "Many.")
    assert len(svg_bytes(spec)) < 1_000_000


@pytest.mark.parametrize(
    ("axis", "limits", "expected"),
    [
        (Axis("", NumberForm.PERCENT), (0.0, 0.1), ["0%", "2%", "4%", "6%", "8%", "10%"]),
        (Axis("", NumberForm.RATIO), (0.0, 1.0), ["0.0", "0.2", "0.4", "0.6", "0.8", "1.0"]),
        (Axis("", NumberForm.PVALUE), (0.0, 1.0), ["0.0", "0.2", "0.4", "0.6", "0.8", "1.0"]),
        (Axis("", NumberForm.COUNT), (0.0, 3.0), ["0", "1", "2", "3"]),
        (
            Axis("", scale=AxisScale.DATE),
            (0.0, 365.25 * 5 + 1),
            ["1970", "1971", "1972", "1973", "1974", "1975"],
        ),
        (Axis("", scale=AxisScale.DATE), (0.0, 92.0), ["1970-01", "1970-02", "1970-03", "1970-04"]),
    ],
)
def test_ticks_are_written_short_and_never_twice(
    axis: Axis, limits: tuple[float, float], expected: list[str]
) -> None:
    assert [text for _, text in ticks_of(axis, limits, 6)] == expected


# Labels that collide are moved apart by the least squares that keep their order (isotonic regression).
@settings(deadline=None)
@given(st.lists(st.floats(-50, 150), max_size=8), st.floats(1, 12))
def test_spread_labels_keep_apart_in_order_and_in_range(centres: list[float], height: float) -> None:
    moved = spread(centres, height, 0.0, 100.0)
    assert len(moved) == len(centres)
    ordered = [moved[i] for i in np.argsort(centres, kind="stable")]
    assert all(b - a >= height - 1e-6 for a, b in itertools.pairwise(ordered))
    assert all(height / 2 - 1e-6 <= value <= 100 - height / 2 + 1e-6 for value in moved)


def test_labels_that_do_not_collide_stay() -> None:
    assert spread([80.0, 20.0, 50.0], 10, 0, 100) == [80.0, 20.0, 50.0]


def test_places_refuse_what_is_taken_and_prefer_what_is_free() -> None:
    places = Places(Box(0, 0, 100, 100))
    places.avoid(np.array([[50.0, 40, 90, 60]]), 1.0)
    options = around(45, 50, 20, 8, 4)
    first = places.settle(options)
    assert first is not None
    assert options[first].x1 <= 50 or not 40 < options[first].y0 < 60
    again = places.settle([options[first], Box(200, 0, 210, 10)])
    assert again is None
