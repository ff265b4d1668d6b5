"""The memo, and each table alone, as Markdown."""

from __future__ import annotations

import re

from soffit.memo.layout import Memo, NumberedTable, Remark, Section, SimpleTable
from soffit.memo.text import Link, Runs
from soffit.present.draw_mpl import MemoWidth

__all__ = ["MOST_ROWS", "escape", "markdown", "table_files", "table_markdown"]

MOST_ROWS = 500

# What CommonMark and its extensions for tables, mathematics and mentions give a meaning to anywhere …
_ANYWHERE = re.compile(r"([\\`*_{}\[\]<>#|~$&^@])")
# … and at the start of a block.
_AT_START = re.compile(r"^(\s*)([-+=:>]|\d{1,9}(?=[.)](?:\s|$)))")


def escape(text: str) -> str:
    """Text that Markdown shows as it is; addresses in it do not become links."""
    escaped = _ANYWHERE.sub(r"\\\1", text)
    escaped = re.sub(r"(?i)\b(www)\.", r"\1\\.", escaped.replace("://", r"\://"))
    start = _AT_START.match(escaped)
    if start is None:
        return escaped
    if start.group(2).isdigit():  # an ordered list begins with digits and a stop or bracket
        return escaped[: start.end()] + "\\" + escaped[start.end() :]
    return escaped[: start.start(2)] + "\\" + escaped[start.start(2) :]


def table_markdown(table: NumberedTable, most: int | None = None) -> str:
    """One table with its caption and footnote."""
    lines = [
        f"**{table.name}.** {_words(table.caption)}",
        "",
        _row([escape(heading) for heading in table.headings]),
        _row(["---:" if number else ":---" for number in table.is_number]),
    ]
    lines += [
        _row([escape(name), *(escape(cell.text) for cell in cells)]) for name, cells in table.rows(most)
    ]
    note = " ".join(part for part in (table.footnote, table.cut(most) if most else "") if part)
    return "\n".join([*lines, "", escape(note), ""])


def table_files(memo: Memo) -> dict[str, bytes]:
    """Each numbered table, in full, as a file."""
    return {f"tables/{table.stem}.md": table_markdown(table).encode("utf-8") for table in memo.tables}


def markdown(memo: Memo) -> str:
    """The whole memo; pictures are those that the PNG format writes."""
    byline = " · ".join(escape(part) for part in (memo.author, memo.dated) if part)
    head = [
        f"# {escape(memo.title)}",
        byline,
        f"**{escape(memo.label_line)}**",
        escape(memo.span),
        "## Findings",
    ]
    findings = "\n".join(
        f"- {escape(part.finding)}" + (f" ({_words(part.where)})" if part.where else "")
        for part in memo.sections
    )
    blocks = [*head, findings]
    for part in memo.body:
        blocks += _remark(part) if isinstance(part, Remark) else _section(part)
    blocks += ["## Cautions", "\n".join(f"- {escape(text)}" for text in memo.cautions)]
    blocks += ["## Appendix A. Methods and sources"]
    blocks += ["\n".join(f"{number}. {escape(text)}" for number, text in enumerate(memo.references, 1))]
    blocks += ["## Appendix B. Provenance", _simple(memo.provenance.facts)]
    if memo.provenance.command:
        blocks.append(f"To make this memo again: `{memo.provenance.command}`")
    blocks += [_simple(table) for table in memo.provenance.tables]
    return "\n\n".join(block for block in blocks if block) + "\n"


def _remark(remark: Remark) -> list[str]:
    text = _words(remark.words)
    return [f"**{text}**" if remark.failed else text]


def _section(section: Section) -> list[str]:
    cited = ", ".join(f"\\[{number}\\]" for number in section.citations)
    blocks = [
        f"## {section.number}. {escape(section.heading)}",
        f"**{escape(' · '.join(section.labels))}**" if section.labels else "",
        escape(section.finding) + (f" Sources: {cited}." if cited else ""),
        "Settings of this section: " + escape("; ".join(section.changes)) + "." if section.changes else "",
        *(f"Note: {escape(note)}" for note in section.notes),
        *(f"Caution: {escape(caution)}" for caution in section.cautions),
    ]
    for figure in section.figures:
        blocks += [
            f"**{figure.name}.** {_words(figure.caption)}",
            f"![{escape(figure.alt)}](figures/{figure.stem}-{MemoWidth.PAGE}.png)",
            escape(figure.footnote),
        ]
    return blocks + [table_markdown(table, MOST_ROWS) for table in section.tables]


def _words(parts: Runs) -> str:
    return "".join(escape(part.text if isinstance(part, Link) else part) for part in parts)


def _row(cells: list[str]) -> str:
    return "| " + " | ".join(cells) + " |"


def _simple(table: SimpleTable) -> str:
    lines = [f"**{escape(table.title)}**", "", _row([escape(text) for text in table.headings])]
    lines.append(_row([":---"] * len(table.headings)))
    return "\n".join(lines + [_row([escape(text) for text in row]) for row in table.rows])
