"""The book of hedged assets: weights, contributions, and the Sharpe ratio it implies beside the ceiling."""

from __future__ import annotations

import numpy as np

from soffit.estimate.statistic import NotApplicable
from soffit.present.exhibits.hedge import MOST_ROWS
from soffit.present.spec import (
    Axis,
    AxisScale,
    Bars,
    Column,
    Exhibit,
    FigureSpec,
    Line,
    NumberForm,
    Orientation,
    Points,
    Role,
    Rule,
    TableSpec,
)
from soffit.present.wording.hedge import book_finding
from soffit.present.wording.numbers import plural, show
from soffit.present.wording.sample import sample_line
from soffit.study import BookAlpha, HedgedBook, Study

__all__ = ["book_table", "exhibit", "path_figure", "weights_figure"]


def exhibit(study: Study, book: HedgedBook | None = None) -> Exhibit:
    """Build the exhibit of a book.

    Parameters
    ----------
    study : Study
        What it is about.
    book : HedgedBook, optional
        A book of other assets, alphas or limits, from ``study.book(...)``; the book of all assets on estimated alphas
        if None.
    """
    book = book or study.book()
    figures, notes = [weights_figure(study, book)], []
    path = path_figure(study, book)
    if isinstance(path, NotApplicable):
        notes.append(f"{path.name}: {path.reason}")
    else:
        figures.append(path)
    if left := book.joint.left_out:
        notes.append("left out of the book for short histories: " + ", ".join(left))
    sources = ["treynor-black-1973", "gibbons-ross-shanken-1989"]
    if book.limits.alphas is BookAlpha.CEILING:
        sources += ["pastor-stambaugh-1999", "barillas-shanken-2018"]
    return Exhibit(
        key="book",
        title="A book of hedged assets",
        sample=f"{sample_line(study)} · {_limits(book)}",
        finding=book_finding(book),
        figures=tuple(figures),
        tables=(book_table(study, book),),
        sources=tuple(sources),
        cautions=(
            "Weights fitted to estimated alphas chase their errors; in-sample Sharpe ratios of a book overstate.",
        ),
        notes=tuple(notes),
    )


def _limits(book: HedgedBook) -> str:
    limits, ratio = book.limits, NumberForm.RATIO
    parts = [
        f"alphas {limits.alphas}",
        "residual correlations ignored" if limits.diagonal else "full residual covariances",
        f"risk aversion {show(limits.risk_aversion, ratio)}",
    ]
    if limits.position is not None:
        parts.append(f"position limit {show(limits.position, ratio)}")
    if limits.gross is not None:
        parts.append(f"gross limit {show(limits.gross, ratio)}")
    return ", ".join(parts)


def _footnote(study: Study, book: HedgedBook) -> str:
    words = _limits(book)
    return f"{sample_line(study)}. {words[0].upper()}{words[1:]}. In sample, before costs unless net."


def weights_figure(study: Study, book: HedgedBook) -> FigureSpec:
    """Draw the weights of the book."""
    table = book.table[book.held]
    chosen = table["weight"].abs().sort_values(ascending=False, kind="stable").index[:MOST_ROWS]
    shown = table.loc[chosen].sort_values("weight", kind="stable")
    names = tuple(str(name) for name in shown.index)
    weights = shown["weight"].to_numpy(dtype=float)
    roles = tuple(Role.SECOND if weight < 0 else Role.ESTIMATE for weight in weights)
    longs, shorts = int((table["weight"] > 0).sum()), int((table["weight"] < 0).sum())
    cut = f" The {MOST_ROWS} largest of {len(table):,}." if len(table) > len(shown) else ""
    return FigureSpec(
        key="book-weights",
        title="Weights of the book",
        x=Axis("Weight per unit of capital", NumberForm.RATIO),
        y=Axis("", NumberForm.TEXT, scale=AxisScale.CATEGORY, categories=names),
        marks=(
            Bars(
                "weights", np.arange(len(names), dtype=float), weights, names, Orientation.HORIZONTAL, roles
            ),
            Rule("zero", 0.0, Orientation.VERTICAL, Role.REFERENCE),
        ),
        alt=(
            f"Weights of {plural(len(table), 'hedged asset')}: {longs} long, {shorts} short, gross "
            f"{show(book.book.gross, NumberForm.RATIO)}."
        ),
        footnote=f"{_footnote(study, book)}{cut}",
        aspect=1.2,
    )


def path_figure(study: Study, book: HedgedBook) -> FigureSpec | NotApplicable:
    """Draw the implied Sharpe ratio as assets join the book, the most useful first, against the ceiling."""
    path = book.path
    if isinstance(path, NotApplicable):
        return path
    m = book.joint.regression.periods_per_year
    squared = np.concatenate([[0.0], path.squared]) + book.book.theta2
    y = np.sqrt(squared * m)
    x = np.arange(len(y), dtype=float)
    names = ("factors alone", *(str(name) for name in book.assets[path.order]))
    ratio = NumberForm.RATIO
    hover = tuple(f"{name}: {show(float(value), ratio)}" for name, value in zip(names, y, strict=True))
    over = np.flatnonzero(y > book.ceiling * (1.0 + 1e-12))
    passes = f"passes the ceiling with asset {int(over[0])}" if len(over) else "stays under the ceiling"
    return FigureSpec(
        key="book-path",
        title="Implied Sharpe ratio as assets join",
        x=Axis("Assets in the book, the most useful first", NumberForm.COUNT),
        y=Axis(
            "Sharpe ratio of factors and book, a year", ratio, (0.0, max(float(y[-1]), book.ceiling) * 1.1)
        ),
        marks=(
            Line("path", x, y, Role.ESTIMATE),
            Points(
                "assets",
                x,
                y,
                names,
                (Role.ESTIMATE,),
                hover,
                labelled=tuple(range(1, min(4, len(x)))),
                selectable=True,
            ),
            Rule("ceiling", book.ceiling, role=Role.CEILING, label=f"ceiling {show(book.ceiling, ratio)}"),
        ),
        alt=(
            f"The implied Sharpe ratio rises from {show(float(y[0]), ratio)} with the factors alone to "
            f"{show(float(y[-1]), ratio)} with {plural(len(y) - 1, 'asset')}; it {passes}."
        ),
        footnote=f"{_footnote(study, book)} Without limits, correlations counted.",
    )


def book_table(study: Study, book: HedgedBook) -> TableSpec:
    """Tabulate weights, contributions and what each asset adds."""
    percent, ratio, share = NumberForm.PERCENT, NumberForm.RATIO, NumberForm.SHARE
    frame = book.table.copy()
    frame["held"] = np.where(frame["held"], "yes", "no")
    columns = (
        Column("held", "In the book", NumberForm.TEXT),
        Column("alpha", "Alpha used, a year", percent),
        Column("sigma", "Residual vol., a year", percent),
        Column("appraisal", "Appraisal ratio, a year", ratio),
        Column("weight", "Weight", ratio),
        Column("alpha_share", "Share of alpha", share),
        Column("risk_share", "Share of risk", share),
        Column("adds", "Adds to Sharpe ratio", ratio),
    )
    return TableSpec(
        key="book",
        title="The book asset by asset",
        columns=columns,
        frame=frame.sort_values("adds", ascending=False, kind="stable"),
        footnote=(
            f"{_footnote(study, book)} Adds: Sharpe ratio a year lost without an asset that is in the book, or "
            "gained with one that is not, before limits. A dash: not in the book, or not identified."
        ),
    )
