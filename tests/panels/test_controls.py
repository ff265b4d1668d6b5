"""Controls: one for each setting, in step with it, and put back when a value is refused."""

from __future__ import annotations

from datetime import date
from enum import StrEnum

import ipywidgets
import pytest

from soffit.panels.controls import NumberSlider
from soffit.panels.session import Session
from soffit.settings import CeilingForm, ErrorType, Settings
from soffit.study import Study

NAMES = [name for name, _ in Settings.fields()]
WITHOUT = ["factor_sets", "costs.half_spreads"]  # named lists: typed in code or in a file, not in a control


@pytest.fixture
def session(study: Study) -> Session:
    return Session.of(study)


@pytest.mark.parametrize("name", [name for name in NAMES if name not in WITHOUT])
def test_every_setting_has_a_control_that_shows_it(session: Session, name: str) -> None:
    control = session.control(name)
    note = Settings.note(name)
    widget = control.widget
    if isinstance(widget, NumberSlider):
        assert widget.label == note.label
    elif isinstance(widget, ipywidgets.TagsInput):
        assert control.view.children[0].value == note.label
    else:
        assert widget.description == note.label
    value = session.settings.get(name)
    assert control._read(widget.value) == value
    if isinstance(value, StrEnum):
        assert isinstance(widget, ipywidgets.Dropdown)
    if isinstance(value, bool):
        assert isinstance(widget, ipywidgets.Checkbox)


@pytest.mark.parametrize("name", WITHOUT)
def test_a_setting_without_a_control_says_so(session: Session, name: str) -> None:
    with pytest.raises(TypeError, match=name):
        session.control(name)


def test_slider_takes_range_and_words_from_the_setting(session: Session) -> None:
    slider = session.control("ceiling").widget
    assert (slider.low, slider.high, slider.step, slider.decimals) == (0.0, 3.0, 0.01, 2)
    assert slider.unit == "a year"
    assert slider.help == Settings.note("ceiling").help
    assert session.control("trials").widget.decimals == 0


@pytest.mark.parametrize(
    ("name", "shown", "value"),
    [
        ("ceiling", 0.8, 0.8),
        ("ceiling", 3.5, 3.5),  # typed beyond the slider's range, which settings allow
        ("trials", 40.0, 40),
        ("hedge.gross_cap", 2.5, 2.5),
        ("ceiling_form", "each hedged asset alone", CeilingForm.ALONE),
        ("error_type", "HC1", ErrorType.HC1),
        ("start", "2006-03", date(2006, 3, 1)),
        ("start", "2006-03-15", date(2006, 3, 15)),
        ("factors", ["Carry"], ("Carry",)),
        ("cross_section.constant", False, False),
    ],
)
def test_a_changed_control_changes_the_setting(
    session: Session, name: str, shown: object, value: object
) -> None:
    widget = session.control(name).widget
    chosen = isinstance(widget, ipywidgets.Dropdown)  # of which a browser sends the position
    widget.set_state({"index": widget.options.index(shown)} if chosen else {"value": shown})
    assert session.problem == ""
    assert session.settings.get(name) == value
    assert session.study.settings.get(name) == value


@pytest.mark.parametrize(
    ("name", "shown", "reason"),
    [
        ("ceiling", -0.5, "'ceiling' is -0.5"),
        ("trials", 2.5, "'trials' is 2.5"),
        ("trials", 0.0, "'trials' is 0"),
        ("start", "March", "'March' is not a month"),
        ("level", 1.0, "'level' is 1.0"),
    ],
)
def test_a_refused_value_puts_the_control_back_and_says_why(
    session: Session, name: str, shown: object, reason: str
) -> None:
    control = session.control(name)
    before, settings = control.widget.value, session.settings
    control.widget.set_state({"value": shown})
    assert control.widget.value == before
    assert session.settings == settings
    assert reason in session.problem
    # A value that holds clears the problem.
    session.propose({"ceiling": 1.25})
    assert session.problem == ""


def test_a_setting_changed_in_code_moves_the_control_and_does_not_loop(session: Session) -> None:
    control = session.control("ceiling")
    proposals: list[object] = []
    session.observe(proposals.append, "settings")
    session.propose({"ceiling": 0.7})
    assert control.widget.value == 0.7
    assert len(proposals) == 1


def test_a_fraction_of_a_float_does_not_come_back_as_another(session: Session) -> None:
    session.propose({"ceiling": 0.1 + 0.2})
    assert session.control("ceiling").widget.value == 0.1 + 0.2
    assert session.settings.ceiling == 0.1 + 0.2
