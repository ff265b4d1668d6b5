"""Every format: the numbers of show(), names as text, the same bytes twice, what accessibility needs."""

from __future__ import annotations

import io
import itertools
import re
import shutil
import subprocess
import zipfile
from functools import cache
from html.parser import HTMLParser
from pathlib import Path

import docx
import mistune
import numpy as np
import openpyxl
import pandas as pd
import pytest
from docx.oxml.ns import qn
from matplotlib.image import imread
from pptx import Presentation
from pptx.enum.shapes import MSO_SHAPE_TYPE

from soffit.errors import InputError, SettingError
from soffit.memo import Format, Memo, Pack, write
from soffit.memo.excel import excel as write_excel
from soffit.memo.html import html as write_html
from soffit.memo.latex import escape as latex_escape
from soffit.memo.latex import table_latex
from soffit.memo.layout import NumberedTable
from soffit.memo.markdown import escape as markdown_escape
from soffit.memo.markdown import markdown as write_md
from soffit.memo.markdown import table_markdown
from soffit.memo.pdf import pdf as write_pdf
from soffit.memo.slides import slides as write_slides
from soffit.memo.text import plain
from soffit.memo.word import word as write_word
from soffit.present.spec import NumberForm, TableSpec
from soffit.present.theme import MEMO_WIDTHS
from soffit.present.wording import DASH, show
from soffit.study import Study

from .conftest import NASTY, make_exhibit

VOID = {"meta", "img", "link", "br", "hr", "input"}


class Page(HTMLParser):
    """Tags, attributes, texts and tables of a page."""

    def __init__(self, text: str) -> None:
        super().__init__(convert_charrefs=True)
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.open: list[str] = []
        self.text: list[str] = []
        self.tables: list[list[list[str]]] = []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)
        if tag == "table":
            self.tables.append([])
        elif tag == "tr":
            self.tables[-1].append([])
        elif tag in {"td", "th"}:
            self.tables[-1][-1].append("")

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag, "a name broke the structure of the page"

    def handle_data(self, data: str) -> None:
        if self.open and self.open[-1] in {"td", "th"}:
            self.tables[-1][-1][-1] += data
        if "style" not in self.open:
            self.text.append(data)


def shown(spec: TableSpec) -> list[list[str]]:
    """What every format must show, written by show() alone."""
    rows = []
    for row, name in enumerate(spec.frame.index):
        cells = []
        for column in spec.columns:
            value = spec.frame[column.key].iloc[row]
            value = None if not isinstance(value, str) and pd.isna(value) else value
            cells.append(plain(show(value, spec.form_at(row, column))))
        rows.append([plain(name), *cells])
    return rows


def on_page(table: NumberedTable) -> list[list[str]]:
    """The same, turned on its side where a page has no room for the columns of a few rows."""
    grid = [list(table.headings), *shown(table.spec)]
    turned = len(table.headings) > 9 and len(table.spec.frame) <= 5
    return [list(row) for row in zip(*grid, strict=True)] if turned else grid


@pytest.fixture(scope="module")
def memo(study_once: Study) -> Memo:
    pack = Pack(study_once, title=f"On {NASTY[0]}", author=NASTY[2], dated=NASTY[6])
    return pack.keep(make_exhibit()).keep(make_exhibit(NASTY[:3], key="few")).lay_out()


@pytest.fixture(scope="module")
def real(study_once: Study) -> Memo:
    return Pack(study_once).keep("ceiling").keep("joint").keep("regression").lay_out()


def test_slides_hold_figures_small_tables_and_cautions(memo: Memo, real: Memo) -> None:
    for one in (memo, real):
        show = Presentation(io.BytesIO(slides(one)))
        shapes = [shape for slide in show.slides for shape in slide.shapes]
        pictures = [shape for shape in shapes if shape.shape_type == MSO_SHAPE_TYPE.PICTURE]
        assert [picture._element.nvPicPr.cNvPr.get("descr") for picture in pictures] == [
            figure.alt for figure in one.figures
        ]
        tables = {shape.name: shape.table for shape in shapes if shape.has_table}
        assert tables
        for table in one.tables:
            if table.name in tables:
                texts = [[cell.text for cell in row.cells] for row in tables[table.name].rows]
                assert texts == on_page(table)[: len(texts)]
        words = "\n".join(shape.text_frame.text for shape in shapes if shape.has_text_frame)
        assert all(text in words for text in (*one.cautions, *one.references))


# Drawing takes most of the time, and the same memo always gives the same bytes: draw each once.
html, word, excel = cache(write_html), cache(write_word), cache(write_excel)
markdown, pdf, slides = cache(write_md), cache(write_pdf), cache(write_slides)


# ---- every number is the string of show()
def test_html_shows_the_numbers_of_show(memo: Memo, real: Memo) -> None:
    for one in (memo, real):
        tables = Page(html(one)).tables
        for table, found in zip(one.tables, tables, strict=False):
            assert found[0] == list(table.headings)
            assert found[1:] == shown(table.spec)


def test_word_shows_the_numbers_of_show(memo: Memo, real: Memo) -> None:
    for one in (memo, real):
        tables = docx.Document(io.BytesIO(word(one))).tables
        for table, found in zip(one.tables, tables, strict=False):
            texts = [[cell.text for cell in row.cells] for row in found.rows]
            assert texts == on_page(table)


def test_markdown_shows_the_numbers_of_show(memo: Memo, real: Memo) -> None:
    render = mistune.create_markdown(plugins=["table", "strikethrough", "url", "math"])
    for one in (memo, real):
        page = Page(str(render(markdown(one))))
        for table, found in zip(one.tables, page.tables, strict=False):
            assert found[1:] == shown(table.spec)


def test_latex_shows_the_numbers_of_show(memo: Memo, real: Memo) -> None:
    for one in (memo, real):
        for table in one.tables:
            text = table_latex(table)
            for row in shown(table.spec):
                assert " & ".join(latex_escape(cell) for cell in row) + r" \\" in text


def test_pdf_is_typeset_from_the_numbers_of_show(memo: Memo, real: Memo) -> None:
    from soffit.memo.pdf import _data

    for one in (memo, real):
        sections = [part for part in _data(one)["body"] if part["kind"] == "section"]
        tables = [table for section in sections for table in section["tables"]]
        for table, found in zip(one.tables, tables, strict=True):
            assert [found["headings"], *found["rows"]] == on_page(table)


def test_excel_keeps_full_precision_under_formats_that_show_the_same(memo: Memo, real: Memo) -> None:
    for one in (memo, real):
        book = openpyxl.load_workbook(io.BytesIO(excel(one)))
        for table in one.tables:
            sheet = book[table.name]
            for row, expected in enumerate(shown(table.spec), start=4):
                assert sheet.cell(row, 1).value == expected[0]
                for column, text in enumerate(expected[1:], start=2):
                    cell = sheet.cell(row, column)
                    spec = table.spec.columns[column - 2]
                    value = table.spec.frame[spec.key].iloc[row - 4]
                    form = table.spec.form_at(row - 4, spec)
                    if cell.data_type == "s":
                        assert cell.value == text
                    elif form is NumberForm.DATE:
                        assert (cell.value, cell.number_format) == (pd.Timestamp(value), "yyyy-mm")
                    else:
                        scale = 10_000 if form is NumberForm.BASIS_POINTS else 1
                        # A file holds sixteen digits.
                        assert cell.value == pytest.approx(value * scale, rel=1e-15)
                        assert excel_shows(cell.value, cell.number_format) == text


def excel_shows(value: float, form: str) -> str:
    """Write a number as a spreadsheet would, for the formats in use."""
    if form.startswith("["):
        if value < 0.0001:
            return "<0.0001"
        form = "0.0000" if value < 0.01 else "0.000"
    unit = "%" if form.endswith("%") else " bp" if "bp" in form else ""
    digits = form.split("%")[0].split('"')[0]
    places = len(digits.partition(".")[2])
    text = f"{value * (100 if unit == '%' else 1):{',' if ',' in digits else ''}.{places}f}{unit}"
    text = text.lstrip("-") if not any(c in text for c in "123456789") else text
    return text.replace("-", "−")


# ---- names are text in every format
def test_html_holds_names_as_text_and_loads_nothing(memo: Memo) -> None:
    page = Page(html(memo))
    assert page.open == []
    assert {tag for tag, _ in page.tags} <= {
        *(
            "html",
            "head",
            "meta",
            "title",
            "style",
            "body",
            "main",
            "header",
            "section",
            "figure",
            "figcaption",
        ),
        *(
            "h1",
            "h2",
            "p",
            "ul",
            "ol",
            "li",
            "a",
            "b",
            "span",
            "div",
            "img",
            "table",
            "caption",
            "thead",
            "tbody",
        ),
        *("tr", "th", "td", "code"),
    }
    for _, attributes in page.tags:
        assert not [name for name in attributes if name.startswith("on")]
        assert (attributes.get("href") or "#").startswith("#")
        assert attributes.get("src", "data:image/svg+xml;base64,").startswith("data:image/svg+xml;base64,")  # type: ignore[union-attr]
    assert "On <script>alert(1)</script>" in "".join(page.text)
    anchors = {attributes["id"] for _, attributes in page.tags if attributes.get("id")}
    assert all(a["href"][1:] in anchors for tag, a in page.tags if tag == "a")  # type: ignore[index]


def test_html_is_accessible(real: Memo) -> None:
    page = Page(html(real))
    tags = dict(page.tags)
    assert tags["html"]["lang"] == "en"
    images = [attributes for tag, attributes in page.tags if tag == "img"]
    assert [image["alt"] for image in images] == [figure.alt for figure in real.figures]
    heads = [attributes for tag, attributes in page.tags if tag == "th"]
    assert all(attributes.get("scope") in {"col", "row"} for attributes in heads)
    assert sum(tag == "caption" for tag, _ in page.tags) == sum(tag == "table" for tag, _ in page.tags)
    assert sum(tag == "main" for tag, _ in page.tags) == 1


def test_word_holds_names_as_text(memo: Memo) -> None:
    data = word(memo)
    document = docx.Document(io.BytesIO(data))
    assert document.core_properties.title == plain(memo.title)
    with zipfile.ZipFile(io.BytesIO(data)) as archive:
        body = archive.read("word/document.xml").decode()
        links = archive.read("word/_rels/document.xml.rels").decode()
    assert "<script" not in body
    assert "hyperlink" not in links
    codes = set(re.findall(r"<w:instrText[^>]*> (\w+) ", body))
    assert codes <= {"SEQ", "REF"}


def test_word_has_captions_as_fields_styles_and_text_alternatives(real: Memo) -> None:
    document = docx.Document(io.BytesIO(word(real)))
    captions = [line for line in document.paragraphs if line.style.name == "Caption"]
    codes = [element.text for line in captions for element in line._p.iter(qn("w:instrText"))]
    assert codes.count(r" SEQ Figure \* ARABIC ") == len(real.figures)
    assert codes.count(r" SEQ Table \* ARABIC ") == len(real.tables)
    assert [line.text.split(". ")[0] for line in captions if line.text.startswith("Figure")] == [
        figure.name for figure in real.figures
    ]
    pictures = list(document.element.body.iter(qn("wp:docPr")))
    assert [picture.get("descr") for picture in pictures] == [figure.alt for figure in real.figures]
    headings = [line.text for line in document.paragraphs if line.style.name == "Heading 1"]
    assert headings[0] == "Findings"
    assert "Cautions" in headings
    for table in document.tables:
        assert table.rows[0]._tr.trPr.find(qn("w:tblHeader")) is not None
    targets = {mark.get(qn("w:name")) for mark in document.element.body.iter(qn("w:bookmarkStart"))}
    wanted = {code.split()[1] for code in re.findall(r" REF \S+", "".join(_codes(document)))}
    assert wanted
    assert wanted <= targets


def _codes(document: docx.document.Document) -> list[str]:
    return [element.text or "" for element in document.element.body.iter(qn("w:instrText"))]


def test_word_follows_its_schema_order_for_borders_and_rows(real: Memo) -> None:
    """Word refuses files whose elements stand in another order than ECMA-376 gives."""
    document = docx.Document(io.BytesIO(word(real)))
    order = [
        "w:keepNext",
        "w:keepLines",
        "w:pageBreakBefore",
        "w:pBdr",
        "w:spacing",
        "w:ind",
        "w:jc",
        "w:rPr",
    ]
    for properties in document.element.body.iter(qn("w:pPr")):
        found = [order.index(tag) for tag in order for child in properties if child.tag == qn(tag)]
        seen = [order.index(t) for child in properties for t in order if child.tag == qn(t)]
        assert seen == sorted(found)
    table_order = ["w:tblStyle", "w:tblW", "w:jc", "w:tblLayout", "w:tblCellMar", "w:tblLook", "w:tblCaption"]
    for properties in document.element.body.iter(qn("w:tblPr")):
        seen = [table_order.index(t) for child in properties for t in table_order if child.tag == qn(t)]
        assert seen == sorted(seen)


def test_excel_never_holds_a_formula_or_a_link_outside(memo: Memo) -> None:
    data = excel(memo)
    with zipfile.ZipFile(io.BytesIO(data)) as archive:
        sheets = {name: archive.read(name).decode() for name in archive.namelist() if name.endswith(".xml")}
        links = [archive.read(name).decode() for name in archive.namelist() if name.endswith(".rels")]
    assert not [name for name, text in sheets.items() if "<f>" in text or "<f " in text]
    assert not [text for text in links if "External" in text]
    book = openpyxl.load_workbook(io.BytesIO(data))
    names = {cell.value for row in book["Table 1"].iter_rows(min_row=4, max_col=1) for cell in row}
    assert '=HYPERLINK("http://example.com","click")' in names
    assert all(cell.data_type != "f" for sheet in book for row in sheet.iter_rows() for cell in row)


@pytest.mark.parametrize(
    "text", ["1. x", "12) x", "- x", "+ x", "# x", "> x", "=== x", "a_b_c", "~~x~~", "$x$ and $y$"]
)
def test_markdown_shows_text_as_it_is(text: str) -> None:
    render = mistune.create_markdown(plugins=["table", "strikethrough", "url", "math"])
    page = Page(str(render(markdown_escape(text))))
    assert [tag for tag, _ in page.tags] == ["p"]
    assert "".join(page.text).strip() == text


def test_markdown_holds_names_as_text(memo: Memo) -> None:
    render = mistune.create_markdown(plugins=["table", "strikethrough", "url", "math"], escape=False)
    page = Page(str(render(markdown(memo))))
    assert {tag for tag, _ in page.tags} <= {
        *(
            "h1",
            "h2",
            "p",
            "strong",
            "ul",
            "ol",
            "li",
            "img",
            "table",
            "thead",
            "tbody",
            "tr",
            "th",
            "td",
            "code",
        ),
    }


# The LaTeX commands that may stand in a table; no engine is needed to see that a name brings no other.
COMMANDS = {
    *(
        "begin",
        "end",
        "begingroup",
        "endgroup",
        "setcounter",
        "small",
        "caption",
        "label",
        "toprule",
        "midrule",
    ),
    *("bottomrule", "endfirsthead", "endhead", "endlastfoot", "multicolumn", "footnotesize", "linewidth"),
    *(
        "textbackslash",
        "textasciitilde",
        "textasciicircum",
        "textless",
        "textgreater",
        "textbar",
        "textquotedbl",
    ),
    *("textasciigrave", "textquotesingle", "textendash", "textsuperscript", "textperiodcentered"),
    *("alpha", "beta", "theta", "lambda", "sigma", "surd", "leq", "geq"),
}


def test_latex_holds_names_as_text(memo: Memo) -> None:
    for table in memo.tables:
        text = table_latex(table)
        assert set(re.findall(r"\\([A-Za-z]+)", text)) <= COMMANDS
        bare = re.sub(r"\\[\\{}$&%#_]", "", text)
        assert bare.count("{") == bare.count("}")
        assert "%" not in bare
        assert "#" not in bare
        assert bare.count("$") == 2 * len(re.findall(r"\$(?:-|\\[a-z]+)\$", bare))
        columns = len(table.headings)
        rows = text.split("\\endlastfoot\n")[1].split("\\end{longtable}")[0].strip().split("\n")
        assert len(rows) == len(table.spec.frame)
        assert all(len(re.findall(r"(?<!\\)&", row)) == columns - 1 for row in rows)


def test_latex_keeps_every_visible_character() -> None:
    assert latex_escape(r"\a{b}$c$ 5% #1 x_y ^~ a--b [z]") == (
        r"\textbackslash{}a\{b\}\$c\$ 5\% \#1 x\_y \textasciicircum{}\textasciitilde{} a-{}-b {[}z{]}"
    )


def test_pdf_sets_names_as_text(memo: Memo, tmp_path: Path) -> None:
    data = pdf(memo)
    assert data.startswith(b"%PDF")
    assert b"/URI" not in data
    assert b"/JavaScript" not in data
    if shutil.which("pdftotext") is None:
        pytest.skip("pdftotext is not installed")
    (tmp_path / "memo.pdf").write_bytes(data)
    words = subprocess.run(
        ["pdftotext", "-layout", str(tmp_path / "memo.pdf"), "-"], capture_output=True, check=True
    )
    found = "".join(words.stdout.decode().split())
    assert "On<script>alert(1)</script>" in found
    assert "{{7*7}}{%raw%}" in found
    assert "#letx=1" in found


# ---- the same bytes
@pytest.mark.parametrize("form", list(Format))
def test_two_runs_give_the_same_bytes(nasty_pack: Pack, form: Format, tmp_path: Path) -> None:
    first = write(nasty_pack, tmp_path / "one", [form])
    second = write(nasty_pack, tmp_path / "two", [form])
    assert [path.name for path in first] == [path.name for path in second]
    assert first
    for one, other in zip(first, second, strict=True):
        assert one.read_bytes() == other.read_bytes(), one.name


def test_no_file_carries_the_clock(nasty_pack: Pack) -> None:
    memo = nasty_pack.lay_out()
    for data in (word(memo), excel(memo), slides(memo)):
        with zipfile.ZipFile(io.BytesIO(data)) as archive:
            assert {entry.date_time for entry in archive.infolist()} == {(1980, 1, 1, 0, 0, 0)}
            core = archive.read("docProps/core.xml").decode()
        stamps = re.findall(r"(\d{4}-\d\d-\d\d)T", core)
        assert set(stamps) == {f"{memo.as_of:%Y-%m-%d}"}


# ---- what belongs to every format
def test_cautions_references_and_provenance_are_in_every_document(real: Memo, tmp_path: Path) -> None:
    document = docx.Document(io.BytesIO(word(real)))
    book = openpyxl.load_workbook(io.BytesIO(excel(real)))
    texts = {
        "html": "".join(Page(html(real)).text),
        "docx": "\n".join(line.text for line in document.paragraphs),
        "xlsx": "\n".join(str(cell.value) for sheet in book for row in sheet.iter_rows() for cell in row),
        "md": markdown(real),
    }
    for name, text in texts.items():
        for needed in (*real.cautions, *real.references, real.sections[0].finding):
            wanted = markdown_escape(needed) if name == "md" else needed
            assert wanted in text, (name, needed)


def test_pictures_have_300_dpi_at_both_widths(pack: Pack, tmp_path: Path) -> None:
    files = [path for path in write(pack, tmp_path, ["png"]) if path.name.startswith("figure-01")]
    widths = sorted(imread(path).shape[1] for path in files)
    assert widths == [round(300 * MEMO_WIDTHS["column"]), round(300 * MEMO_WIDTHS["page"])]


def test_long_tables_are_cut_with_a_word_and_the_workbook_has_all(pack: Pack, make: object) -> None:
    names = [f"Asset {i}" for i in range(75)]
    pack.keep(make(names, key="long"))  # type: ignore[operator]
    memo = pack.lay_out()
    long = memo.tables[-2]
    document = docx.Document(io.BytesIO(word(memo)))
    assert len(document.tables[long.number - 1].rows) == 61
    assert any(
        "The first 60 of 75 rows; the workbook has all of them." in line.text for line in document.paragraphs
    )
    sheet = openpyxl.load_workbook(io.BytesIO(excel(memo)))[long.name]
    assert sheet.cell(78, 1).value == "Asset 74"
    assert "Asset 74" in table_markdown(long)


def test_missing_values_are_dashes(memo: Memo) -> None:
    rows = [list(cells) for _, cells in memo.tables[0].rows()]
    assert rows[1][0].text == DASH
    assert rows[1][0].number is None
    assert rows[2][2].text == "no limit"
    assert np.isfinite(rows[0][0].number)


def test_an_unknown_format_is_refused_with_the_nearest(pack: Pack, tmp_path: Path) -> None:
    with pytest.raises(SettingError, match="did you mean 'docx'"):
        write(pack, tmp_path, ["doc"])


def test_a_folder_that_cannot_be_written_is_said(pack: Pack, tmp_path: Path) -> None:
    (tmp_path / "taken").write_text("a file")
    with pytest.raises(InputError, match="cannot be written"):
        write(pack, tmp_path / "taken", ["md"])


def test_figures_differ_from_each_other(pack: Pack, tmp_path: Path) -> None:
    files = write(pack, tmp_path, ["svg"])
    for one, other in itertools.combinations(files, 2):
        assert one.read_bytes() != other.read_bytes()
