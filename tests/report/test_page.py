import itertools
import re
from html.parser import HTMLParser

import pytest

from withstand.report.html import draw_all, fragment, page
from withstand.report.inline import inline_svg
from withstand.report.tables import verdict_table, worry_table
from withstand.report.view import View

VOID = {"meta", "link", "br", "img", "hr", "input", "path", "use", "rect"}


class Reader(HTMLParser):
    """Collects what the tests ask about, and checks that elements are closed in order."""

    def __init__(self):
        super().__init__(convert_charrefs=True)
        self.open, self.tags, self.ids, self.links, self.tables, self.text = [], [], [], [], [], []

    def handle_starttag(self, tag, attrs):
        attrs = dict(attrs)
        self.tags.append((tag, attrs))
        self.ids += [attrs["id"]] if "id" in attrs else []
        self.links += [attrs[name] for name in ("href", "xlink:href", "src") if name in attrs]
        if tag not in VOID:
            self.open.append(tag)
        if tag == "table":
            self.tables.append({"caption": "", "rows": []})
        if tag == "tr":
            self.tables[-1]["rows"].append([])
        if tag in ("td", "th"):
            self.tables[-1]["rows"][-1].append("")
            assert tag == "td" or attrs.get("scope") in ("col", "row")

    def handle_startendtag(self, tag, attrs):
        self.handle_starttag(tag, attrs)
        if tag not in VOID:
            self.open.pop()

    def handle_endtag(self, tag):
        if tag not in VOID:
            assert self.open.pop() == tag

    def handle_data(self, data):
        self.text.append(data)
        if "caption" in self.open:
            self.tables[-1]["caption"] += data
        elif {"td", "th"} & set(self.open):
            self.tables[-1]["rows"][-1][-1] += data


def read(html):
    reader = Reader()
    reader.feed(html)
    reader.close()
    assert reader.open == []
    return reader


@pytest.fixture(scope="module")
def pictures(rich):
    return draw_all(rich)


@pytest.fixture(scope="module")
def html(rich, pictures):
    return page(rich, pictures)


def test_the_same_bytes_twice(bare):
    assert page(bare) == page(bare)


def test_landmarks_headings_and_descriptions(html):
    reader = read(html)
    names = [tag for tag, _ in reader.tags]
    assert [names.count(tag) for tag in ("header", "nav", "main", "footer", "h1", "script")] == [1, 1, 1, 1, 1, 0]
    assert next(attrs for tag, attrs in reader.tags if tag == "html")["lang"] == "en"
    levels = [int(tag[1]) for tag in names if re.fullmatch(r"h[1-6]", tag)]
    assert all(after - before <= 1 for before, after in itertools.pairwise(levels))
    for tag, attrs in reader.tags:
        if tag == "section":
            assert attrs["aria-labelledby"] in reader.ids
        if tag == "svg":
            assert attrs["role"] == "img"
            assert len(attrs["aria-label"]) > 60
    assert len(reader.ids) == len(set(reader.ids))
    assert all(table["caption"] for table in reader.tables)


def test_it_needs_no_network(html):
    links = read(html).links
    assert links
    assert all(link.startswith("#") for link in links)
    assert set(re.findall(r"url\((.)", html)) == {"#"}
    assert "@import" not in html


def test_links_within_the_page_arrive(html):
    reader = read(html)
    assert {link[1:] for link in reader.links} <= set(reader.ids)
    assert set(re.findall(r"url\(#([^)]*)\)", html)) <= set(reader.ids)


def test_tables_of_the_page_are_the_tables(rich, html):
    view = View(rich)
    found = {table["caption"]: table["rows"] for table in read(html).tables}
    for focus in view.foci:
        for table in (verdict_table(view, focus), worry_table(view, "ols", focus)):
            wanted = [list(table.columns), *([f"{cell.said}{cell.text}" for cell in row] for row in table.rows)]
            got = [[cell.strip() for cell in row] for row in found[table.caption]]
            assert got == wanted


def test_everything_a_reader_needs_is_there(rich, html):
    text = " ".join(" ".join(read(html).text).split())
    for sentence in (*rich.headline, *rich.notices, *rich.provenance["targets"]):
        assert sentence in text
    for wanted in ("Caution", "codes and standards", "licensed or qualified", "What it cannot tell you", "How to read it"):
        assert wanted in text
    for wanted in (
        "9f2c" * 16,
        "17ab" * 16,
        "prais-winsten",
        "run_no has ties",
        "37 of 10,000",
        "2031-05-04",
        "0.44",
        "not known",
    ):
        assert wanted in text


def test_hostile_names_are_text(hostile):
    html = page(hostile)
    reader = read(html)
    assert "script" not in [tag for tag, _ in reader.tags]
    assert "<script" not in html
    assert hostile.title in "".join(reader.text)
    assert all("onload" not in attrs for _, attrs in reader.tags)


def test_a_plan_has_a_page_without_empty_facts(planned, bare):
    for outcome in (planned, bare):
        text = " ".join(read(page(outcome, {})).text)
        assert "36 rows, planned or as given" in text
        assert "None" not in text
        assert not re.search(r"\bnan\b", text)


def test_ids_of_a_figure_get_a_prefix_and_its_style_stays_inside():
    svg = b'<svg width="1"><style type="text/css">*{a: b}</style><g id="x"/><use href="#x" clip-path="url(#x)"/></svg>'
    told = str(inline_svg(svg, "f1", 'a "b" <c>'))
    assert 'id="f1-x"' in told
    assert 'href="#f1-x" clip-path="url(#f1-x)"' in told
    assert "<style" not in told
    assert "a &#34;b&#34; &lt;c&gt;" in told


def test_a_notebook_shows_the_answer(rich, hostile):
    told = fragment(rich)
    assert rich.headline[0] in told
    assert "gives from icc 0.05" in told
    assert "<script" not in fragment(hostile)
