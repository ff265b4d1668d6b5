"""The session: shared by panels, one computation a change, changes that the data refuse taken back."""

from __future__ import annotations

import gc
import logging
from typing import Any

import pytest

from soffit.errors import EstimationError
from soffit.panels.session import Session
from soffit.present.exhibits import build
from soffit.study import Study


class Counter:
    """A follower that counts."""

    def __init__(self) -> None:
        self.computed: list[float] = []
        self.shown: list[float] = []
        self.fails = False

    def compute(self, study: Study) -> float:
        if self.fails:
            raise EstimationError("Too few rows", remedy="widen the window")
        self.computed.append(study.settings.ceiling)
        return study.settings.ceiling

    def show(self, computed: Any) -> None:
        self.shown.append(computed)


@pytest.fixture
def session(study: Study) -> Session:
    return Session.of(study)


def test_one_study_has_one_session_and_another_study_has_its_own(study: Study) -> None:
    one = Session.of(study)
    assert Session.of(study) is one
    assert Session.of(study.changed(ceiling=0.5)) is not one


def test_a_session_goes_with_its_last_user(study: Study) -> None:
    held = Session.of(study)
    assert Session.of(study) is held
    del held
    gc.collect()
    assert id(study) not in Session._open


def test_a_settled_change_computes_and_draws_once(session: Session) -> None:
    follower = Counter()
    session.follow(follower)
    assert session.propose({"ceiling": 0.8})
    assert (follower.computed, follower.shown, session.results) == ([0.8], [0.8], 1)


def test_an_equal_value_computes_nothing(session: Session) -> None:
    follower = Counter()
    session.follow(follower)
    session.propose({"ceiling": session.settings.ceiling})
    session.propose({})
    assert (follower.computed, follower.shown, session.results) == ([], [], 0)


def test_a_drag_computes_nothing_until_it_settles(session: Session) -> None:
    follower = Counter()
    session.follow(follower)
    for ceiling in (0.7, 0.8, 0.9):
        session.propose({"ceiling": ceiling}, settle=False)
    assert session.settings.ceiling == 0.9
    assert session.study.settings.ceiling == 1.0
    assert follower.computed == []
    session.propose({"ceiling": 0.9})
    assert (follower.computed, follower.shown, session.results) == ([0.9], [0.9], 1)


def test_what_the_data_refuse_is_taken_back_for_all(session: Session) -> None:
    steady, failing = Counter(), Counter()
    session.follow(steady)
    session.follow(failing)
    failing.fails = True
    assert not session.propose({"ceiling": 0.8})
    assert session.settings.ceiling == session.study.settings.ceiling == 1.0
    assert "Too few rows" in session.problem
    assert "widen the window" in session.problem
    assert steady.shown == failing.shown == []
    assert session.results == 0


def test_a_window_too_short_is_refused_by_a_real_study(session: Session, panel: Any) -> None:
    text = session.control("end").widget
    text.set_state({"value": "2005-02"})
    assert session.problem
    assert text.value == ""
    assert session.study.settings.end is None
    assert panel.drawn == 1


def test_an_unknown_setting_is_refused_with_the_nearest(session: Session) -> None:
    assert not session.propose({"ceilling": 0.8})
    assert "ceiling" in session.problem


def test_keeping_twice_under_equal_settings_keeps_once(session: Session, study: Study) -> None:
    assert session.keep(build("ceiling", session.study)) == 1
    assert session.keep(build("ceiling", session.study)) == 1
    session.propose({"ceiling": 0.8})
    assert session.keep(build("ceiling", session.study)) == 2
    assert [item.settings.ceiling for item in study.kept] == [1.0, 0.8]


def test_a_failing_callback_is_shown_and_logged(session: Session, caplog: pytest.LogCaptureFixture) -> None:
    def broken(_: Any) -> None:
        raise KeyError("nothing there")

    with caplog.at_level(logging.ERROR, logger="soffit.panels"):
        session.guard(broken)(None)
    assert "KeyError" in session.problem
    assert "nothing there" in caplog.text


def test_an_expected_error_is_shown_in_its_own_words(session: Session) -> None:
    def refused(_: Any) -> None:
        raise EstimationError("Too few rows", remedy="widen the window")

    session.guard(refused)(None)
    assert session.problem == "Too few rows. To mend it: widen the window."
