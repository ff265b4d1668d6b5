"""Long work: in steps, beside, in processes; cancelled, superseded, failing."""

from __future__ import annotations

import asyncio
import logging
import math
from collections.abc import Iterator
from threading import Event
from typing import Any

import pytest
from ipywidgets.widgets.widget import _instances

from soffit.engine import Progress, Steps, beside, drained, map_processes, run_here
from soffit.errors import EstimationError
from soffit.estimate.statistic import NotApplicable
from soffit.judge.wald import OverRejection
from soffit.panels import JointPanel
from soffit.panels.session import Session
from soffit.panels.work import Unfinished, Work, try_now
from soffit.study import Study


def counting(total: int, log: list[str]) -> Steps[int]:
    """Count to a total; the log says how it ended."""
    try:
        for done in range(total):
            yield Progress(done, total, "Counting")
        log.append("done")
        return total
    finally:
        log.append("closed")


def failing() -> Steps[int]:
    yield Progress(0, 2, "Failing")
    raise EstimationError("Too few rows", remedy="widen the window")


def broken() -> Steps[int]:
    yield Progress(0, 2, "Breaking")
    raise KeyError("lost")


@pytest.fixture
def session(study: Study) -> Session:
    return Session.of(study)


@pytest.fixture
def stops() -> list[str]:
    return []


@pytest.fixture
def work(session: Session, stops: list[str]) -> Iterator[Work]:
    made = Work(session, lambda: stops.append("stopped"), lambda: stops.append("again"))
    yield made
    made.drop()


def test_run_here_returns_the_result() -> None:
    log: list[str] = []
    assert run_here(counting(5, log), quiet=True) == 5
    assert log == ["done", "closed"]


def test_beside_returns_raises_and_tells_that_it_goes_on() -> None:
    assert drained(beside(lambda: 7, "Computing")) == 7
    with pytest.raises(EstimationError, match="Too few"):
        drained(beside(lambda: drained(failing()), "Computing"))
    hold = Event()
    steps = beside(lambda: hold.wait(10), "Holding")
    assert next(steps) == Progress(0, 0, "Holding")
    hold.set()
    assert drained(steps) is True


@pytest.mark.parametrize("workers", [1, 2])
def test_map_keeps_the_order(workers: int) -> None:
    assert map_processes(math.sqrt, [9.0, 4.0, 1.0], workers) == [3.0, 2.0, 1.0]
    assert map_processes(math.sqrt, [], workers) == []


def test_map_says_when_it_cannot_spread(monkeypatch: pytest.MonkeyPatch, caplog: Any) -> None:
    monkeypatch.setattr("soffit.engine.find_spec", lambda name: None)
    with caplog.at_level(logging.WARNING, logger="soffit.engine"):
        assert map_processes(math.sqrt, [4.0, 9.0], 2) == [2.0, 3.0]
    assert "soffit[cluster]" in caplog.text
    with pytest.raises(ValueError, match="0 workers"):
        map_processes(math.sqrt, [1.0], 0)


def test_in_a_script_work_is_done_at_once() -> None:
    assert try_now(counting(10_000, []), patience=0.0) == 10_000


def test_what_is_quick_is_there_at_once_and_the_rest_is_left() -> None:
    async def scene() -> None:
        assert try_now(counting(3, []), patience=5.0) == 3
        left = try_now(counting(3, []), patience=0.0)
        assert isinstance(left, Unfinished)
        assert drained(left.steps) == 3

    asyncio.run(scene())


def test_work_shows_how_far_it_is_and_delivers(work: Work, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("soffit.panels.work._TELL", 0.0)  # a word at every step

    async def scene() -> None:
        got: list[int] = []
        work.begin(counting(20, []), got.append)
        assert work.running
        assert work.widget.layout.display is None
        seen = set()
        while work.running:
            seen.add((work.bar.value, work.bar.max))
            await asyncio.sleep(0)
        assert got == [20]
        assert work.widget.layout.display == "none"
        assert len(seen) > 5
        assert max(seen) == (19, 20)

    asyncio.run(scene())


def test_words_on_how_far_it_is_do_not_flood_the_browser(work: Work) -> None:
    async def scene() -> None:
        got: list[int] = []
        told: list[object] = []
        work.label.observe(told.append, "value")
        work.begin(counting(12, []), got.append)
        while work.running:
            await asyncio.sleep(0)
        assert got == [12]
        assert 1 <= len(told) < 12

    asyncio.run(scene())


def test_cancelled_work_stops_at_once_and_can_be_asked_for_again(work: Work, stops: list[str]) -> None:
    async def scene() -> None:
        log: list[str] = []
        got: list[int] = []
        work.begin(counting(10_000_000, log), got.append)
        await asyncio.sleep(0.03)
        work.button.click()
        assert not work.running
        assert log == ["closed"]
        assert stops == ["stopped"]
        assert "Cancelled" in work.label.value
        await asyncio.sleep(0.03)
        assert got == []
        work.button.click()
        assert stops == ["stopped", "again"]

    asyncio.run(scene())


def test_newer_work_supersedes_older(work: Work) -> None:
    async def scene() -> None:
        old, new = [], []
        got: list[int] = []
        work.begin(counting(10_000_000, old), got.append)
        await asyncio.sleep(0.02)
        work.begin(counting(3, new), got.append)
        assert old == ["closed"]
        while work.running:
            await asyncio.sleep(0.005)
        await asyncio.sleep(0.02)
        assert got == [3]

    asyncio.run(scene())


@pytest.mark.parametrize(("steps", "words"), [(failing, "widen the window"), (broken, "KeyError")])
def test_an_error_is_shown_with_its_remedy(
    work: Work, session: Session, stops: list[str], steps: Any, words: str, caplog: pytest.LogCaptureFixture
) -> None:
    async def scene() -> None:
        work.begin(steps(), lambda result: None)
        while work.running:
            await asyncio.sleep(0.005)

    with caplog.at_level(logging.INFO, logger="soffit.panels"):
        asyncio.run(scene())
    assert words in session.problem
    assert "Traceback" in caplog.text
    assert stops == ["stopped"]
    assert "could not be computed" in work.label.value


def test_simulated_sizes_are_the_same_in_steps_and_at_once(study: Study) -> None:
    told: list[Progress] = []
    steps = study.wald_sizes_steps()
    while True:
        try:
            told.append(next(steps))
        except StopIteration as end:
            found = end.value
            break
    assert all(0 < one.done < one.total for one in told)
    assert study.wald_sizes() is found
    assert all(isinstance(one, OverRejection) for one in found)
    # Worked out once, it takes no further step.
    assert list(study.wald_sizes_steps()) == []


def test_sizes_of_a_sample_without_joint_test_do_not_exist() -> None:
    from tests.panels.conftest import invented

    found = invented(count=30, periods=28).wald_sizes()
    assert all(isinstance(one, NotApplicable) for one in found)


def test_the_joint_panel_waits_without_blocking_and_then_shows(study: Study) -> None:
    async def scene() -> None:
        made = JointPanel(study)
        if made._work.running:
            assert made.drawn == 0
            assert made._keep.disabled
        while made._work.running:
            await asyncio.sleep(0.01)
        assert (made.computed, made.drawn) == (1, 1)
        assert not made._keep.disabled
        assert "soffit-stale" not in made.widget._dom_classes
        made.close()

    asyncio.run(scene())


def test_a_stale_answer_is_dropped(study: Study, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("soffit.panels.work._PATIENCE", 0.0)
    monkeypatch.setattr("soffit.panels.exhibit_panel.try_now", lambda steps: try_now(steps, patience=0.0))

    async def scene() -> None:
        made = JointPanel(study)
        assert made._work.running
        made.session.propose({"level": 0.90})
        made.session.propose({"level": 0.80})
        while made._work.running:
            await asyncio.sleep(0.01)
        assert (made.computed, made.drawn) == (3, 1)
        assert made._answer.exhibit.finding.text == made._finding.text
        assert made.session.study.settings.level == 0.80
        made.close()

    asyncio.run(scene())


def test_cancelling_keeps_what_was_shown_marks_it_and_computes_after_all(
    study: Study, monkeypatch: pytest.MonkeyPatch
) -> None:
    async def scene() -> None:
        made = JointPanel(study)
        while made._work.running:
            await asyncio.sleep(0.01)
        shown = made._finding.text
        monkeypatch.setattr("soffit.panels.exhibit_panel.try_now", lambda steps: try_now(steps, patience=0.0))
        made.session.propose({"power_sharpe": 2.0, "seed": 5})
        assert made._work.running
        made._work.button.click()
        assert made._finding.text == shown
        assert "soffit-stale" in made.widget._dom_classes
        assert made._keep.disabled
        made._work.button.click()
        while made._work.running:
            await asyncio.sleep(0.01)
        assert made._finding.text != shown
        assert "soffit-stale" not in made.widget._dom_classes
        made.close()

    asyncio.run(scene())


def test_closing_a_panel_at_work_frees_it(study: Study, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("soffit.panels.exhibit_panel.try_now", lambda steps: try_now(steps, patience=0.0))
    before = set(_instances)

    async def scene() -> None:
        made = JointPanel(study)
        assert made._work.running
        made.close()
        await asyncio.sleep(0.05)
        assert made.drawn == 0

    asyncio.run(scene())
    assert set(_instances) == before
