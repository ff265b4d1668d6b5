"""Tables as plain text, for a terminal and the clipboard."""

from __future__ import annotations

from soffit.present.spec import NumberForm, TableSpec
from soffit.present.wording.numbers import show

__all__ = ["cells", "table_text"]


def cells(spec: TableSpec) -> list[list[str]]:
    """Every cell as the text that screen and memo show: a row of headings, then a row of the frame each."""
    head = [spec.index_heading, *(column.heading for column in spec.columns)]
    keys = [column.key for column in spec.columns]
    body = [
        [
            str(name),
            *(
                show(value, spec.form_at(row, column))
                for value, column in zip(values, spec.columns, strict=True)
            ),
        ]
        for row, (name, values) in enumerate(
            zip(spec.frame.index, spec.frame[keys].itertuples(index=False, name=None), strict=True)
        )
    ]
    return [head, *body]


def table_text(spec: TableSpec, *, most: int | None = None) -> str:
    """Set a table in aligned columns, numbers to the right.

    Parameters
    ----------
    spec : TableSpec
        The table.
    most : int, optional
        Rows shown at most; a last line says how many are left out.
    """
    head, *body = cells(spec)
    shown = body if most is None else body[:most]
    rows = [head, *shown]
    widths = [max(len(row[place]) for row in rows) for place in range(len(head))]
    left = [True, *(column.form is NumberForm.TEXT for column in spec.columns)]
    lines = [
        "  ".join(
            text.ljust(width) if at_left else text.rjust(width)
            for text, width, at_left in zip(row, widths, left, strict=True)
        ).rstrip()
        for row in rows
    ]
    lines.insert(1, "  ".join("─" * width for width in widths))
    if len(body) > len(shown):
        lines.append(f"… and {len(body) - len(shown):,} more")
    return "\n".join(lines)
