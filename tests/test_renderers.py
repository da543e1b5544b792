"""Markdown, LaTeX and HTML of documents: what a user wrote is shown, and never obeyed."""

import base64
import re
import shutil
import subprocess
import unicodedata
from html.parser import HTMLParser
from itertools import pairwise

import pytest
from documents import AUDIT, HOSTILE, LEDGER, PLAIN, SIZES, SVG, WIDE, document_of, hostile_document
from hypothesis import example, given, settings
from hypothesis import strategies as st
from markdown_it import MarkdownIt

from mixbridge.display import visible
from mixbridge.display.text import number
from mixbridge.errors import DataError
from mixbridge.report.as_html import html
from mixbridge.report.as_latex import latex
from mixbridge.report.as_markdown import markdown
from mixbridge.report.cells import Anchors, cell_text, full_text, wordy
from mixbridge.report.document import Code, Document, Paragraph, Table
from mixbridge.report.svg import inline_svg
from mixbridge.report.symbols import INDEXED, WRITTEN
from mixbridge.report.tex_signs import TEXT
from mixbridge.report.tex_text import tex_text

anything = st.text(max_size=60) | st.text(alphabet="\\`*_[]|~^&<>$#%{}-+=.1:/ \n\t'\"\u202e!@()", max_size=30)


# Text that is safe to show


def test_what_reorders_or_hides_is_written_out_and_letters_stay():
    assert visible("a\u202eb\u2066c\x00\ud800\ufeff") == "a⟨U+202E⟩b⟨U+2066⟩c⟨U+0000⟩⟨U+D800⟩⟨U+FEFF⟩"
    for kept in ("שלום", "🐝 蜂蜜", "naïve β̂", "می\u200cخواهم", "a\u00a0b"):
        assert visible(kept) == kept
    assert visible(" a\r\n\u2028b ") == "a b"
    assert visible("a\r\nb\tc", lines=True) == "a\nb   c"


@given(anything)
def test_what_is_shown_can_be_encoded_and_is_shown_again_unchanged(text):
    shown = visible(text)
    shown.encode("utf-8")
    assert visible(shown) == shown
    assert not any(unicodedata.category(sign) in {"Cc", "Cs"} for sign in shown)


def test_numbers_keep_their_digits_and_truth_is_a_word():
    assert [cell_text(cell, 3) for cell in (True, 12345, -0.00123456, float("nan"), "x\ny")] == [
        "yes",
        "12345",
        "-0.00123",
        "-",
        "x y",
    ]
    assert [full_text(cell) for cell in (True, 7, 0.1 + 0.2, "x")] == [None, "7", "0.30000000000000004", None]


def test_anchors_occur_once():
    anchors = Anchors()
    names = [anchors.give("s", text) for text in ("A b", "a-b", "שלום", "", "x" * 99, "a b 2")]
    assert len(set(names)) == len(names)
    assert all(re.fullmatch(r"[a-z0-9-]+", name) for name in names)


# Markdown

PARSER = MarkdownIt("commonmark", {"html": True}).enable(["table", "strikethrough"])
FORBIDDEN = {
    "html_inline",
    "html_block",
    "link_open",
    "image",
    "em_open",
    "s_open",
    "code_inline",
    "hardbreak",
}


def inline_texts(source):
    """Return the text of each inline part, in order, and the kinds of all tokens."""
    texts, kinds = [], []
    for token in PARSER.parse(source):
        kinds.append(token.type)
        if token.type == "inline":
            kinds += [child.type for child in token.children]
            texts.append("".join(child.content for child in token.children))
    return texts, kinds


@given(anything)
@example("= 0")
@example("0 #")
@example("#")
@example("# #")
def test_markdown_shows_what_was_written_and_obeys_none_of_it(text):
    texts, kinds = inline_texts(markdown(document_of(text)))
    assert not FORBIDDEN & set(kinds)
    shown = visible(text)
    assert kinds.count("heading_open") == 2
    assert kinds.count("table_open") == 1
    assert kinds.count("fence") == 2
    # Titles, paragraphs and points that are empty make no inline part.
    squeezed = [" ".join(part.split()) for part in texts]
    wanted = " ".join(shown.split())
    if wanted:
        # Title, heading, paragraph, caution, point, caption, heading of a column, cell, note, caption of the picture.
        exact = [part for part in squeezed if part == wanted]
        assert len(exact) >= 9
        assert f"Figure. {wanted}" in squeezed
        assert f"In words: {wanted}" in squeezed


@given(anything)
def test_fences_in_markdown_hold_lines_as_they_stand(text):
    source = markdown(Document("t", (Code(text), Paragraph("after"))))
    fences = [token for token in PARSER.parse(source) if token.type == "fence"]
    assert len(fences) == 1
    assert fences[0].content == visible(text, lines=True) + "\n"


def test_markdown_of_a_plain_document_lines_up():
    text = markdown(PLAIN)
    assert text.startswith("# Methods appendix: honey\n\n## Model\n\n")
    assert "\n\n> All routes agree together when the covariance model is wrong.\n\n" in text
    assert "\n\n- 315 of 322 rows used\n- -0.5 is a number\n\n" in text
    table = text[text.index("**Every route") :].split("\n\n")[1].split("\n")
    assert len({len(line) for line in table}) == 1
    assert re.fullmatch(r"\| -+ \| -+ \| (-+: \| ){6}-+ \| -+ \|", table[1])
    assert "**Figure.** The path of forage\n\nIn words: Forage along the path: flat near 0.235." in text


# HTML


class Reader(HTMLParser):
    """Collects elements in order with their attributes, and the text inside each."""

    VOID = frozenset({"meta", "br", "wbr", "link", "img"})

    def __init__(self, page):
        super().__init__(convert_charrefs=True)
        self.elements, self._open = [], []
        self.feed(page)
        self.close()
        assert self._open == []

    def handle_starttag(self, tag, attributes):
        element = {"tag": tag, "text": "", **dict(attributes)}
        self.elements.append(element)
        if tag not in self.VOID:
            self._open.append(element)

    def handle_startendtag(self, tag, attributes):
        self.elements.append({"tag": tag, "text": "", **dict(attributes)})

    def handle_endtag(self, tag):
        assert self._open.pop()["tag"] == tag

    def handle_data(self, data):
        for element in self._open:
            element["text"] += data

    def all(self, tag, **wanted):
        return [
            element
            for element in self.elements
            if element["tag"] == tag and all(element.get(key) == value for key, value in wanted.items())
        ]


def lowered(text, pattern=INDEXED):
    """Return a text without the underscores of symbols, which are shown by the place of the index."""
    return re.sub(pattern, lambda match: match[0].replace("_", ""), text)


@given(anything)
@settings(max_examples=60)
def test_html_shows_what_was_written_and_its_elements_are_those_of_the_document(text):
    page = Reader(html(document_of(text)))
    shown = visible(text)
    prose = lowered(shown)
    assert page.all("title")[0]["text"] == (shown or "Document")
    assert page.all("h1")[0]["text"] == lowered(shown or "Document")
    assert [part["text"] for part in page.all("h2")] == ([prose] if shown.strip() else [])
    assert [part["text"] for part in page.all("p")[:2]] == [prose, prose]
    assert page.all("li")[0]["text"] == prose
    cells = [part["text"] for part in page.elements if part["tag"] in {"th", "td"}]
    assert [cells[1], cells[2]] == [shown, shown]
    assert page.all("p", **{"class": "note"})[0]["text"] == prose
    assert page.all("code")[0]["text"] == visible(text, lines=True)
    assert page.all("div", role="math")[0]["text"] == lowered(visible(text, lines=True), WRITTEN)
    assert page.all("svg")[0]["aria-label"] == shown

    def skeleton(reader):
        tags = [part["tag"] for part in reader.elements if part["tag"] not in {"sub", "bdi", "span"}]
        return [tag.replace("th", "td") for tag in tags]  # a heading without words is a cell like others

    wanted = skeleton(Reader(html(document_of("plain"))))
    assert skeleton(page) == [tag for tag in wanted if tag != "h2" or shown.strip()]


@pytest.mark.parametrize("document", [PLAIN, hostile_document()], ids=["plain", "hostile"])
def test_a_page_asks_for_nothing_and_its_names_occur_once(document):
    page = Reader(html(document, {"record.json": '{"a": 1}'}))
    names = [part["id"] for part in page.elements if "id" in part]
    assert len(names) == len(set(names))
    for part in page.elements:
        for key, value in part.items():
            if key in {"href", "src", "xlink:href", "action", "srcset", "poster"}:
                assert value.startswith(("#", "data:application/json;charset=utf-8;base64,"))
                if value.startswith("#"):
                    assert value[1:] in names
            elif key in {"aria-labelledby", "aria-describedby"}:
                assert value in names
            elif key not in {"text", "aria-label", "data-text", "data-label", "content"}:
                for inner in re.findall(r"url\(([^)]*)\)", value or ""):
                    assert inner[0] == "#"
                    assert inner[1:] in names
            assert not key.startswith("on")
    assert len(page.all("script")) == 1
    assert "url(" not in page.all("style")[0]["text"]


def test_the_policy_of_a_page_allows_its_own_script_alone():
    page = Reader(html(PLAIN))
    policy = page.all("meta", **{"http-equiv": "Content-Security-Policy"})[0]["content"]
    assert policy.startswith("default-src 'none'; style-src 'unsafe-inline'; script-src 'sha256-")
    assert "http" not in policy


def test_cells_of_a_page_keep_all_digits_and_whole_texts():
    page = Reader(
        html(Document("t", (Table("n", "c", ("name", "v"), (("a\u202eb\n", 0.1 + 0.2), ("c", 3))),)))
    )
    cells = page.all("td")
    assert [float(cell["data-value"]) for cell in cells] == [0.1 + 0.2, 3.0]
    assert [cell["text"] for cell in cells] == ["0.3000", "3"]
    first, second = page.all("th", scope="row")
    assert first["data-text"] == "a\u202eb\n"
    assert "data-text" not in second


def test_attachments_come_back_byte_for_byte():
    text = '{"name": "</script><b>\u202e", "é": 1}'
    page = Reader(html(PLAIN, {"record.json": text, 'a"<b>.bib': "@book{x}"}))
    links = [part for part in page.all("a") if "download" in part]
    assert [link["download"] for link in links] == ["record.json", 'a"<b>.bib']
    assert base64.b64decode(links[0]["href"].partition("base64,")[2]).decode() == text


def test_the_outline_of_a_page_skips_no_level_and_landmarks_are_there():
    page = Reader(html(PLAIN))
    levels = [int(part["tag"][1]) for part in page.elements if re.fullmatch(r"h[1-6]", part["tag"])]
    assert levels[0] == 1
    assert all(after <= before + 1 for before, after in pairwise(levels))
    for tag in ("header", "nav", "main", "footer"):
        assert len(page.all(tag)) == 1
    assert len(page.all("caption")) == len(page.all("table")) == 4
    assert {part["href"][1:] for part in page.all("a") if part.get("href", "").startswith("#section")} == {
        part["id"] for part in page.elements if part["tag"] in {"h2", "h3"}
    }


def test_a_wordy_table_is_laid_out_by_entry_and_keeps_its_roles():
    assert wordy(AUDIT)
    assert not any(wordy(table) for table in (LEDGER, SIZES, WIDE))
    page = Reader(html(Document("t", (AUDIT,))))
    assert len(page.all("tr", role="row")) == len(AUDIT.rows) + 1
    assert [part["data-label"] for part in page.all("td", role="cell")[:5]] == list(AUDIT.header[1:])


def test_drawings_lose_scripts_and_references_and_get_names_of_their_own():
    drawing = inline_svg(SVG, "p", "what it shows")
    page = Reader(drawing)
    assert not {"script", "metadata", "style", "a", "title"} & {part["tag"] for part in page.elements}
    assert "x.invalid" not in drawing
    assert "pwned" not in drawing
    assert 'clip-path="url(#p-p1)"' in drawing
    assert 'href="#p-m1"' in drawing
    assert page.all("svg")[0]["style"] == "stroke-linejoin: round; stroke-linecap: butt"
    assert page.all("text")[0]["text"] == "forage < feeding"
    for bad in ("", "<html/>", "<svg", '<!DOCTYPE svg [<!ENTITY a "b">]><svg>&a;</svg>'):
        with pytest.raises(DataError, match="not SVG"):
            inline_svg(bad, "p", "")


# LaTeX

LAID_OUT = re.compile(r"[\x20-\x7e\n]*")


def body_of(text):
    return text[text.index("\\begin{document}") :]


def check_structure(text):
    """Check that braces balance, environments nest, and no special sign stands bare outside mathematics and tables."""
    body = body_of(text)
    assert LAID_OUT.fullmatch(text)
    open_, depth = [], 0
    for match in re.finditer(r"\\(begin|end)\{(\w+)\}|\\(?:[A-Za-z]+|.|\n)|[{}$%#~^_&]", body):
        if match[1] == "begin":
            open_.append((match[2], depth))
        elif match[1] == "end":
            assert open_.pop() == (match[2], depth)
        elif match[0] == "{":
            depth += 1
        elif match[0] == "}":
            depth -= 1
            assert depth >= 0
        else:
            assert match[0] not in {"$", "%", "#"}
    assert depth == 0
    assert open_ == []


@given(anything)
def test_latex_is_ascii_and_its_braces_balance(text):
    check_structure(latex(document_of(text)))


def commands_of(text):
    return set(re.findall(r"\\([A-Za-z]+)", text))


def test_latex_knows_no_command_of_a_user():
    signs = commands_of(" ".join(TEXT.values())) | {"kern", "ensuremath"}
    known = commands_of(body_of(latex(document_of("plain")))) | signs
    assert not known & {"input", "write", "catcode", "csname", "endcsname"}
    for text in (r"\input{x}", r"\write18{ls}", r"\catcode`\%=12", r"\csname x\endcsname", "^^5cinput x"):
        assert commands_of(body_of(latex(document_of(text)))) <= known


@pytest.mark.parametrize(
    ("text", "wanted"),
    [
        ("σ_α² and K_w", r"\ensuremath{\sigma_{\alpha}^{2}} and \ensuremath{K_{w}}"),
        ("a -0.5 b-1", r"a \ensuremath{-}0.5 b-1"),
        ("10⁻³", r"10\ensuremath{{}^{-3}}"),
        ("Łódź", r"\L{}\'{o}d\'{z}"),
        ("e\u0301 x\u0304", r"\'{e} \ensuremath{\bar{x}}"),
        ("שלום", r"\codepoints{05E9 05DC 05D5 05DD}"),
        ("--", r"-\kern0pt{}-"),
        ("swamy_arora", r"swamy\_\allowbreak{}arora"),
        ("[x]", "{[}x{]}"),
    ],
)
def test_text_as_latex(text, wanted):
    assert tex_text(text) == wanted


ENGINE = (
    shutil.which("pdflatex")
    or shutil.which("lualatex")
    or shutil.which("xelatex")
    or shutil.which("tectonic")
)
needs_engine = pytest.mark.skipif(
    ENGINE is None, reason="no TeX engine (pdflatex, lualatex, xelatex, tectonic)"
)


def compiled(document, directory):
    """Compile a document once and return the log."""
    (directory / "a.tex").write_text(latex(document), encoding="utf-8")
    options = (
        ["--keep-logs"]
        if "tectonic" in ENGINE
        else ["-halt-on-error", "-interaction=nonstopmode", "-no-shell-escape"]
    )
    run = subprocess.run(
        [ENGINE, *options, "a.tex"],
        cwd=directory,
        capture_output=True,
        text=True,
        errors="replace",
        timeout=120,
        check=False,
    )
    assert run.returncode == 0, run.stdout[-2000:]
    assert (directory / "a.pdf").stat().st_size > 1000
    return (directory / "a.log").read_text(encoding="utf-8", errors="replace")


@needs_engine
def test_latex_compiles_with_nothing_wider_than_the_page(tmp_path):
    log = compiled(PLAIN, tmp_path)
    assert "Overfull" not in log
    assert "Missing character" not in log


@needs_engine
def test_latex_with_hostile_names_compiles(tmp_path):
    log = compiled(hostile_document(), tmp_path)
    assert "Missing character" not in log
    assert "undefined" not in log.lower()


@needs_engine
def test_latex_compiles_with_a_sample_of_all_characters(tmp_path):
    points = [
        *range(0x20, 0x600),
        *range(0x1E00, 0x1F00),
        *range(0x2000, 0x2C00),
        *range(0x3000, 0x30000, 331),
    ]
    words = [chr(point) for point in points if not 0xD800 <= point < 0xE000]
    lines = tuple(Paragraph(" ".join(words[at : at + 64])) for at in range(0, len(words), 64))
    marked = Paragraph(
        " ".join(f"{letter}{mark}" for letter in "aiβxq" for mark in map(chr, range(0x300, 0x340)))
    )
    log = compiled(Document("All", (*lines, marked)), tmp_path)
    assert "Missing character" not in log


# All three


def test_the_same_document_gives_the_same_text():
    for render in (markdown, latex, html):
        assert render(PLAIN) == render(PLAIN)
        assert render(PLAIN).endswith("\n")
        assert not render(PLAIN).endswith("\n\n")


def test_every_number_is_shown_with_the_digits_of_its_table():
    page, tex, text = html(PLAIN), latex(PLAIN), markdown(PLAIN)
    for row in (*LEDGER.rows, *SIZES.rows):
        for cell in row:
            if isinstance(cell, float):
                shown = number(cell)
                assert f">{shown}<" in page
                assert f" {shown} |" in text
                assert shown.replace("-", r"\ensuremath{-}", 1).replace("e\\ensuremath{-}", "e-") in tex


def test_hostile_names_render_in_all_formats():
    document = hostile_document()
    check_structure(latex(document))
    _, kinds = inline_texts(markdown(document))
    assert not FORBIDDEN & set(kinds)
    cells = {part["text"] for part in Reader(html(document)).all("td")}
    for name in HOSTILE:
        assert visible(name) in cells
