import json
import re
from html.parser import HTMLParser

import pytest

from roa.report.html import report_html, write_report
from roa.sweep.run_folder import RunFolder

SVG = b'<svg xmlns="http://www.w3.org/2000/svg"></svg>'
FIGURES = {"overlay": SVG, "share_by_level": SVG}
VOID = {"meta", "img", "br"}


class Reader(HTMLParser):
    """Collects what the tests ask for, and that every element is closed."""

    def __init__(self, text):
        super().__init__()
        self.sources, self.ids, self.links, self.alternatives, self.open, self.text = [], [], [], [], [], []
        self.feed(text)
        assert self.open == []

    def handle_starttag(self, tag, attributes):
        attributes = dict(attributes)
        self.sources += [value for key, value in attributes.items() if key in ("src", "href", "data", "action")]
        self.ids += [attributes["id"]] if "id" in attributes else []
        self.links += [attributes["href"]] if tag == "a" else []
        self.alternatives += [attributes["alt"]] if tag == "img" else []
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        self.text.append(data)


@pytest.fixture
def html(claimed, configuration):
    return report_html(claimed(), configuration, FIGURES)


def test_stands_alone(html):
    reader = Reader(html)
    assert reader.sources
    for source in reader.sources:
        assert source.startswith(("data:", "#")), source
    assert "script" not in re.findall(r"<(\w+)", html)
    assert not re.search(r"(https?:)?//\w", re.sub(r"data:[^\"]*", "", html))
    assert not re.search(r"@import|url\(", html)


def test_text_from_the_configuration_is_escaped(html):
    assert "<script>" not in html
    assert "&lt;script&gt;alert(&#39;inside&#39;)&lt;/script&gt; title is no code &amp; stays text" in html
    assert "<b>" not in html
    assert "# a comment with &lt;b&gt;markup&lt;/b&gt;" in html
    assert "a &lt;b&gt; folder" in html


def test_opens_with_the_answer_and_the_overlay(html):
    order = [html.index(mark) for mark in ("Refuted: the start", 'href="#bounds"', "<img", 'id="claim"', 'id="bounds"')]
    assert order == sorted(order)


def test_contents_lead_to_sections_that_exist(html):
    reader = Reader(html)
    assert len(reader.links) == 10
    assert {link.removeprefix("#") for link in reader.links} == set(reader.ids)


def test_pictures_have_alternative_texts(html):
    alternatives = Reader(html).alternatives
    assert len(alternatives) == 2
    for text in alternatives:
        assert "norm bound (proved) at level 0.041199" in text
        assert "41.9 % of the domain (simulated)" in text


def test_holds_everything_that_was_concluded(html, claimed, configuration):
    text = re.sub(r"\s+", " ", " ".join(Reader(html).text))
    for piece in (
        "its connected part about the equilibrium",
        "roa replay disc.toml --from x=0.9,y=0.6",
        "0.041199 proved",
        "3.0 to 3.2 %",
        "109,794",
        "Student's t between 16 independent replicates",
        "-1 + 1i, -1 − 1i 1/s",
        "rtol 1e-06, atol 1e-09",
        "V <= 0.0412, a level set in which V decreases by proof",
        "what limits the norm bound.",
        "versions numpy",
        "0123456789abcdef",
        *claimed()["cautions"],
    ):
        assert piece in text, piece
    assert configuration.text in "".join(Reader(html).text)


def test_without_claim_and_without_sweep_the_sections_go(verdict, configuration):
    verdict |= {"basin": None, "levels": [], "target": None}
    for bound in verdict["bounds"]:
        bound |= {key: None for key in bound if "ratio" in key}
    reader = Reader(report_html(verdict, configuration, {}))
    assert "claim" not in reader.ids
    assert "outcomes" not in reader.ids
    assert "bounds" in reader.ids
    assert {link.removeprefix("#") for link in reader.links} == set(reader.ids)


def test_a_formula_stands_in_place_of_P(verdict, configuration):
    for bound in verdict["bounds"]:
        del bound["P"]
        bound["V"] = "x**2 + x*y + y**2"
    assert "<pre>x**2 + x*y + y**2</pre>" in report_html(verdict, configuration, FIGURES)


def test_prints_to_a4_and_narrows(html):
    assert "size: A4" in html
    assert "max-width: 36rem" in html
    assert 'name="viewport"' in html


def test_is_written_from_the_folder_alone(tmp_path, claimed, configuration):
    folder = RunFolder(tmp_path)
    folder.config.write_text(configuration.text)
    folder.verdict.write_text(json.dumps(claimed()))
    folder.figures.mkdir()
    (folder.figures / "overlay.svg").write_bytes(SVG)
    write_report(folder)
    first = folder.report.read_bytes()
    assert b"data:image/svg+xml;base64," in first
    write_report(folder)
    assert folder.report.read_bytes() == first
