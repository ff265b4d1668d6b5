"""The state that all panels of one study share, and the one way in which it changes."""

from __future__ import annotations

import logging
from collections.abc import Callable, Mapping
from contextlib import suppress
from functools import wraps
from typing import TYPE_CHECKING, Any, ClassVar, ParamSpec, Protocol, TypeVar
from weakref import WeakValueDictionary

from traitlets import HasTraits, Instance, Int, Unicode

from soffit.errors import SoffitError
from soffit.present.kept import Kept, keep
from soffit.present.spec import Exhibit
from soffit.settings import Settings
from soffit.study import Study

if TYPE_CHECKING:
    from soffit.panels.controls import Control

__all__ = ["Follower", "Session"]

P = ParamSpec("P")
R = TypeVar("R")

_log = logging.getLogger("soffit.panels")


class Follower(Protocol):
    """What follows a session: it computes first, and draws when every follower could compute."""

    def compute(self, study: Study) -> Any:
        """Compute what is to be shown for a study; draw nothing."""

    def show(self, computed: Any) -> None:
        """Draw what was computed."""


class Session(HasTraits):
    """Settings, selection and problem of one study, shared by its panels.

    Use :meth:`of`: two panels on the same study get the same session, so they never disagree. Everything that
    changes settings goes through :meth:`propose`. A change that the data refuse, such as a window too short to
    estimate, is taken back, and the controls with it.

    Parameters
    ----------
    study : Study
        The study as it was opened.
    """

    settings = Instance(Settings)
    results = Int(help="Counts settled changes: one computation and one draw each.")
    problem = Unicode(help="What went wrong last, with its remedy; empty when nothing did.")
    selected = Unicode(help="Name of the selected asset; empty for none.")

    _open: ClassVar[WeakValueDictionary[int, Session]] = WeakValueDictionary()

    def __init__(self, study: Study) -> None:
        super().__init__(settings=study.settings)
        # The study that panels were opened on: it names the session as long as that lives.
        self._first = study
        self._opened = study
        self._study = study
        self._followers: list[Follower] = []
        self._controls: dict[str, Control] = {}

    @classmethod
    def of(cls, study: Study) -> Session:
        """The session of a study; made when it is first asked for, gone with its last panel."""
        # Keyed by identity: the session holds its study, so the id cannot be taken by another while it lives.
        found = cls._open.get(id(study))
        if found is None:
            found = cls._open[id(study)] = cls(study)
        return found

    @property
    def study(self) -> Study:
        """The study under the settings that the panels show."""
        return self._study

    @property
    def followers(self) -> tuple[Follower, ...]:
        """Who is told of settled changes."""
        return tuple(self._followers)

    def follow(self, follower: Follower) -> None:
        """Tell a follower of every settled change from now on."""
        self._followers.append(follower)

    def leave(self, follower: Follower) -> None:
        """Tell a follower no more; the controls go with the last one."""
        with suppress(ValueError):
            self._followers.remove(follower)
        if not self._followers:
            self.close()

    def control(self, name: str) -> Control:
        """The control of a setting; one for all panels, so that its views move together in the browser."""
        if name not in self._controls:
            from soffit.panels.controls import Control

            self._controls[name] = Control(self, name)
        return self._controls[name]

    def propose(self, values: Mapping[str, Any], *, settle: bool = True) -> bool:
        """Change settings, or say why not.

        Parameters
        ----------
        values : mapping
            Dotted names and values.
        settle : bool
            Whether results are to follow now; False while a slider is dragged.

        Returns
        -------
        bool
            Whether the change was taken.
        """
        try:
            settings = self.settings.changed(values)
        except SoffitError as error:
            self.refuse(str(error))
            return False
        if settings != self.settings:
            self.settings = settings
        return self._settle() if settle else True

    def reopen(self, study: Study) -> bool:
        """Show a study of the same data read otherwise in every panel, or say why not.

        Parameters
        ----------
        study : Study
            The data read again, under the settings of the present study.

        Returns
        -------
        bool
            Whether every panel could show it.
        """
        before = self._opened, self._study
        self._opened, self._study = study, study
        try:
            computed = [(follower, follower.compute(study)) for follower in self._followers]
        except SoffitError as error:
            self._opened, self._study = before
            self.refuse(str(error))
            return False
        self.problem = ""
        self.settings = study.settings
        self._reread()
        for follower, result in computed:
            follower.show(result)
        self.results += 1
        return True

    def refuse(self, reason: str) -> None:
        """Say why a change was not taken, and put the controls back to what holds."""
        self.problem = reason
        self._reread()

    def _settle(self) -> bool:
        if self.settings == self._study.settings:
            self.problem = ""
            return True
        study = self._opened.with_settings(self.settings)
        try:
            computed = [(follower, follower.compute(study)) for follower in self._followers]
        except SoffitError as error:
            self.settings = self._study.settings
            self.refuse(str(error))
            return False
        self._study = study
        self.problem = ""
        self._reread()
        for follower, result in computed:
            follower.show(result)
        self.results += 1
        return True

    def _reread(self) -> None:
        for control in self._controls.values():
            control.write(self.settings.get(control.name))

    def select(self, name: str) -> None:
        """Select an asset in every panel."""
        self.selected = name

    def keep(self, exhibit: Exhibit) -> int:
        """Keep an exhibit for the memo; the same exhibit under the same settings replaces the kept one.

        Returns
        -------
        int
            Its number among what is kept, from 1.
        """
        kept = self._study.kept
        for position, earlier in enumerate(kept):
            if (earlier.exhibit.key, earlier.settings) == (exhibit.key, self._study.settings):
                kept[position] = Kept(exhibit, self._study.settings)
                return position + 1
        keep(self._study, exhibit)
        return len(kept)

    def guard(self, callback: Callable[P, R]) -> Callable[P, R | None]:
        """Wrap a callback so that what it raises is shown in the problem strip and logged, never lost."""

        @wraps(callback)
        def guarded(*args: P.args, **kwargs: P.kwargs) -> R | None:
            try:
                return callback(*args, **kwargs)
            except SoffitError as error:
                self.problem = str(error)
                _log.info("A panel could not answer", exc_info=True)
            except Exception as error:  # noqa: BLE001  the front end would drop it without a word
                self.problem = (
                    f"Something failed that should not have: {type(error).__name__}: {error}. "
                    "The traceback is in the log of the kernel; the panel shows its last good state."
                )
                _log.exception("A callback of a panel failed")
            return None

        return guarded

    def close(self) -> None:
        """Free the controls."""
        for control in self._controls.values():
            control.close()
        self._controls.clear()
        self._open.pop(id(self._first), None)
