"""Every word and number format that screen and memo share."""

from soffit.present.wording.numbers import DASH, MINUS, join_names, plural, show, show_range

__all__ = ["DASH", "MINUS", "join_names", "plural", "show", "show_range"]
