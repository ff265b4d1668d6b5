"""Where a study's data come from, so that a memo can be made again and checked."""

from __future__ import annotations

import hashlib
import os
import re
from collections.abc import Mapping
from dataclasses import dataclass, field, fields, replace
from pathlib import Path
from typing import Any

from soffit.errors import InputError, SettingError, nearest
from soffit.intake import Source
from soffit.settings import Settings
from soffit.study import Study

__all__ = ["Inputs", "file_fingerprint"]

_OPTIONS = (
    *("risk_free", "excess", "raw_factors", "roles", "units", "content", "frequency", "missing"),
    *("skip_first", "labels", "mismatch"),
)
_PARTICULARS = tuple(item.name for item in fields(Source))
_PASSWORD = re.compile(r"://[^/@:]*:[^/@]*@")


@dataclass(frozen=True)
class Inputs:
    """Files that hold the returns, and how they were read.

    Parameters
    ----------
    returns, factors : str or mapping
        Path of a file, or the particulars of a :class:`soffit.intake.Source` with the path as ``data``. Relative
        paths count from the study file's folder. `factors` is empty if they stand in `returns`.
    options : mapping
        Options of the intake: risk_free, excess, raw_factors, roles, units, content, frequency, missing,
        skip_first, labels, mismatch.
    folder : Path
        Where relative paths count from; the working folder by default.

    Raises
    ------
    SettingError
        For an unknown option or particular, or an address with a password in it, which no memo should carry.
    """

    returns: str | Mapping[str, Any]
    factors: str | Mapping[str, Any] = ""
    options: Mapping[str, Any] = field(default_factory=dict)
    folder: Path = Path()

    def __post_init__(self) -> None:
        for name in self.options:
            if name not in _OPTIONS:
                raise SettingError(f"The data have no option '{name}'", remedy=nearest(name, _OPTIONS))
        for source in (self.returns, self.factors):
            for name in source if isinstance(source, Mapping) else ():
                if name not in _PARTICULARS:
                    raise SettingError(f"A source has no '{name}'", remedy=nearest(name, _PARTICULARS))
            if _PASSWORD.search(_place(source)):
                raise SettingError(
                    "The address of the data holds a password",
                    remedy="leave it out and let the database driver find it",
                )

    @classmethod
    def of(cls, study: Study) -> Inputs | None:
        """The files that a study was opened from.

        None where its data or an option came from memory, or where an address holds a password: the memo is written
        all the same, without a way to read the data again.
        """
        came = study.opened_from
        if not came:
            return None
        options = {
            name: str(value) if isinstance(value, Path) else value
            for name, value in came["options"].items()
            if name not in ("progress", "limits")
        }
        if not all(name in _OPTIONS and _plain(value) for name, value in options.items()):
            return None
        if any(_PASSWORD.search(place) for place in (came["returns"], came["factors"])):
            return None
        return cls(came["returns"], came["factors"], options)

    @property
    def paths(self) -> tuple[str, ...]:
        """The files or addresses, the assets' first."""
        return tuple(place for place in (_place(self.returns), _place(self.factors)) if place)

    @property
    def names(self) -> tuple[str, ...]:
        """The files or addresses without their folders, as a page prints them."""
        return tuple(place if "://" in place else Path(place).name for place in self.paths)

    def files(self) -> dict[str, Path]:
        """The files by the names they were given; addresses of databases are left out."""
        return {place: (self.folder / place).resolve() for place in self.paths if "://" not in place}

    def open(self, settings: Settings | None = None) -> Study:
        """Open the study from its files.

        Parameters
        ----------
        settings : Settings, optional
            Defaults otherwise.

        Raises
        ------
        InputError
            If a file cannot be read or used.
        """
        options = dict(self.options)
        if isinstance(options.get("roles"), str):
            options["roles"] = self.folder / options["roles"]
        factors = _source(self.factors, self.folder) if self.factors else None
        return Study.open(_source(self.returns, self.folder), factors, settings=settings, **options)

    def seen_from(self, other: Path) -> Inputs:
        """The same files with paths that count from another folder."""
        folder = self.folder
        if folder.resolve() == other.resolve():
            return replace(self, folder=other)
        options = dict(self.options)
        if isinstance(options.get("roles"), str):
            options["roles"] = _moved(options["roles"], folder, other)
        return Inputs(
            _moved(self.returns, folder, other), _moved(self.factors, folder, other), options, other
        )

    def to_dict(self) -> dict[str, Any]:
        """Plain values for a TOML table; what is empty is left out."""
        data: dict[str, Any] = {"returns": self.returns}
        if self.factors:
            data["factors"] = self.factors
        return {**data, **self.options}

    @classmethod
    def from_dict(cls, values: Mapping[str, Any], folder: Path = Path()) -> Inputs:
        """Inputs from a TOML table; relative paths count from `folder`.

        Raises
        ------
        SettingError
            For a name that is not known, or without the path of the returns.
        """
        rest = dict(values)
        returns, factors = rest.pop("returns", ""), rest.pop("factors", "")
        if not _place(returns):
            raise SettingError(
                "The table [data] does not say where the returns are", remedy='add returns = "returns.csv"'
            )
        return cls(returns, factors, rest, folder)


def file_fingerprint(path: Path) -> str:
    """SHA-256 of a file's bytes.

    Raises
    ------
    InputError
        If it cannot be read.
    """
    try:
        return hashlib.sha256(path.read_bytes()).hexdigest()
    except OSError as error:
        raise InputError(f"The file '{path}' cannot be read ({error})") from error


def _plain(value: Any) -> bool:
    """Whether a value can stand in a TOML file."""
    if isinstance(value, Mapping):
        return all(isinstance(name, str) and _plain(item) for name, item in value.items())
    if isinstance(value, (list, tuple)):
        return all(_plain(item) for item in value)
    return isinstance(value, (str, bool, int, float))


def _place(source: str | Mapping[str, Any]) -> str:
    return str(source.get("data", "")) if isinstance(source, Mapping) else str(source)


def _source(source: str | Mapping[str, Any], folder: Path) -> Any:
    place = _place(source)
    data = place if "://" in place else (folder / place).resolve()
    return Source(**{**source, "data": data}) if isinstance(source, Mapping) else data


def _moved(source: Any, folder: Path, other: Path) -> Any:
    place = _place(source)
    if not place or "://" in place or Path(place).is_absolute():
        return source
    try:
        moved = Path(os.path.relpath((folder / place).resolve(), other.resolve())).as_posix()
    except ValueError:  # another drive: no relative path leads there
        moved = (folder / place).resolve().as_posix()
    return {**source, "data": moved} if isinstance(source, Mapping) else moved
