"""The order ticket as a page: orders, what rounding leaves, and the margin note."""

from __future__ import annotations

import pandas as pd

from soffit.hedge.ticket import Ticket
from soffit.hedge.ticket_files import ticket_rows
from soffit.present.exhibits.hedge import beta_sources
from soffit.present.spec import Column, Exhibit, NumberForm, TableSpec
from soffit.present.wording.hedge import rule_phrase, ticket_finding
from soffit.present.wording.sample import sample_line
from soffit.study import Study

__all__ = ["exhibit", "orders_table"]


def exhibit(study: Study, ticket: Ticket) -> Exhibit:
    """Build the exhibit of a ticket made by ``study.ticket(...)``."""
    return Exhibit(
        key="ticket",
        title="Order ticket of the hedge",
        sample=f"{sample_line(study)} · {rule_phrase(study)}",
        finding=ticket_finding(ticket),
        tables=(orders_table(study, ticket),),
        sources=beta_sources(study),
        cautions=(
            ticket.margin_note,
            "A ticket is a calculation, not an order: prices, contract terms and limits are to be checked before "
            "trading.",
        ),
    )


def orders_table(study: Study, ticket: Ticket) -> TableSpec:
    """Tabulate the orders."""
    rows = ticket_rows(ticket)
    frame = pd.DataFrame(rows, index=pd.Index([str(row["Leg"]) for row in rows]))
    frame["Initial margin"] = pd.to_numeric(frame["Initial margin"].replace("", float("nan")))
    money = NumberForm.MONEY
    columns = (
        Column("Instrument", "Instrument", NumberForm.TEXT),
        Column("Side", "Side", NumberForm.TEXT),
        Column("Contracts", "Contracts", NumberForm.COUNT),
        Column("Exact contracts", "Before rounding", NumberForm.RATIO),
        Column("Target notional", f"Target, {ticket.currency}", money),
        Column("Traded notional", f"Traded, {ticket.currency}", money),
        Column("Residual notional", f"Left by rounding, {ticket.currency}", money),
        Column("Residual exposure", "Left, per unit hedged", NumberForm.STATISTIC),
        Column("Initial margin", f"Initial margin, {ticket.currency}", money),
    )
    return TableSpec(
        key="ticket-orders",
        title=f"Orders as of {ticket.as_of.isoformat()}",
        columns=columns,
        frame=frame,
        index_heading="Leg",
        footnote=(
            f"{sample_line(study)}. Ratios from data through {ticket.estimated_through.isoformat()}. Negative "
            "notionals are sales. A dash: no margin rate was given."
        ),
    )
