"""The error family."""

from __future__ import annotations

import pytest

from soffit.errors import InputError, SoffitError, nearest


def test_message_says_what_came_what_is_allowed_and_the_remedy() -> None:
    error = InputError("Column 'A' holds text", allowed="numbers", remedy="mark it as ignored")
    assert str(error) == "Column 'A' holds text. Allowed: numbers. To mend it: mark it as ignored."
    assert isinstance(error, SoffitError)
    assert isinstance(error, ValueError)


@pytest.mark.parametrize(
    ("name", "phrase"),
    [("mktrf", "did you mean 'MktRF'?"), ("zzz", "the known names are 'MktRF', 'SMB', 'HML'")],
)
def test_nearest(name: str, phrase: str) -> None:
    assert nearest(name, ["MktRF", "SMB", "HML"]) == phrase
