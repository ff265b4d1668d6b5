"""Drawing with bqplot: what a specification becomes, and that an update sends only what differs."""

from __future__ import annotations

import dataclasses
from collections.abc import Iterator
from typing import Any

import bqplot
import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from ipywidgets.widgets.widget import _instances

from soffit.demo import demo_study
from soffit.present.draw_bqplot import DrawnFigure, colour
from soffit.present.exhibits import EXHIBITS, build
from soffit.present.live.axes import limits, tick_key, ticks
from soffit.present.spec import (
    Axis,
    AxisScale,
    Band,
    Bars,
    FigureSpec,
    Line,
    Mark,
    NumberForm,
    Orientation,
    Points,
    Role,
    Rule,
    Segments,
)

X = np.array([1.0, 2.0, 3.0])
Y = np.array([0.1, -0.2, 0.3])
NAMES = ("One", "Two", "Three")
PLAIN = Axis("x", limits=(0.0, 4.0))
UP = Axis("y", NumberForm.PERCENT, limits=(-0.5, 0.5))


def spec(*marks: Mark, x: Axis = PLAIN, y: Axis = UP) -> FigureSpec:
    return FigureSpec("figure", "A figure", x, y, marks, alt="A figure.")


@pytest.fixture
def draw() -> Iterator[Any]:
    made: list[DrawnFigure] = []

    def drawn(*marks: Mark, moving: tuple[str, ...] = (), **axes: Axis) -> DrawnFigure:
        made.append(DrawnFigure(spec(*marks, **axes), moving=moving))
        return made[-1]

    yield drawn
    for figure in made:
        figure.close()


def kinds(figure: DrawnFigure, key: str) -> list[str]:
    return [type(mark).__name__ for mark in figure.marks(key)]


def test_points_of_several_roles_become_one_scatter_a_role(draw: Any) -> None:
    figure = draw(Points("p", X, Y, NAMES, (Role.OUTSIDE, Role.INSIDE, Role.OUTSIDE)))
    inside, outside = figure.marks("p")
    assert (inside.marker, outside.marker) == ("circle", "diamond")
    np.testing.assert_array_equal(inside.x, [2.0])
    np.testing.assert_array_equal(outside.y, [0.1, 0.3])
    assert list(outside.names) == ["One", "Three"]
    assert inside.stroke == colour(Role.INSIDE)


def test_points_that_change_in_the_browser_stay_one_mark(draw: Any) -> None:
    mark = Points("p", X, Y, NAMES, (Role.OUTSIDE, Role.INSIDE, Role.OUTSIDE))
    figure = draw(mark, moving=("p",))
    assert kinds(figure, "p") == ["Scatter"]
    figure.update(spec(dataclasses.replace(mark, roles=(Role.INSIDE,) * 3)))
    assert figure.sent == 0


def test_equal_hover_texts_lose_no_point(draw: Any) -> None:
    figure = draw(Points("p", X, Y, NAMES, hover=("same",) * 3))
    (scatter,) = figure.marks("p")
    # bqplot would take equal names for one point.
    assert scatter.names_unique is False
    assert list(scatter.names) == ["same"] * 3


@pytest.mark.parametrize("index", [0, 1])
def test_a_click_gives_the_name_behind_the_scatter(draw: Any, index: int) -> None:
    roles = (Role.OUTSIDE, Role.INSIDE, Role.OUTSIDE)
    figure = draw(Points("p", X, Y, NAMES, roles, selectable=True))
    chosen: list[str] = []
    figure.on_select(chosen.append)
    outside = figure.marks("p")[1]
    outside._handle_custom_msgs(outside, {"event": "element_click", "data": {"index": index}}, None)
    assert chosen == [("One", "Three")[index]]


def test_a_click_after_an_update_gives_the_new_name(draw: Any) -> None:
    mark = Points("p", X, Y, NAMES, selectable=True)
    figure = draw(mark)
    chosen: list[str] = []
    figure.on_select(chosen.append)
    (scatter,) = figure.marks("p")
    figure.update(spec(dataclasses.replace(mark, names=("A", "B", "C"))))
    assert figure.marks("p") == [scatter]
    scatter._handle_custom_msgs(scatter, {"event": "element_click", "data": {"index": 2}}, None)
    assert chosen == ["C"]


def test_points_that_cannot_be_selected_do_not_answer(draw: Any) -> None:
    figure = draw(Points("p", X, Y, NAMES))
    figure.on_select(pytest.fail)
    (scatter,) = figure.marks("p")
    scatter._handle_custom_msgs(scatter, {"event": "element_click", "data": {"index": 0}}, None)


def test_labels_stand_at_their_points(draw: Any) -> None:
    figure = draw(Points("p", X, Y, NAMES, labelled=(0, 2)))
    assert kinds(figure, "p") == ["Scatter", "Label", "Label"]
    label = figure.marks("p")[2]
    assert list(label.text) == ["Three"]
    assert (label.x[0], label.y[0]) == (3.0, 0.3)
    assert (label.x_offset, label.y_offset) != (0, 0)


@pytest.mark.parametrize("orientation", list(Orientation))
def test_intervals_are_one_path_with_gaps(draw: Any, orientation: Orientation) -> None:
    figure = draw(Segments("s", X, Y - 0.1, Y + 0.1, orientation), x=Axis("x"), y=Axis("y"))
    (line,) = figure.marks("s")
    along, across = (line.y, line.x) if orientation is Orientation.VERTICAL else (line.x, line.y)
    # An interval is two points, and a point without a height parts it from the next one.
    parted = np.isnan(line.y)
    assert parted.sum() == 2
    np.testing.assert_allclose(along[~parted].reshape(3, 2), np.column_stack([Y - 0.1, Y + 0.1]))
    np.testing.assert_allclose(across[~parted].reshape(3, 2), np.column_stack([X, X]))


def test_a_line_is_labelled_in_the_margin_and_tells_its_values(draw: Any) -> None:
    x = np.linspace(0.0, 4.0, 9)
    figure = draw(Line("l", x, x / 10, label="a line"))
    assert kinds(figure, "l") == ["Lines", "Scatter", "Label"]
    _, points, label = figure.marks("l")
    assert points.names[3] == "a line: 1.50, 15.00%"
    assert label.x[0] == 4.0
    assert figure.widget.fig_margin["right"] > 40


def test_labels_in_the_margin_do_not_cover_each_other(draw: Any) -> None:
    x = np.linspace(0.0, 4.0, 9)
    lines = [Line(f"l{i}", x, x / 100 + i / 1000, label=f"line {i}") for i in range(4)]
    figure = draw(*lines)
    tops = [float(figure.marks(f"l{i}")[2].y_offset) - 340 * (0.04 + i / 1000) for i in range(4)]
    assert np.diff(np.sort(tops)).min() >= 12


def test_a_moving_line_has_no_label_and_no_points(draw: Any) -> None:
    figure = draw(Line("l", X, Y, label="a line"), moving=("l",))
    assert kinds(figure, "l") == ["Lines"]


def test_dates_are_naive_and_hover_names_the_month(draw: Any) -> None:
    dates = pd.date_range("2001-01-31", periods=30, freq="ME").to_numpy()
    figure = draw(Line("l", dates, np.linspace(0, 1, 30)), x=Axis("", NumberForm.DATE, scale=AxisScale.DATE))
    line, points = figure.marks("l")
    assert line.x.dtype.kind == "M"
    np.testing.assert_array_equal(line.x.astype("datetime64[D]"), dates.astype("datetime64[D]"))
    assert points.names[0].startswith("2001-01,")
    assert isinstance(figure.widget.axes[0].scale, bqplot.DateScale)


def test_dates_with_a_time_zone_lose_it(draw: Any) -> None:
    dates = pd.date_range("2001-01-31", periods=3, freq="ME", tz="Asia/Tokyo")
    figure = draw(Line("l", dates, Y), x=Axis("", NumberForm.DATE, scale=AxisScale.DATE))
    assert list(figure.marks("l")[0].x.astype("datetime64[D]").astype(str)) == [
        "2001-01-31",
        "2001-02-28",
        "2001-03-31",
    ]


def test_a_band_lies_between_its_lines(draw: Any) -> None:
    figure = draw(Band("b", X, Y - 0.1, Y + 0.1, label="range"))
    area, label = figure.marks("b")
    assert area.fill == "between"
    np.testing.assert_allclose(area.y, [Y - 0.1, Y + 0.1])
    assert list(label.text) == ["range"]


@pytest.mark.parametrize("orientation", list(Orientation))
def test_a_rule_crosses_the_whole_figure(draw: Any, orientation: Orientation) -> None:
    figure = draw(Rule("r", 0.25, orientation, label="here"))
    line, label = figure.marks("r")
    upright = orientation is Orientation.VERTICAL
    np.testing.assert_allclose(line.x, [0.25, 0.25] if upright else [0.0, 4.0])
    np.testing.assert_allclose(line.y, [-0.5, 0.5] if upright else [0.25, 0.25])
    assert list(label.text) == ["here"]
    # A label over the plot needs room there.
    assert (figure.widget.fig_margin["top"] > 10) is upright


def test_labels_over_the_plot_take_rows_where_they_would_meet(draw: Any) -> None:
    rules = [Rule(f"r{i}", 2.0 + i / 100, Orientation.VERTICAL, label="a long label here") for i in range(3)]
    figure = draw(*rules)
    assert len({figure.marks(rule.key)[1].y_offset for rule in rules}) == 3


@pytest.mark.parametrize("orientation", list(Orientation))
def test_bars_start_at_zero_and_stand_side_by_side(draw: Any, orientation: Orientation) -> None:
    at = np.arange(3.0)
    names = Axis("", NumberForm.TEXT, scale=AxisScale.CATEGORY, categories=NAMES)
    upright = orientation is Orientation.VERTICAL
    figure = draw(
        Bars("a", at, Y, NAMES, orientation, label="first"),
        Bars("b", at, -Y, NAMES, orientation, label="second"),
        x=names if upright else UP,
        y=UP if upright else names,
    )
    first, second = figure.marks("a")[0], figure.marks("b")[0]
    ends, sides = (first.y, first.x) if upright else (first.x, first.y)
    np.testing.assert_allclose(ends[:, [1, 2]], np.column_stack([Y, Y]))
    np.testing.assert_allclose(ends[:, [0, 3]], 0.0)
    other = second.x if upright else second.y
    assert (sides.max(axis=1) <= other.min(axis=1) + 1e-12).all()
    assert first.labels[1] == "first, Two: −20.00%"
    assert figure.widget.axes[0 if upright else 1].tick_labels == {"0": "One", "1": "Two", "2": "Three"}


def test_an_update_in_place_sends_only_what_differs(draw: Any) -> None:
    line, points = Line("l", X, Y), Points("p", X, Y, NAMES)
    figure = draw(points, line)
    before = list(figure.widget.marks)
    figure.update(spec(Points("p", X.copy(), Y.copy(), NAMES), Line("l", X.copy(), Y.copy())))
    assert figure.sent == 0
    figure.update(spec(points, dataclasses.replace(line, y=Y + 0.1)))
    assert list(figure.widget.marks) == before
    assert figure.sent == 3  # the line's heights; heights and texts of its hover points
    np.testing.assert_allclose(figure.marks("l")[0].y, Y + 0.1)


def test_gaps_compare_as_equal(draw: Any) -> None:
    gaps = np.array([0.1, np.nan, 0.3])
    figure = draw(Line("l", X, gaps), moving=("l",))
    figure.update(spec(Line("l", X, gaps.copy())))
    assert figure.sent == 0


def test_marks_that_come_and_go(draw: Any) -> None:
    figure = draw(Line("a", X, Y), Rule("r", 0.0))
    kept = figure.marks("r")
    gone = figure.marks("a")
    figure.update(spec(Rule("r", 0.0), Points("p", X, Y, NAMES)))
    assert figure.marks("r") == kept
    assert figure.marks("a") == []
    assert all(mark.comm is None for mark in gone)
    assert [type(mark).__name__ for mark in figure.widget.marks] == ["Lines", "Scatter", "Scatter"]


def test_the_ring_finds_its_point_and_goes(draw: Any) -> None:
    figure = draw(Points("p", X, Y, NAMES, selectable=True))
    ring = figure.widget.marks[-1]
    figure.ring("Two")
    assert (ring.visible, ring.x[0], ring.y[0]) == (True, 2.0, -0.2)
    figure.ring("nobody")
    assert ring.visible is False


def test_closing_frees_everything() -> None:
    before = set(_instances)
    figure = DrawnFigure(
        spec(Points("p", X, Y, NAMES, labelled=(0,)), Line("l", X, Y, label="a"), Rule("r", 0.0))
    )
    figure.update(spec(Line("l", X, Y)))
    figure.close()
    assert set(_instances) == before


@pytest.mark.parametrize(
    "mark",
    [
        Points("m", np.empty(0), np.empty(0), ()),
        Line("m", np.empty(0), np.empty(0), label="none"),
        Segments("m", np.empty(0), np.empty(0), np.empty(0)),
        Band("m", np.empty(0), np.empty(0), np.empty(0), label="none"),
        Line("m", X, np.full(3, np.nan), label="gaps"),
        Points("m", X, np.full(3, np.nan), NAMES, labelled=(1,)),
        Rule("m", 99.0, label="out of sight"),
    ],
    ids=lambda mark: f"{type(mark).__name__}",
)
@pytest.mark.parametrize("ends", [(0.0, 4.0), None])
def test_nothing_to_show_is_drawn_as_nothing(draw: Any, mark: Mark, ends: tuple[float, float] | None) -> None:
    figure = draw(mark, x=Axis("x", limits=ends), y=Axis("y", limits=ends))
    assert figure.widget.marks


def test_every_exhibit_of_the_demo_can_be_drawn_and_updated() -> None:
    study = demo_study()
    for key in EXHIBITS:
        for described in build(key, study).figures:
            figure = DrawnFigure(described)
            figure.update(described)
            assert figure.sent == 0, described.key
            figure.close()


# Axes


def test_limits_leave_air_and_bars_stand_on_zero() -> None:
    low, high = limits(Axis("y"), (Points("p", X, Y, NAMES),), horizontal=False)
    assert low < -0.2 < 0.3 < high
    assert limits(Axis("y"), (Bars("b", X, np.abs(Y), NAMES),), horizontal=False)[0] == 0.0
    assert limits(Axis("y"), (Rule("r", 5.0),), horizontal=False)[1] > 5.0
    same = limits(Axis("y"), (Points("p", X, np.full(3, 2.0), NAMES),), horizontal=False)
    assert same[0] < 2.0 < same[1]
    log = limits(
        Axis("y", scale=AxisScale.LOG), (Line("l", X, np.array([0.0, 1.0, 100.0])),), horizontal=False
    )
    assert 0 < log[0] < 1.0 < 100.0 < log[1]


def test_tick_texts_drop_zeros_that_all_of_them_have() -> None:
    assert ticks(Axis("y", NumberForm.PERCENT), -0.11, 0.11, 9)[1] == ("−10%", "−5%", "0%", "5%", "10%")
    assert ticks(Axis("y", NumberForm.RATIO), 0.0, 1.0, 9)[1] == ("0.0", "0.2", "0.4", "0.6", "0.8", "1.0")
    assert ticks(Axis("y", NumberForm.COUNT), 0, 8000, 9)[1][-1] == "8,000"


def test_date_ticks_are_years_where_they_can_be() -> None:
    axis = Axis("", NumberForm.DATE, scale=AxisScale.DATE)
    start, end = (pd.Timestamp(day).timestamp() * 1000 for day in ("2001-02-28", "2019-12-31"))
    assert ticks(axis, start, end, 9)[1][0] in ("2002", "2004", "2005")
    end = pd.Timestamp("2001-08-31").timestamp() * 1000
    assert "2001-03" in ticks(axis, start, end, 9)[1]


@given(
    low=st.floats(-1e6, 1e6),
    width=st.floats(1e-6, 1e6),
    most=st.integers(1, 12),
    form=st.sampled_from([NumberForm.PERCENT, NumberForm.RATIO, NumberForm.COUNT, NumberForm.STATISTIC]),
)
def test_ticks_lie_inside_and_no_two_read_alike(
    low: float, width: float, most: int, form: NumberForm
) -> None:
    at, texts = ticks(Axis("y", form), low, low + width, most)
    assert len(at) == len(texts) == len(set(texts))
    assert len(at) <= most + 1
    slack = 1e-8 * max(width, abs(low))
    assert ((at >= low - slack) & (at <= low + width + slack)).all()


@pytest.mark.parametrize(
    ("value", "text"),
    # Number.prototype.toString of ECMA-262.
    [
        (0.0, "0"),
        (-0.1, "-0.1"),
        (1.0, "1"),
        (0.00001, "0.00001"),
        (1e-7, "1e-7"),
        (2.5e-10, "2.5e-10"),
        (1e20, "100000000000000000000"),
    ],
)
def test_tick_keys_are_written_as_a_browser_writes_numbers(value: float, text: str) -> None:
    assert tick_key(value) == text
