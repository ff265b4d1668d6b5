"""Where a study's data come from, so that a memo can be made again and checked."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from soffit.errors import InputError, SettingError, nearest
from soffit.settings import Settings
from soffit.study import Study

__all__ = ["Inputs", "file_fingerprint"]

_OPTIONS = ("risk_free", "excess", "raw_factors", "roles", "units", "content", "frequency", "missing")


@dataclass(frozen=True)
class Inputs:
    """Files that hold the returns, and how they were read.

    Parameters
    ----------
    returns : str
        Path of the assets' returns, as given; relative paths count from the study file's folder.
    factors : str
        Path of the factors' returns; empty if they stand in `returns`.
    options : mapping
        Options of the intake: risk_free, excess, raw_factors, roles, units, content, frequency, missing.
    """

    returns: str
    factors: str = ""
    options: Mapping[str, Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        for name in self.options:
            if name not in _OPTIONS:
                raise SettingError(f"The data have no option '{name}'", remedy=nearest(name, _OPTIONS))

    @property
    def paths(self) -> tuple[str, ...]:
        """The files, the assets' first."""
        return tuple(path for path in (self.returns, self.factors) if path)

    def open(self, folder: Path, settings: Settings | None = None) -> Study:
        """Open the study from its files.

        Parameters
        ----------
        folder : Path
            Where relative paths count from.
        settings : Settings, optional
            Defaults otherwise.

        Raises
        ------
        InputError
            If a file cannot be read or used.
        """
        options = dict(self.options)
        if isinstance(options.get("roles"), str):
            options["roles"] = folder / options["roles"]
        factors = folder / self.factors if self.factors else None
        return Study.open(folder / self.returns, factors, settings=settings, **options)

    def to_dict(self) -> dict[str, Any]:
        """Plain values for a TOML table; what is empty is left out."""
        data: dict[str, Any] = {"returns": self.returns}
        if self.factors:
            data["factors"] = self.factors
        return {**data, **self.options}

    @classmethod
    def from_dict(cls, values: Mapping[str, Any]) -> Inputs:
        """Inputs from a TOML table.

        Raises
        ------
        SettingError
            For a name that is not known, or without the path of the returns.
        """
        rest = dict(values)
        returns, factors = rest.pop("returns", ""), rest.pop("factors", "")
        if not returns:
            raise SettingError(
                "The table [data] does not say where the returns are", remedy='add returns = "returns.csv"'
            )
        return cls(str(returns), str(factors), rest)


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
