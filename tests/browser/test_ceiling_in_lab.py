"""The ceiling panel in JupyterLab, worked with mouse and keyboard as an analyst does."""

from __future__ import annotations

import json
import re
import time
from collections import Counter
from collections.abc import Callable
from typing import TYPE_CHECKING

import pytest

if TYPE_CHECKING:
    from lab import Lab, Sheet

pytestmark = pytest.mark.browser

SLIDER = ".soffit-number input[type=range]"
ENTRY = ".soffit-number input[type=text]"
FINDING = ".soffit-finding p >> nth=0"
STATUS = re.compile(r"soffit-(inside|straddles|outside|undefined)")


def statuses(sheet: Sheet) -> list[str]:
    """Status that each point wears, in the order of the assets."""
    worn = sheet.find(".soffit-figure .object_grp[class*=soffit-]").evaluate_all(
        "(nodes) => nodes.map((node) => node.getAttribute('class'))"
    )
    found = [STATUS.search(classes) for classes in worn]
    return [match.group(1) for match in found if match]


def expected(sheet: Sheet, ceiling: float) -> tuple[list[str], str]:
    """Statuses and finding that the study itself gives."""
    code = f"""
import json
from soffit.present.wording.ceiling import ceiling_finding
verdict = study.ceiling({ceiling!r})
print(json.dumps([list(verdict.status), str(ceiling_finding(verdict.facts))]))
"""
    worn, finding = json.loads(sheet.python(code))
    return worn, finding


def bound(sheet: Sheet) -> str:
    """Path of the upper bound."""
    return str(sheet.find(".soffit-moving path.soffit-moving-line").first.get_attribute("d"))


def until(true: Callable[[], bool], seconds: float = 5.0) -> None:
    deadline = time.monotonic() + seconds
    while not true():
        assert time.monotonic() < deadline, "it did not happen in time"
        time.sleep(0.03)


def test_dragging_moves_finding_bound_and_points_without_the_kernel(sheet: Sheet) -> None:
    before = (sheet.find(FINDING).inner_text(), bound(sheet), statuses(sheet))
    # Hold the kernel, so that only the browser can answer.
    sheet.page.evaluate(
        "() => { window.jupyterapp.shell.currentWidget.sessionContext.session.kernel"
        ".requestExecute({ code: 'import time; time.sleep(4)' }); }"
    )
    sheet.drag(sheet.find(SLIDER).first, 1 / 3, 0.15, hold=True)
    until(lambda: sheet.find(FINDING).inner_text() != before[0])
    shown = float(sheet.find(ENTRY).first.input_value())
    assert 0.3 < shown < 0.6
    during = (sheet.find(FINDING).inner_text(), bound(sheet), statuses(sheet))
    assert f"ceiling of {shown:.2f} a year" in during[0]
    assert during[1] != before[1]
    assert during[2] != before[2]
    sheet.page.mouse.up()
    sheet.rest()
    assert (statuses(sheet), sheet.find(FINDING).inner_text()) == expected(sheet, shown)
    assert during == (sheet.find(FINDING).inner_text(), bound(sheet), statuses(sheet))
    settled = sheet.python("print(panel.session.study.settings.ceiling, panel.computed, panel.drawn)")
    assert settled.split() == [f"{shown:g}", "2", "2"]


def test_points_differ_by_shape_and_counts_are_written(sheet: Sheet) -> None:
    sheet.find(ENTRY).first.fill("0.9")
    sheet.find(ENTRY).first.press("Enter")
    sheet.rest()
    worn, finding = expected(sheet, 0.9)
    assert statuses(sheet) == worn
    assert sheet.find(FINDING).inner_text() == finding
    shapes = sheet.find(".soffit-figure .object_grp[class*=soffit-] > path.dot").evaluate_all(
        "(dots) => dots.map((dot) => getComputedStyle(dot).getPropertyValue('d'))"
    )
    by_status = {
        status: {d for one, d in zip(worn, shapes, strict=True) if one == status} for status in set(worn)
    }
    assert all(len(found) == 1 for found in by_status.values())
    assert len({next(iter(found)) for found in by_status.values()}) == len(by_status) >= 2
    for status, count in Counter(worn).items():
        assert sheet.find(f".soffit-count-{status}").inner_text() == str(count)


def test_a_typed_ceiling_between_the_steps_is_answered_by_the_kernel(sheet: Sheet) -> None:
    entry = sheet.find(ENTRY).first
    entry.fill("1,2345")
    entry.press("Enter")
    sheet.rest()
    worn, finding = expected(sheet, 1.2345)
    until(lambda: sheet.find(FINDING).inner_text() == finding)
    assert statuses(sheet) == worn
    assert entry.input_value() == "1.2345"
    # bqplot's own marks stand in for the layer that only knows the steps.
    assert not sheet.find(".soffit-moving").is_visible()
    entry.fill("1.3")
    entry.press("Enter")
    sheet.rest()
    assert sheet.find(".soffit-moving").is_visible()


def test_a_refused_ceiling_is_put_back_with_the_reason(sheet: Sheet) -> None:
    before = (sheet.find(FINDING).inner_text(), bound(sheet), statuses(sheet))
    entry = sheet.find(ENTRY).first
    entry.fill("-2")
    entry.press("Enter")
    until(lambda: sheet.find(".soffit-problem").is_visible())
    assert "greater than or equal to 0" in sheet.find(".soffit-problem").inner_text()
    until(lambda: entry.input_value() == "1.00")
    assert before == (sheet.find(FINDING).inner_text(), bound(sheet), statuses(sheet))
    entry.fill("nonsense")
    entry.press("Enter")
    until(lambda: entry.input_value() == "1.00")


def test_the_keyboard_moves_the_slider_and_is_named_for_a_reader(sheet: Sheet) -> None:
    slider = sheet.page.get_by_role("slider", name="Sharpe ceiling")
    slider.focus()
    for _ in range(5):
        slider.press("ArrowRight")
    sheet.rest()
    assert slider.get_attribute("aria-valuetext") == "1.05 a year"
    assert sheet.find(FINDING).inner_text() == expected(sheet, 1.05)[1]
    slider.press("End")
    sheet.rest()
    assert slider.input_value() == "3"
    assert sheet.python("print(panel.session.study.settings.ceiling)").strip() == "3.0"


def test_a_click_and_a_typed_name_select_the_asset(sheet: Sheet) -> None:
    points = sheet.find(".soffit-figure .object_grp[class*=soffit-]")
    # The last one drawn lies on top of its neighbours.
    points.nth(24).locator("path.dot").click()
    until(lambda: "Fund 24" in sheet.find(".soffit-reading").inner_text())
    assert "needs a ceiling of" in sheet.find(".soffit-reading").inner_text()
    box = sheet.page.get_by_role("combobox", name="Asset")
    box.fill("Fund 07")
    box.press("Enter")
    until(lambda: "Fund 07" in sheet.find(".soffit-reading").inner_text())


def test_hover_tells_name_and_values(sheet: Sheet) -> None:
    sheet.find(".soffit-figure .object_grp[class*=soffit-]").nth(24).locator("path.dot").hover()
    tip = sheet.page.locator(".bqplot_tooltip_div .tooltiptext").filter(has_text="Fund 24")
    tip.first.wait_for()
    assert "appraisal ratio" in tip.first.inner_text()


def test_two_views_of_one_panel_move_together(own: Sheet) -> None:
    sheet = own
    sheet.command("notebook:create-output-view")
    sheet.page.wait_for_function("() => document.querySelectorAll('.soffit-moving path[d]').length === 6")
    sheet.drag(sheet.find(SLIDER).first, 1 / 3, 0.6)
    sheet.rest()
    paths = sheet.page.locator(".soffit-moving path.soffit-moving-line").evaluate_all(
        "(nodes) => nodes.map((node) => node.getAttribute('d'))"
    )
    assert paths[:2] == paths[2:]
    worn = sheet.page.locator(".object_grp[class*=soffit-]").evaluate_all(
        "(nodes) => nodes.map((node) => node.getAttribute('class'))"
    )
    assert worn[:25] == worn[25:]


def test_every_view_is_painted_when_it_is_opened_and_when_it_is_opened_again(sheet: Sheet) -> None:
    sheet.drag(sheet.find(SLIDER).first, 1 / 3, 0.25)
    sheet.rest()
    shown = float(sheet.find(ENTRY).first.input_value())
    worn = expected(sheet, shown)[0]
    for position, moving in ((1, 3), (2, 1), (0, 3)):
        sheet.find(".soffit-views button").nth(position).click()
        until(lambda count=moving: sheet.find(".soffit-moving path[d]").count() == count)
        if position < 2:
            until(lambda: statuses(sheet) == worn)


def test_the_finding_can_be_copied(sheet: Sheet) -> None:
    sheet.find(".soffit-copy").click()
    copied = sheet.page.evaluate("() => navigator.clipboard.readText()")
    assert copied == sheet.find(FINDING).inner_text()


def test_a_reloaded_page_stands_where_it_stood_and_plays_on(own: Sheet) -> None:
    own.drag(own.find(SLIDER).first, 1 / 3, 0.6)
    own.rest()
    finding, shown = own.find(FINDING).inner_text(), own.find(ENTRY).first.input_value()
    own.save()
    own.page.reload()
    own.page.wait_for_selector(".soffit-moving path[d]", state="attached")
    until(lambda: own.find(FINDING).inner_text() == finding)
    assert own.find(ENTRY).first.input_value() == shown
    own.drag(own.find(SLIDER).first, 0.6, 0.2)
    own.rest()
    ceiling = float(own.find(ENTRY).first.input_value())
    assert (statuses(own), own.find(FINDING).inner_text()) == expected(own, ceiling)


def test_running_the_cell_again_frees_what_it_showed_before(own: Sheet) -> None:
    sheet = own
    count = "from ipywidgets.widgets.widget import _instances; print(len(_instances))"
    first = int(sheet.python(count))
    for _ in range(2):
        sheet.command("notebook:run-all-cells")
        time.sleep(0.3)
        sheet.rest()
    assert sheet.python("print(len(panel.session.followers))").strip() == "1"
    assert int(sheet.python(count)) == first


@pytest.mark.parametrize("trusted", [True, False])
def test_a_reopened_notebook_shows_the_still_picture(lab: Lab, sheet: Sheet, *, trusted: bool) -> None:
    sheet.drag(sheet.find(SLIDER).first, 1 / 3, 0.7)
    sheet.rest()
    finding = sheet.find(FINDING).inner_text()
    time.sleep(3.5)  # the picture is drawn again after a rest
    content = json.loads(sheet.save().read_text())
    if not trusted:
        # The server has signed what it saved; a changed copy is another's notebook.
        content["cells"][0]["source"] = "# from a colleague"
    again = lab.open(content)
    trust = "() => [...window.jupyterapp.shell.currentWidget.content.model.cells].map((cell) => cell.trusted)"
    assert all(again.page.evaluate(trust)) is trusted
    image = again.page.locator(".jp-OutputArea img[alt^='Alphas of 25']")
    image.wait_for()
    assert image.is_visible()
    assert image.evaluate("(node) => node.naturalWidth") > 400
    text = again.find(".jp-Notebook").inner_text()
    assert "model not found" not in text.lower()
    assert "VBox(" not in text
    assert finding in text
    again.page.close()


def test_the_figure_has_its_text_alternative(sheet: Sheet) -> None:
    sheet.find(ENTRY).first.fill("2.5")
    sheet.find(ENTRY).first.press("Enter")
    sheet.rest()
    alternative = re.compile("Alphas of 25 assets .* ceiling of 2.50 ")
    sheet.page.get_by_role("img", name=alternative).first.wait_for(state="attached")


def test_the_live_panel_hides_its_still_picture(sheet: Sheet) -> None:
    assert sheet.page.locator(".jp-OutputArea img[alt^='Alphas of 25']").count() == 1
    assert not sheet.page.locator(".jp-OutputArea img[alt^='Alphas of 25']").is_visible()


@pytest.mark.parametrize("theme", ["Light", "Dark"])
def test_words_stand_out_from_the_page_in_both_themes(sheet: Sheet, theme: str) -> None:
    sheet.theme(theme)
    # WCAG 2.1 contrast of text against the notebook's own ground: 4.5 for small text.
    ratio = sheet.page.evaluate(
        """() => {
            const light = (css) => {
                const canvas = document.createElement('canvas').getContext('2d', { willReadFrequently: true });
                canvas.fillStyle = css;
                canvas.fillRect(0, 0, 1, 1);
                const parts = [...canvas.getImageData(0, 0, 1, 1).data].slice(0, 3).map((byte) => {
                    const c = byte / 255;
                    return c <= 0.03928 ? c / 12.92 : ((c + 0.055) / 1.055) ** 2.4;
                });
                return 0.2126 * parts[0] + 0.7152 * parts[1] + 0.0722 * parts[2];
            };
            const ground = light(getComputedStyle(document.querySelector('.jp-Notebook')).backgroundColor);
            const words = {
                finding: ['.soffit-finding p', 'color'], sample: ['.soffit-sample summary', 'color'],
                label: ['.soffit-number label', 'color'], axis: ['.soffit-figure .axislabel', 'fill'],
                tick: ['.soffit-figure .tick text', 'fill'], point: ['.soffit-figure .label', 'fill'],
                straddles: ['.soffit-straddles path.dot', 'stroke'], inside: ['.soffit-inside path.dot', 'stroke'],
            };
            const out = {};
            for (const [name, [selector, property]] of Object.entries(words)) {
                const node = document.querySelector(selector);
                if (!node) continue;
                const [a, b] = [ground, light(getComputedStyle(node)[property])].sort((x, y) => y - x);
                out[name] = (a + 0.05) / (b + 0.05);
            }
            return out;
        }"""
    )
    assert {"finding", "sample", "label", "axis", "tick", "point"} <= set(ratio)
    for name, value in ratio.items():
        assert value >= (3.0 if name in ("straddles", "inside") else 4.5), (name, value)


@pytest.mark.parametrize("width", [900, 1280])
def test_nothing_is_cut_off(sheet: Sheet, width: int) -> None:
    sheet.page.set_viewport_size({"width": width, "height": 960})
    cut = """() => {
        const panel = document.querySelector('.soffit-panel').getBoundingClientRect();
        const parts = document.querySelectorAll(
            '.soffit-panel :is(button, input, select, label, p, summary, .soffit-unit, .axislabel, .tick text)');
        return [...parts].filter((part) => part.checkVisibility() && !part.closest('.soffit-spoken'))
            .map((part) => [part.tagName, part.textContent.slice(0, 30), part.getBoundingClientRect()])
            .filter(([, , box]) => box.left < panel.left - 1 || box.right > panel.right + 1)
            .map(([tag, text, box]) => `${tag} ${text} ${box.left} ${box.right}`);
    }"""
    until(lambda: sheet.page.evaluate(cut) == [])
    sheet.page.set_viewport_size({"width": 1280, "height": 960})
