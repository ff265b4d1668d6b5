"""The ticket as a CSV or Excel file, with names that stay names."""

from __future__ import annotations

import csv
from collections.abc import Sequence
from pathlib import Path

from soffit.errors import InputError
from soffit.estimate.statistic import NotApplicable
from soffit.hedge.ticket import Ticket

__all__ = ["spreadsheet_text", "ticket_rows", "write_csv", "write_excel"]

_FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r", "\n", "＝", "＋", "－", "＠")


def ticket_rows(ticket: Ticket) -> list[dict[str, str | float]]:
    """Lines of the ticket as plain values, one mapping a leg; empty text where a margin is not stated."""
    lines: list[dict[str, str | float]] = []
    for order, beta in zip(ticket.orders, ticket.residual_betas, strict=True):
        margin = order.margin
        lines.append(
            {
                "Leg": order.leg,
                "Instrument": order.instrument.name,
                "Side": order.side,
                "Contracts": abs(order.contracts),
                "Exact contracts": abs(order.exact),
                "Target notional": order.target,
                "Traded notional": order.notional,
                "Residual notional": order.residual,
                "Residual exposure": float(beta),
                "Price": order.instrument.price,
                "Multiplier": order.instrument.multiplier,
                "Lot": order.instrument.lot,
                "FX": order.instrument.fx,
                "Initial margin": "" if isinstance(margin, NotApplicable) else margin,
                "Currency": ticket.currency,
                "Hedges": "; ".join(ticket.assets),
                "As of": ticket.as_of.isoformat(),
                "Estimated through": ticket.estimated_through.isoformat(),
            }
        )
    return lines


def write_csv(ticket: Ticket, path: str | Path) -> Path:
    """Write the ticket as a CSV file in UTF-8; text that a spreadsheet would run as a formula is disarmed."""
    target = Path(path)
    lines = ticket_rows(ticket)
    with target.open("w", newline="", encoding="utf-8-sig") as file:
        writer = csv.writer(file)
        writer.writerow(list(lines[0]) if lines else [])
        for line in lines:
            writer.writerow(
                [spreadsheet_text(item) if isinstance(item, str) else item for item in line.values()]
            )
    return target


def write_excel(ticket: Ticket, path: str | Path) -> Path:
    """Write the ticket as an Excel file: orders on one sheet, assets and notes on the other.

    Raises
    ------
    InputError
        If the Excel writer is not installed.
    """
    try:
        import xlsxwriter
    except ImportError as error:
        raise InputError(
            "Excel files need the package xlsxwriter", remedy="install soffit with the extra 'memo'"
        ) from error
    target = Path(path)
    book = xlsxwriter.Workbook(str(target), {"strings_to_formulas": False, "strings_to_urls": False})
    bold = book.add_format({"bold": True})
    sheet = book.add_worksheet("Orders")
    lines = ticket_rows(ticket)
    table: list[list[str | float]] = [
        list(lines[0]) if lines else [],
        *(list(line.values()) for line in lines),
    ]
    _fill(sheet, table, bold)
    notes = book.add_worksheet("Notes")
    assets: list[list[str | float]] = [
        [name, float(size)] for name, size in zip(ticket.assets, ticket.notionals, strict=True)
    ]
    _fill(
        notes,
        [
            ["Asset", f"Notional, {ticket.currency}"],
            *assets,
            ["Gross hedge", ticket.gross_hedge],
            ["Volatility from rounding, per period", _value(ticket.rounding_volatility)],
            [f"Initial margin, {ticket.currency}", _value(ticket.margin)],
            ["Margin", ticket.margin_note],
        ],
        bold,
    )
    book.close()
    return target


def _value(item: float | NotApplicable) -> str | float:
    return f"not stated: {item.reason}" if isinstance(item, NotApplicable) else item


def _fill(sheet: object, table: Sequence[Sequence[str | float]], bold: object) -> None:
    for row, line in enumerate(table):
        for column, item in enumerate(line):
            style = bold if row == 0 else None
            # write_string keeps a name that begins with '=' as text.
            write = sheet.write_string if isinstance(item, str) else sheet.write_number  # type: ignore[attr-defined]
            write(row, column, item, style)


def spreadsheet_text(text: str) -> str:
    """Text that a spreadsheet shows and does not run: an apostrophe before a formula's first character."""
    return "'" + text if text.lstrip(" ").startswith(_FORMULA_STARTS) else text
