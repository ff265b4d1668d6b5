"""Panels of exhibits and their tables, with the browser's part played by ``set_state``."""

from __future__ import annotations

import itertools
import json
from collections.abc import Iterator
from html import unescape
from typing import Any

import numpy as np
import pandas as pd
import pytest
from ipywidgets.widgets.widget import _instances

from soffit.errors import EstimationError, SettingError
from soffit.panels import PANELS, CeilingPanel, RegressionPanel, WalkForwardPanel, panel_of
from soffit.panels import exhibit_panel as module
from soffit.panels.session import Session
from soffit.panels.table_view import TableView, sort_ranks
from soffit.present.exhibits import EXHIBITS, build
from soffit.present.plain import cells
from soffit.present.spec import Column, NumberForm, TableSpec
from soffit.study import Study

EVIL = "<script>alert(1)</script>"
SIMPLE = [key for key in PANELS if key != "ceiling"]


@pytest.fixture
def regression(study: Study) -> Iterator[RegressionPanel]:
    made = RegressionPanel(study)
    yield made
    made.close()


@pytest.fixture
def walk(study: Study) -> Iterator[WalkForwardPanel]:
    made = WalkForwardPanel(study)
    yield made
    made.close()


def table_of(spec: TableSpec, assets: tuple[str, ...] = ()) -> TableView:
    view = TableView(lambda name: None, lambda callback: callback)
    view.show((spec,), assets)
    return view


def sent_cells(view: TableView) -> list[list[Any]]:
    """What the browser gets: in each row a text and its rank by turns."""
    assert view.table is not None
    rows: list[list[Any]] = json.loads(view.table._dt_args["data_json"])
    return rows


def test_there_is_a_panel_for_every_exhibit() -> None:
    assert list(PANELS) == list(EXHIBITS)


def test_an_unknown_panel_is_refused_with_the_nearest(study: Study) -> None:
    with pytest.raises(SettingError, match="hedge-walk"):
        panel_of(study, "hedge-wlak")


@pytest.mark.parametrize("key", SIMPLE)
def test_it_shows_what_the_exhibit_says_and_frees_it(study: Study, key: str) -> None:
    before = set(_instances)
    made = panel_of(study, key)
    exhibit = build(key, study)
    assert (made.computed, made.drawn) == (1, 1)
    assert made._finding.text == exhibit.finding.text
    assert [spec.title for spec in made._specs] == [spec.title for spec in exhibit.figures]
    assert made._tables.copy.text.split("\n")[0].split("\t") == cells(exhibit.tables[0])[0]
    assert exhibit.sample.split(" · ")[0] in made._sample.value
    for index in range(len(exhibit.figures)):
        made._views.index = index
    for index, table in enumerate(exhibit.tables):
        made._tables._choice.index = index
        assert made._tables.copy.text == "\n".join("\t".join(row) for row in cells(table))
    session = made.session
    made.close()
    assert set(_instances) == before
    assert session.followers == ()
    assert Session.of(study) is not session


@pytest.mark.parametrize("key", [key for key in SIMPLE if key != "intake"])
def test_a_change_computes_and_draws_once_and_an_equal_value_never(study: Study, key: str) -> None:
    made = panel_of(study, key)
    made.session.propose({"level": 0.90})
    assert (made.computed, made.drawn) == (2, 2)
    made.session.propose({"level": 0.90})
    assert (made.computed, made.drawn) == (2, 2)
    assert made._finding.text == build(key, study.changed(level=0.90)).finding.text
    made.close()


def test_two_panels_never_disagree(study: Study) -> None:
    one, other = RegressionPanel(study), CeilingPanel(study)
    one.session.control("start").widget.set_state({"value": "2008-01"})
    for made in (one, other):
        assert "2008-01" in made._sample.value
        assert (made.computed, made.drawn) == (2, 2)
    one.close()
    other.close()


def test_a_click_on_a_point_and_on_a_row_selects_in_every_panel(study: Study) -> None:
    one, other = RegressionPanel(study), CeilingPanel(study)
    figure = one._figures["regression-alphas"]
    points = figure.marks("alphas")[0]
    points._handle_custom_msgs(points, {"event": "element_click", "data": {"index": 2}}, None)
    name = one.session.selected
    assert name
    assert other._asset.value == name
    index = one._tables.in_view.frame.index
    assert [index[row] for row in one._tables.table.selected_rows] == [name]
    one._tables.table.set_state({"selected_rows": [5]})
    assert one.session.selected == index[5] == other._asset.value
    one.session.select("")
    assert one._tables.table.selected_rows == []
    one.close()
    other.close()


def test_a_row_is_told_by_its_original_number(regression: RegressionPanel) -> None:
    # A change of the sample rewrites the table; the row in the browser still means the same asset.
    regression.session.propose({"assets": ("Fund 05", "Fund 03", "Fund 04")})
    regression._tables.table.set_state({"selected_rows": [2]})
    assert regression.session.selected == regression._tables.in_view.frame.index[2]


def test_the_walk_is_drawn_for_the_selected_asset(walk: WalkForwardPanel) -> None:
    walk._views.index = 1
    title = walk._specs[1].title
    walk.session.select("Fund 07")
    assert (walk.computed, walk.drawn) == (2, 2)
    assert walk._specs[1].title != title
    assert "Fund 07" in walk._specs[1].title
    assert walk._views.index == 1
    assert walk._asset.value == "Fund 07"
    walk.session.select("Fund 07")
    assert walk.drawn == 2
    walk.session.select("Market")  # a factor, which the walk does not hedge
    assert walk.session.problem == ""


def test_what_the_data_refuse_is_put_back_with_the_reason(walk: WalkForwardPanel) -> None:
    before = walk._finding.text
    slider = walk.session.control("hedge.window").widget
    slider.set_state({"value": 4000.0, "dragging": False})
    assert "window" in walk.session.problem
    assert "To mend it" in walk._problem.value
    assert walk._problem.layout.display is None
    assert slider.value == 60.0
    assert walk.session.study.settings.hedge.window == 60
    assert walk._finding.text == before
    slider.set_state({"value": 66.0, "dragging": False})
    assert walk.session.problem == ""
    assert walk._problem.layout.display == "none"
    assert walk._finding.text != before


def test_an_unforeseen_error_is_shown(regression: RegressionPanel, monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(key: str, study: Study) -> Any:
        raise KeyError("lost")

    monkeypatch.setattr(module, "build", broken)
    before = regression._finding.text
    regression.session.guard(lambda: regression.session.propose({"level": 0.9}))()
    assert "KeyError" in regression._problem.value
    assert regression._finding.text == before


def test_a_panel_that_cannot_be_made_leaves_nothing(study: Study, monkeypatch: pytest.MonkeyPatch) -> None:
    held = Session.of(study)
    for name in RegressionPanel.controls:
        held.control(name)
    before = set(_instances)

    def refused(key: str, study: Study) -> Any:
        raise EstimationError("Too few rows")

    monkeypatch.setattr(module, "build", refused)
    with pytest.raises(EstimationError):
        RegressionPanel(study)
    assert set(_instances) == before
    assert held.followers == ()


def test_building_a_panel_again_leaves_no_dead_observer(study: Study) -> None:
    held = CeilingPanel(study)  # keeps the session
    session = held.session
    observers = {name: len(found["change"]) for name, found in session._trait_notifiers.items()}
    for _ in range(3):
        made = RegressionPanel(study)
        made.close()
    assert {name: len(found["change"]) for name, found in session._trait_notifiers.items()} == observers
    assert session.followers == (held,)
    held.close()


def test_kept_is_what_is_shown(regression: RegressionPanel, study: Study) -> None:
    regression.session.propose({"level": 0.9})
    regression._keep.click()
    (kept,) = study.kept
    assert kept.settings.level == 0.9
    assert kept.exhibit.finding.text == regression._finding.text


def test_names_are_text_in_tables_figures_and_copies() -> None:
    rng = np.random.default_rng(1)
    dates = pd.date_range("2010-01-31", periods=90, freq="ME")
    factors = pd.DataFrame(rng.normal(0.004, 0.03, (90, 1)), dates, [f"F{EVIL}"])
    returns = pd.DataFrame(
        factors.to_numpy() + rng.normal(0, 0.02, (90, 3)),
        dates,
        [EVIL, 'a"b&c', "<img src=x onerror=alert(1)>"],
    )
    made = RegressionPanel(Study.open(returns, factors))
    sent = json.dumps(made._tables.table._dt_args)
    for bad in ("<script", "<img"):
        assert bad not in sent
    assert "&lt;script&gt;alert(1)&lt;/script&gt;" in sent
    assert EVIL in made._tables.copy.text  # copied as it is called
    made.session.select(EVIL)
    assert "<script" not in made._still()
    for value in (made._title.value, made._sample.value, made._notes.value, made._key.value):
        assert "<script" not in value
    made.close()


# Tables


def test_ranks_sort_like_the_numbers_they_stand_for() -> None:
    values = [0.10, -2.0, np.nan, 30.0, 4.0, np.inf, -np.inf, None]
    ranks = sort_ranks(values)
    assert ranks[2] == ranks[7] == 0  # what does not exist comes before all
    there = [i for i in range(8) if i not in (2, 7)]
    for i, j in itertools.product(there, there):
        assert (ranks[i] < ranks[j]) == (values[i] < values[j])
    # The texts would sort otherwise: "30.00" before "4.00".
    assert ranks[4] < ranks[3]


def test_ranks_of_dates_words_and_statuses() -> None:
    dates = [pd.Timestamp("2020-02-29"), pd.NaT, pd.Timestamp("1999-12-31")]
    np.testing.assert_array_equal(sort_ranks(dates), [2, 0, 1])
    np.testing.assert_array_equal(sort_ranks(["beta", "Alpha", "gamma", "beta"]), [2, 1, 3, 2])
    np.testing.assert_array_equal(sort_ranks(["outside", "inside", "undefined", "straddles"]), [3, 1, 4, 2])
    np.testing.assert_array_equal(sort_ranks(["none", 3.0, 2.0]), [3, 2, 1])
    assert len(sort_ranks([])) == 0


def test_every_number_is_sorted_by_its_value_not_its_text(study: Study) -> None:
    spec = build("regression", study).tables[0]
    view = table_of(spec)
    rows = sent_cells(view)
    assert len(rows) == len(spec.frame)
    for place, column in enumerate(spec.columns, start=1):
        ranks = [row[2 * place + 1] for row in rows]
        values = spec.frame[column.key].to_numpy(dtype=float)
        np.testing.assert_array_equal(np.argsort(ranks, kind="stable"), np.argsort(values, kind="stable"))
        assert [unescape(row[2 * place]) for row in rows] == [row[place] for row in cells(spec)[1:]]
        assert view.table._dt_args["columnDefs"][place]["orderData"] == [2 * place + 1]
    view.close()


def test_thousands_of_rows_are_all_sent() -> None:
    count = 6000
    frame = pd.DataFrame({"x": np.arange(count) * 0.1}, index=[f"Asset {i}" for i in range(count)])
    view = table_of(TableSpec("t", "T", (Column("x", "X"),), frame), tuple(frame.index))
    rows = sent_cells(view)
    assert len(rows) == count
    assert rows[-1][0] == f"Asset {count - 1}"
    assert view.table._dt_args["paging"] is True
    view.close()


def test_a_status_is_a_word_and_a_shape() -> None:
    frame = pd.DataFrame({"status": ["inside", "outside"]}, index=["A", "B"])
    view = table_of(TableSpec("t", "T", (Column("status", "Status", NumberForm.TEXT),), frame))
    texts = [row[2] for row in sent_cells(view)]
    for text, word in zip(texts, ("inside", "outside"), strict=True):
        assert word in text
        assert "<path" in text
    assert texts[0] != texts[1].replace("outside", "inside")
    view.close()


def test_unlike_quantities_are_not_sorted() -> None:
    frame = pd.DataFrame({"v": [0.05, 3.0]}, index=["p <of> a", "t"])
    spec = TableSpec(
        "t", "T", (Column("v", "Value"),), frame, row_forms=(NumberForm.PVALUE, NumberForm.RATIO)
    )
    view = table_of(spec)
    assert view.table is None
    assert "<td>0.050</td>" in view._plain.value
    assert "p &lt;of&gt; a" in view._plain.value
    view.close()


def test_the_same_cells_are_not_sent_again(regression: RegressionPanel) -> None:
    sent: list[Any] = []
    regression._tables.table.observe(sent.append, "_dt_args")
    regression.session.propose({"ceiling": 0.7})
    assert regression.drawn == 2
    assert sent == []
    regression.session.propose({"error_type": "HC3"})
    assert len(sent) == 1
