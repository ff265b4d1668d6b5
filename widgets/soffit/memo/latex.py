r"""Each table as LaTeX: booktabs rules, a caption, a label, a footnote.

A document needs ``\usepackage{booktabs}``, ``\usepackage{longtable}`` and a UTF-8 engine.
"""

from __future__ import annotations

import re
import unicodedata

from soffit.memo.layout import Memo, NumberedTable
from soffit.memo.text import Link, Runs

__all__ = ["escape", "table_files", "table_latex"]

_SPECIAL = {
    "\\": r"\textbackslash{}",
    "{": r"\{",
    "}": r"\}",
    "$": r"\$",
    "&": r"\&",
    "%": r"\%",
    "#": r"\#",
    "_": r"\_",
    "~": r"\textasciitilde{}",
    "^": r"\textasciicircum{}",
    "<": r"\textless{}",
    ">": r"\textgreater{}",
    "|": r"\textbar{}",
    '"': r"\textquotedbl{}",
    "`": r"\textasciigrave{}",
    "'": r"\textquotesingle{}",
    "[": "{[}",  # or one after a line end would be read as its argument
    "]": "{]}",
    "−": r"$-$",
    "–": r"\textendash{}",
    "²": r"\textsuperscript{2}",
    "·": r"\textperiodcentered{}",
    "α": r"$\alpha$",
    "β": r"$\beta$",
    "θ": r"$\theta$",
    "λ": r"$\lambda$",
    "σ": r"$\sigma$",
    "√": r"$\surd$",
    "≤": r"$\leq$",
    "≥": r"$\geq$",
}


def escape(text: str) -> str:
    """Text that LaTeX sets as it is."""
    safe = "".join(_SPECIAL.get(char, "" if unicodedata.category(char) == "Cf" else char) for char in text)
    return re.sub(r"-(?=-)", "-{}", safe)  # or two of them would run into a dash


def table_latex(table: NumberedTable) -> str:
    """One table with its caption, label and footnote."""
    heads = [escape(heading) for heading in table.headings]
    columns = "".join("r" if number else "l" for number in table.is_number)
    width = len(heads)
    head = " & ".join(
        f"\\multicolumn{{1}}{{{'r' if number else 'l'}}}{{{text}}}"
        for text, number in zip(heads, table.is_number, strict=True)
    )
    rows = [
        " & ".join([escape(name), *(escape(cell.text) for cell in cells)]) + r" \\"
        for name, cells in table.rows()
    ]
    # The number is given, not counted: it must be the memo's, wherever the table is set.
    lines = [
        r"\begingroup",
        f"\\setcounter{{table}}{{{table.number - 1}}}",
        r"\small",
        f"\\begin{{longtable}}{{@{{}}{columns}@{{}}}}",
        f"\\caption{{{_words(table.caption)}}}\\label{{{table.anchor}}}\\\\",
        r"\toprule",
        head + r" \\",
        r"\midrule",
        r"\endfirsthead",
        r"\toprule",
        head + r" \\",
        r"\midrule",
        r"\endhead",
        r"\bottomrule",
    ]
    if table.footnote:
        note = f"{{\\footnotesize {escape(table.footnote)}}}"
        lines.append(f"\\multicolumn{{{width}}}{{@{{}}p{{\\linewidth}}@{{}}}}{note}\\\\")
    lines += [r"\endlastfoot", *rows, r"\end{longtable}", r"\endgroup", ""]
    return "\n".join(lines)


def table_files(memo: Memo) -> dict[str, bytes]:
    """Each numbered table as a file to input."""
    return {f"tables/{table.stem}.tex": table_latex(table).encode("utf-8") for table in memo.tables}


def _words(parts: Runs) -> str:
    return "".join(escape(part.text if isinstance(part, Link) else part) for part in parts)
