"""Long work in a panel: it goes on while the panel answers, shows how far it is, and can be cancelled."""

from __future__ import annotations

import asyncio
from collections.abc import Callable
from time import monotonic
from typing import Any

import ipywidgets

from soffit.engine import Progress, Steps, drained
from soffit.panels.session import Session

__all__ = ["Unfinished", "Work", "try_now"]

# Seconds that a result may take before the panel answers first and waits in the background.
_PATIENCE = 0.2
# Seconds given to the browser's messages between two steps.
_PAUSE = 0.005
# Seconds between two words on how far it is.
_TELL = 0.1


class Unfinished:
    """A result that takes longer than a person waits without a word.

    Parameters
    ----------
    steps : Steps
        What is left to do.
    """

    def __init__(self, steps: Steps[Any]) -> None:
        self.steps = steps


def try_now(steps: Steps[Any], patience: float = _PATIENCE) -> Any:
    """Run work for a moment, and say what came of it.

    Parameters
    ----------
    steps : Steps
        The work.
    patience : float
        Seconds.

    Returns
    -------
    object
        The result, or :class:`Unfinished`. In a script, where nobody can be answered meanwhile, always the result.
    """
    if _loop() is None:
        return drained(steps)
    until = monotonic() + patience
    while monotonic() < until:
        try:
            next(steps)
        except StopIteration as end:
            return end.value
    return Unfinished(steps)


class Work:
    """The strip that shows long work; one piece at a time, the newest.

    Parameters
    ----------
    session : Session
        Where errors are shown.
    on_stop : callable
        Called when the work was cancelled or failed.
    again : callable
        Called when the analyst asks for what was cancelled.

    Attributes
    ----------
    widget : ipywidgets.Box
        To be put in a layout; hidden while there is nothing to show.
    """

    def __init__(self, session: Session, on_stop: Callable[[], None], again: Callable[[], None]) -> None:
        self._session, self._on_stop, self._again = session, on_stop, again
        self._task: asyncio.Task[None] | None = None
        self._steps: Steps[Any] | None = None
        self.bar = ipywidgets.IntProgress(layout={"width": "180px"})
        self.label = ipywidgets.HTML()
        self.button = ipywidgets.Button(description="Cancel", layout={"width": "auto"})
        self.button.on_click(session.guard(self._pressed))
        # The button stands first: words that grow beside it must not move it from under the pointer.
        self.widget = ipywidgets.Box([self.button, self.bar, self.label], layout={"display": "none"})
        self.widget.add_class("soffit-work")

    @property
    def running(self) -> bool:
        """Whether work goes on."""
        return self._steps is not None

    def begin(self, steps: Steps[Any], on_done: Callable[[Any], None]) -> None:
        """Carry on with some work in the background; what ran before is dropped.

        Parameters
        ----------
        steps : Steps
            The work.
        on_done : callable
            Called with the result, unless newer work or a cancellation came first.
        """
        self.drop()
        self._steps = steps
        self.button.description = "Cancel"
        self._tell(Progress(0, 0, "Computing"))
        self.widget.layout.display = None
        loop = _loop()
        if loop is None:
            self._finish(drained(steps), on_done)
        else:
            self._task = loop.create_task(self._walk(steps, on_done))

    def drop(self) -> None:
        """Stop without a word: the answer is no longer wanted."""
        steps, self._steps = self._steps, None
        task, self._task = self._task, None
        if task is not None and task is not _current():
            task.cancel()
        if steps is not None:
            steps.close()
        self.widget.layout.display = "none"

    def cancel(self) -> None:
        """Stop, say so and offer to compute after all."""
        if not self.running:
            return
        self.drop()
        self._offer("Cancelled. What is shown belongs to the settings before.")

    def _offer(self, text: str) -> None:
        self.label.value = text
        self.bar.layout.display = "none"
        self.button.description = "Compute after all"
        self.widget.layout.display = None
        self._on_stop()

    async def _walk(self, steps: Steps[Any], on_done: Callable[[Any], None]) -> None:
        told = -_TELL
        try:
            while self._steps is steps:
                try:
                    progress = next(steps)
                except StopIteration as end:
                    self._finish(end.value, on_done)
                    return
                # A message a step would keep the browser too busy to send the click on Cancel.
                if monotonic() - told >= _TELL:
                    told = monotonic()
                    self._tell(progress)
                await asyncio.sleep(_PAUSE)
        except asyncio.CancelledError:
            raise
        except Exception as error:  # noqa: BLE001  the guard shows and logs it; a task would swallow it
            self._steps = self._task = None
            self._session.guard(_raise)(error)
            self._offer("It could not be computed. What is shown belongs to the settings before.")

    def _finish(self, result: Any, on_done: Callable[[Any], None]) -> None:
        self._steps = self._task = None
        self.widget.layout.display = "none"
        on_done(result)

    def _tell(self, progress: Progress) -> None:
        known = progress.total > 0
        self.bar.layout.display = None if known else "none"
        if known:
            self.bar.max, self.bar.value = progress.total, progress.done
        share = f" · {progress.done:,} of {progress.total:,}" if known else " …"
        self.label.value = f"{progress.message}{share}"

    def _pressed(self, _: Any) -> None:
        if self.running:
            self.cancel()
        else:
            self._again()


def _raise(error: Exception) -> None:
    raise error


def _loop() -> asyncio.AbstractEventLoop | None:
    try:
        return asyncio.get_running_loop()
    except RuntimeError:
        return None


def _current() -> asyncio.Task[Any] | None:
    return asyncio.current_task() if _loop() is not None else None
