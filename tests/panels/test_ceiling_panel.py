"""The ceiling panel, with the browser's part played by ``set_state``."""

from __future__ import annotations

from html import escape
from typing import Any

import numpy as np
import pytest
from ipywidgets.widgets.widget import _instances

from soffit.panels import CeilingPanel, still
from soffit.panels.painter import ASSETS, MOVING, Score
from soffit.panels.session import Session
from soffit.present.exhibits.ceiling import CEILING_STEPS, ceiling_figures
from soffit.present.spec import Band, FigureSpec, Rule
from soffit.present.wording.ceiling import ceiling_finding
from soffit.settings import CeilingForm
from soffit.study import Study


def slider(panel: CeilingPanel) -> Any:
    return panel.session.control("ceiling").widget


def traits(panel: CeilingPanel, key: str) -> Any:
    """The one bqplot mark of a key, in the figure in view."""
    (mark,) = next(iter(panel._figures.values())).marks(key)
    return mark


def test_it_opens_with_one_computation_and_one_draw(panel: CeilingPanel) -> None:
    assert (panel.computed, panel.drawn) == (1, 1)


def test_each_change_computes_and_draws_once(panel: CeilingPanel) -> None:
    for number, value in enumerate((0.8, 1.6, 2.4), start=2):
        slider(panel).set_state({"value": value, "dragging": False})
        assert (panel.computed, panel.drawn) == (number, number)


def test_a_drag_computes_once_at_release(panel: CeilingPanel) -> None:
    for value in np.round(np.arange(1.01, 1.5, 0.01), 2):
        slider(panel).set_state({"value": float(value), "dragging": True})
    assert (panel.computed, panel.drawn) == (1, 1)
    assert panel.session.settings.ceiling == 1.49
    slider(panel).set_state({"dragging": False})
    assert (panel.computed, panel.drawn) == (2, 2)


def test_an_equal_value_draws_nothing_and_sends_nothing(panel: CeilingPanel) -> None:
    figure = next(iter(panel._figures.values()))
    sent = figure.sent
    slider(panel).set_state({"value": 1.0, "dragging": False})
    panel.session.propose({"ceiling": 1.0, "ceiling_form": CeilingForm.ON_FACTORS})
    assert (panel.computed, panel.drawn, figure.sent) == (1, 1, sent)


def test_a_new_ceiling_sends_the_bound_and_no_point(panel: CeilingPanel) -> None:
    figure = next(iter(panel._figures.values()))
    points = figure.marks(ASSETS)[0]
    sent: list[str] = []
    points.observe(lambda change: sent.append(change["name"]))
    before = figure.sent
    slider(panel).set_state({"value": 2.0, "dragging": False})
    assert sent == []
    assert figure.sent - before == 3  # the heights of the band and of its two edges


@pytest.mark.parametrize("value", [0.05, 0.8, 1.37, 1.375, 2.9, 3.0, 4.2])
def test_finding_and_marks_are_those_of_the_exhibit(panel: CeilingPanel, value: float) -> None:
    slider(panel).set_state({"value": value, "dragging": False})
    assert panel._finding.text == str(ceiling_finding(panel.session.study.ceiling().facts))
    exhibit = panel.exhibit()
    assert exhibit.finding.text == panel._finding.text
    for shown, built in zip(panel._specs, exhibit.figures, strict=True):
        for one, other in zip(shown.marks, built.marks, strict=True):
            if one.key in MOVING - {ASSETS}:
                for name in ("x", "y", "low", "high", "at"):
                    if hasattr(other, name):
                        np.testing.assert_allclose(
                            getattr(one, name), getattr(other, name), rtol=1e-12, atol=1e-12
                        )


@pytest.mark.parametrize("form", list(CeilingForm))
def test_the_score_plays_what_the_kernel_would_say(study: Study, form: CeilingForm) -> None:
    score = Score.of(study.ceiling_map(), form)
    for step in (0, 40, 100, 171, 300):
        ceiling = float(CEILING_STEPS[step])
        verdict = study.ceiling(ceiling, form)
        assert score.sentences[step] == str(ceiling_finding(verdict.facts))
        statuses = [score.status(i, ceiling) for i in range(len(verdict.status))]
        assert statuses == list(verdict.status)


def test_turns_come_in_order_so_that_counts_nest(study: Study) -> None:
    for form in CeilingForm:
        defined, no_longer_outside, inside = Score.of(study.ceiling_map(), form).turns
        assert (defined <= no_longer_outside).all()
        assert (no_longer_outside <= inside).all()


def test_the_painter_moves_the_marks_to_where_the_exhibit_has_them(panel: CeilingPanel) -> None:
    panel._views.index = 1
    panel._views.index = 2
    places = {place["css"]: place for place in panel._painter.figures}
    assert [len(places[panel.css(spec.key)]["moving"]) for spec in panel._specs] == [3, 3, 1]
    for step in (0, 95, 180, 300):
        study = panel.session.study.changed(ceiling=float(CEILING_STEPS[step]))
        for spec in ceiling_figures(study):
            figure = panel._figures[spec.key]
            keys = {figure.position(mark.key): mark for mark in spec.marks if mark.key in MOVING - {ASSETS}}
            for place in places[panel.css(spec.key)]["moving"]:
                built = keys[place["mark"]]
                if isinstance(built, Band):
                    x, y = np.append(built.x, built.x[::-1]), np.append(built.low, built.high[::-1])
                elif isinstance(built, Rule):
                    x, y = np.full(2, built.at), np.array(figure.limits[1])
                else:
                    x, y = built.x, built.y
                at = []
                for name in ("across", "up"):
                    table = np.frombuffer(place[name], "<f4")
                    at.append(table if len(table) == len(x) else table.reshape(len(CEILING_STEPS), -1)[step])
                across, up = figure.shares(x, y)
                np.testing.assert_allclose(at[0], across, atol=1e-6)
                np.testing.assert_allclose(at[1], up, atol=1e-6)


def test_two_panels_of_one_study_share_slider_and_selection(study: Study) -> None:
    one, other = CeilingPanel(study), CeilingPanel(study)
    assert slider(one) is slider(other)
    slider(one).set_state({"value": 2.2, "dragging": False})
    assert one._finding.text == other._finding.text
    one._asset.set_state({"value": "Fund 03"})
    assert other.session.selected == "Fund 03"
    assert "Fund 03" in other._reading.value
    one.close()
    slider(other).set_state({"value": 0.7, "dragging": False})
    assert "0.70" in other._finding.text
    other.close()


def test_a_click_selects_the_asset_of_the_point(panel: CeilingPanel) -> None:
    figure = next(iter(panel._figures.values()))
    points = figure.marks(ASSETS)[0]
    points._handle_custom_msgs(points, {"event": "element_click", "data": {"index": 4}}, None)
    assert panel.session.selected == "Fund 04"
    assert panel._asset.value == "Fund 04"
    ring = figure.widget.marks[-1]
    assert ring.visible
    assert ring.x[0] == points.x[4]


def test_the_reading_gives_status_and_numbers(panel: CeilingPanel) -> None:
    panel.session.select("Fund 02")
    status = panel.session.study.ceiling().status["Fund 02"]
    text = panel._reading.value
    assert f"<b>{status}</b>" in text
    for word in ("alpha", "residual volatility", "R²", "appraisal ratio", "needs a ceiling of"):
        assert word in text
    panel.session.select("")
    assert panel._reading.value == ""


def test_names_are_text_wherever_they_are_shown(panel: CeilingPanel) -> None:
    panel.session.select("<b>Alpha & Co</b>")
    assert "&lt;b&gt;Alpha &amp; Co&lt;/b&gt;" in panel._reading.value
    assert "<b>Alpha" not in panel._reading.value
    slider(panel).set_state({"value": 0.3, "dragging": False})
    assert "<b>Alpha" not in panel._still().replace("alt=", "")


def test_a_refused_ceiling_puts_the_slider_back(panel: CeilingPanel) -> None:
    slider(panel).set_state({"value": -1.0, "dragging": False})
    assert slider(panel).value == 1.0
    assert "greater than or equal to 0" in panel._problem.value
    assert panel._problem.layout.display is None
    slider(panel).set_state({"value": 0.9, "dragging": False})
    assert panel._problem.layout.display == "none"


def test_another_sample_rewrites_the_score_once(panel: CeilingPanel) -> None:
    before = panel._painter.sentences
    panel.session.control("start").widget.set_state({"value": "2008-01"})
    assert (panel.computed, panel.drawn) == (2, 2)
    assert panel._painter.sentences != before
    assert "2008-01" in panel._sample.value


def test_keep_says_the_number_and_keeps_what_is_shown(panel: CeilingPanel, study: Study) -> None:
    slider(panel).set_state({"value": 0.8, "dragging": False})
    panel._keep.click()
    assert "exhibit 1" in panel._said.value
    (kept,) = study.kept
    assert kept.settings.ceiling == 0.8
    assert kept.exhibit.finding.text == panel._finding.text


def test_switching_views_makes_each_figure_once(panel: CeilingPanel) -> None:
    for index in (1, 2, 0, 1):
        panel._views.index = index
        assert panel._place.children == (panel._figures[panel._specs[index].key].widget,)
    assert len(panel._figures) == 3


def test_a_view_opened_after_a_drag_stands_where_the_slider_does(panel: CeilingPanel) -> None:
    slider(panel).set_state({"value": 2.3, "dragging": False})
    panel._views.index = 2
    (rule,) = panel._figures["ceiling-p"].marks("ceiling")
    np.testing.assert_array_equal(rule.x, [2.3, 2.3])


def test_closing_leaves_no_widget_and_no_observer(study: Study) -> None:
    before = set(_instances)
    made = CeilingPanel(study)
    made._views.index = 1
    session = made.session
    made.close()
    assert set(_instances) == before
    assert session.followers == ()
    assert not session._controls
    assert Session.of(study) is not session


def test_the_still_picture_carries_text_alternative_and_finding(panel: CeilingPanel) -> None:
    html = panel._still()
    assert html.count("<img ") == 1
    assert 'src="data:image/png;base64,' in html
    assert 'alt="Alphas of 12 assets against' in html
    assert "Jointly" in html
    assert "script" not in html


def test_the_still_picture_is_of_the_ceiling_in_force(
    panel: CeilingPanel, monkeypatch: pytest.MonkeyPatch
) -> None:
    drawn: list[FigureSpec] = []
    monkeypatch.setattr(still, "png_bytes", lambda spec: drawn.append(spec) or b"")
    slider(panel).set_state({"value": 2.4, "dragging": False})
    for index, built in enumerate(ceiling_figures(panel.session.study)):
        panel._views.index = index
        html = panel._still()
        spec = drawn[-1]
        assert f'alt="{escape(built.alt)}"' in html
        assert panel._finding.alts[panel.css(spec.key)] == built.alt
        assert spec.key == built.key
        for one, other in zip(spec.marks, built.marks, strict=True):
            assert getattr(one, "roles", None) == getattr(other, "roles", None)
            assert getattr(one, "label", None) == getattr(other, "label", None)


def test_no_joint_test_for_more_assets_than_months() -> None:
    import pandas as pd

    rng = np.random.default_rng(3)
    dates = pd.date_range("2015-01-31", periods=40, freq="ME")
    returns = pd.DataFrame(rng.normal(0, 0.03, (40, 60)), dates, [f"S{i}" for i in range(60)])
    factors = pd.DataFrame(rng.normal(0.01, 0.03, (40, 1)), dates, ["Market"])
    made = CeilingPanel(Study.open(returns, factors))
    assert "no joint test" in made._finding.text
    made._views.index = 2
    slider(made).set_state({"value": 0.4, "dragging": False})
    assert made.session.problem == ""
    made.close()


def test_one_asset_and_a_ceiling_below_the_factors() -> None:
    import pandas as pd

    rng = np.random.default_rng(5)
    dates = pd.date_range("2015-01-31", periods=60, freq="ME")
    returns = pd.DataFrame(rng.normal(0.01, 0.03, (60, 1)), dates, ["One"])
    factors = pd.DataFrame(rng.normal(0.02, 0.03, (60, 1)), dates, ["Market"])
    study = Study.open(returns, factors).changed(ceiling=0.1)
    made = CeilingPanel(study)  # opened where no band exists
    assert "no alpha can be judged" in made._finding.text
    slider(made).set_state({"value": 3.0, "dragging": False})
    upper = ceiling_figures(made.session.study)[0].marks[1]
    np.testing.assert_allclose(traits(made, "upper").y, upper.y)
    assert upper.y[-1] > 0
    made.close()
