"""The desk: panels in tabs, made when opened, caught up when they come back."""

from __future__ import annotations

from collections.abc import Iterator
from datetime import date
from typing import Any

import pandas as pd
import pytest
from ipywidgets.widgets.widget import _instances

from soffit.errors import SettingError
from soffit.panels import PANELS, Desk
from soffit.panels.desk import TABS
from soffit.panels.session import Session
from soffit.settings import Settings
from soffit.study import Study

SETS = {"market": ("Market",), "wrong": ("Market", "Carrry")}


@pytest.fixture
def desk(study: Study) -> Iterator[Desk]:
    made = Desk(Study(study.panel, Settings(factor_sets=SETS)))
    yield made
    made.close()


def press(desk: Desk, tab: str) -> None:
    desk._tabs.set_state({"index": list(TABS).index(tab)})


def test_it_has_a_tab_for_every_panel() -> None:
    assert list(TABS) == list(PANELS)


def test_an_unknown_tab_is_refused_with_the_nearest(study: Study) -> None:
    with pytest.raises(SettingError, match="ceiling"):
        Desk(study, "cieling")


def test_a_panel_is_made_when_its_tab_is_first_opened(desk: Desk) -> None:
    assert list(desk.panels) == ["ceiling"]
    press(desk, "regression")
    assert list(desk.panels) == ["ceiling", "regression"]
    assert desk._place.children == (desk.panel.widget,)
    regression = desk.panel
    press(desk, "ceiling")
    press(desk, "regression")
    assert desk.panel is regression
    assert (regression.computed, regression.drawn) == (1, 1)


def test_opening_every_tab_and_closing_leaves_nothing(study: Study) -> None:
    before = set(_instances)
    desk = Desk(study)
    for tab in TABS:
        press(desk, tab)
        assert desk.session.problem == ""
        assert desk.panel._finding.text
    session = desk.session
    desk.close()
    assert set(_instances) == before
    assert session.followers == ()
    assert Session.of(study) is not session


def test_only_the_panel_in_view_follows_and_the_others_catch_up(desk: Desk) -> None:
    ceiling = desk.panel
    press(desk, "regression")
    regression = desk.panel
    desk.session.control("start").widget.set_state({"value": "2007-01"})
    assert (regression.computed, ceiling.computed) == (2, 1)
    press(desk, "ceiling")
    assert (ceiling.computed, ceiling.drawn) == (2, 2)
    assert "2007-01" in ceiling._sample.value
    assert (regression.computed, regression.drawn) == (2, 2)


def test_a_selection_reaches_a_panel_that_comes_back(desk: Desk) -> None:
    press(desk, "hedge-walk")
    walk = desk.panel
    press(desk, "ceiling")
    desk.session.select("Fund 04")
    assert walk.drawn == 1
    press(desk, "hedge-walk")
    assert walk.drawn == 2
    assert any("Fund 04" in spec.title for spec in walk._specs)


def test_a_refused_sample_is_put_back_and_said_at_the_top(desk: Desk) -> None:
    press(desk, "intake")  # which itself would take any window
    text = desk.session.control("end").widget
    text.set_state({"value": "2005-03"})
    assert text.value == ""
    assert desk.session.study.settings.end is None
    assert desk._problem.layout.display is None
    assert "Not done" in desk._problem.value
    desk.session.propose({"ceiling": 0.9})
    assert desk._problem.layout.display == "none"


def test_factor_sets_are_chosen_by_name(desk: Desk) -> None:
    menu = desk._factors
    assert menu.options == ("all factors", "market", "wrong")
    menu.set_state({"index": 1})
    assert desk.session.study.settings.factors == ("Market",)
    assert (desk.panel.computed, desk.panel.drawn) == (2, 2)
    menu.set_state({"index": 2})
    assert "Carrry" in desk.session.problem
    assert menu.value == "market"
    assert desk.session.study.settings.factors == ("Market",)
    menu.set_state({"index": 0})
    assert desk.session.study.settings.factors is None
    desk.session.propose({"factors": ("Carry",)})
    assert menu.value == "as set in code"
    menu.set_state({"index": 0})
    assert menu.options == ("all factors", "market", "wrong")


def test_what_stands_in_the_bar_is_not_repeated_in_a_tab(study: Study) -> None:
    desk = Desk(study)
    bar = set(desk.widget.children[0].children)
    for tab in TABS:
        press(desk, tab)
        controls = next(c for c in desk.panel.widget.children if "soffit-controls" in c._dom_classes)
        assert not bar & set(controls.children)
        assert len(controls.children) == len(
            [name for name in type(desk.panel).controls if desk.session.control(name).view not in bar]
        )
    desk.close()


def test_a_tab_that_cannot_be_made_says_why_and_is_tried_again(study: Study) -> None:
    desk = Desk(study)
    desk.session.propose({"start": date(2011, 6, 1)})  # leaves too little for the walk
    press(desk, "hedge-walk")
    assert desk.panel is None
    assert "cannot be shown" in desk._reason.value
    assert "window" in desk._reason.value
    desk.session.propose({"start": None})
    assert desk.panel is not None
    assert desk._place.children == (desk.panel.widget,)
    desk.close()


def test_reasons_are_text(study: Study, monkeypatch: pytest.MonkeyPatch) -> None:
    def refused(study: Study, key: str) -> Any:
        raise SettingError("<script>alert(1)</script>")

    desk = Desk(study)
    monkeypatch.setattr("soffit.panels.desk.panel_of", refused)
    press(desk, "book")
    assert "&lt;script&gt;" in desk._reason.value
    desk.close()


def test_a_desk_on_the_study_of_a_panel_shares_its_session(study: Study) -> None:
    first, second = Desk(study), Desk(study, "regression")
    first.session.propose({"ceiling": 0.7})
    assert second.session.settings.ceiling == 0.7
    assert first.panel.computed == second.panel.computed == 2
    first.close()
    second.session.propose({"ceiling": 0.8})
    assert second.panel.drawn == 3
    second.close()


def test_more_assets_than_months() -> None:
    import numpy as np

    rng = np.random.default_rng(3)
    dates = pd.date_range("2014-01-31", periods=70, freq="ME")
    returns = pd.DataFrame(rng.normal(0, 0.03, (70, 90)), dates, [f"S{i}" for i in range(90)])
    factors = pd.DataFrame(rng.normal(0.01, 0.03, (70, 1)), dates, ["Market"])
    desk = Desk(Study.open(returns, factors))
    for tab in TABS:
        press(desk, tab)
        assert desk.session.problem == ""
        assert desk.panel is not None or "cannot be shown" in desk._reason.value
    desk.close()
