"""Where long work runs: here with a progress bar, beside whoever waits for it, or in processes."""

from __future__ import annotations

import logging
from collections.abc import Callable, Iterable
from importlib.util import find_spec
from threading import Event, Thread
from typing import TypeVar

from soffit.estimate.steps import Progress, Steps, drained

__all__ = ["Progress", "Steps", "beside", "drained", "map_processes", "run_here"]

A = TypeVar("A")
R = TypeVar("R")

_log = logging.getLogger("soffit.engine")

# Seconds between two looks at work that runs beside.
_LOOK = 0.03


def run_here(steps: Steps[R], *, quiet: bool = False) -> R:
    """Run work in steps to its end, with a progress bar in a terminal or a notebook.

    Parameters
    ----------
    steps : Steps
        The work.
    quiet : bool
        Show no bar.

    Returns
    -------
    object
        What the work returns.
    """
    from tqdm.auto import tqdm

    with tqdm(disable=quiet, leave=False, delay=0.5) as bar:
        said = ""
        while True:
            try:
                progress = next(steps)
            except StopIteration as end:
                result: R = end.value
                return result
            if progress.message != said:
                said = progress.message
                bar.set_description(said, refresh=False)
                bar.reset(progress.total or None)
            bar.update(progress.done - bar.n)


def beside(work: Callable[[], R], message: str) -> Steps[R]:
    """Run work that cannot be cut into steps in a thread of its own, and wait for it in steps.

    Closing the steps stops the waiting, not the work: it runs to its end unseen, and what it computed stays with
    the study for the next time.

    Parameters
    ----------
    work : callable
        Takes nothing and returns the result; what it raises is raised to whoever waits.
    message : str
        What is being done.
    """
    done = Event()
    results: list[R] = []
    errors: list[BaseException] = []

    def run() -> None:
        try:
            results.append(work())
        except BaseException as error:  # noqa: BLE001  handed over below, to whoever waits
            errors.append(error)
        finally:
            done.set()

    Thread(target=run, name=f"soffit: {message}", daemon=True).start()
    while not done.wait(_LOOK):
        yield Progress(0, 0, message)
    if errors:
        raise errors[0]
    return results[0]


def map_processes(function: Callable[[A], R], items: Iterable[A], workers: int = 1) -> list[R]:
    """Apply a function to every item, in several processes where joblib is installed.

    Parameters
    ----------
    function : callable
        A function that can be pickled.
    items : iterable
        What to apply it to.
    workers : int
        Processes; 1 runs all here.

    Returns
    -------
    list
        Results in the order of the items.

    Raises
    ------
    ValueError
        If `workers` is less than 1.
    """
    if workers < 1:
        raise ValueError(f"{workers} workers cannot work; allowed: 1 or more")
    listed = list(items)
    if workers > 1 and find_spec("joblib") is None:
        _log.warning(
            "joblib is not installed, so all runs in one process; to mend it: pip install soffit[cluster]"
        )
        workers = 1
    if workers == 1 or len(listed) < 2:
        return [function(item) for item in listed]
    from joblib import Parallel, delayed

    return list(Parallel(n_jobs=workers)(delayed(function)(item) for item in listed))
