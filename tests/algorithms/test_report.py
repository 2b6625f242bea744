"""What the report pages promise: safe text, plots of whatever names, and pages without plots."""

import sys
from html.parser import HTMLParser

import pytest

HOSTILE = "<script>alert('x')</script>\"' onload=\"&amp; {braces} {0}"
# an odd dollar, a pair around plain words, and a pair around a formula that does not parse
DOLLARS = ("$5", "$5 to $10", r"$\frac$", "_under^{score", "per cent % and \\ stroke")


class Reader(HTMLParser):
    """The elements and the text of a page."""

    def __init__(self, page):
        super().__init__()
        self.elements, self.pieces, self.attributes = set(), [], set()
        self.feed(page)

    def handle_starttag(self, tag, attributes):
        self.elements.add(tag)
        self.attributes.update(name for name, _ in attributes)

    def handle_data(self, data):
        self.pieces.append(data)


@pytest.fixture
def report(provider):
    from steadfield.plugin.report import Report

    return Report


def test_a_page_shows_hostile_words_as_text_wherever_they_stand(report):
    page = report(HOSTILE, HOSTILE, HOSTILE, confidential=True)
    page.text(HOSTILE, HOSTILE, kind="caution")
    page.table(HOSTILE, [HOSTILE, HOSTILE], [(HOSTILE, "1")], note=HOSTILE)
    page.picture(HOSTILE, b"no picture", HOSTILE)
    page.plot(HOSTILE, lambda figure: None, HOSTILE)
    page.links(HOSTILE, [(HOSTILE, HOSTILE)])
    read = Reader(page.html())
    assert "script" not in read.elements
    assert "onload" not in read.attributes
    # title, heading, question, answer; heading and text; heading, two heads, a cell and a note;
    # twice heading and caption; heading and link
    assert "".join(read.pieces).count(HOSTILE) == 4 + 2 + 5 + 4 + 2


@pytest.mark.parametrize("name", DOLLARS)
def test_a_plot_writes_names_with_dollar_signs_as_they_are(report, name):
    text = pytest.importorskip("matplotlib.text")
    drawn = []

    def draw(figure):
        axes = figure.add_subplot()
        axes.annotate(name, (0.5, 0.5))
        axes.set_xlabel(name)
        axes.plot([0, 1], label=name)
        axes.legend()
        drawn.extend(figure.findobj(lambda one: isinstance(one, text.Text)))

    page = report("title", "question", "answer")
    page.plot("plot", draw, "caption")
    assert "img" in Reader(page.html()).elements
    assert not any(one.get_parse_math() for one in drawn if one.get_text() == name)


def test_a_page_comes_out_without_plots_where_their_package_is_missing_or_old(report, monkeypatch):
    matplotlib = pytest.importorskip("matplotlib")

    def shown():
        page = report("title", "question", "answer")
        page.plot("plot", lambda figure: figure.add_subplot(), "the caption")
        read = Reader(page.html())
        return "img" in read.elements, "".join(read.pieces)

    assert shown()[0]
    with monkeypatch.context() as patch:
        # the version as numbers is either an attribute or looked up by the module's own function
        patch.delattr(matplotlib, "__getattr__", raising=False)
        patch.delattr(matplotlib, "__version_info__", raising=False)
        old = shown()
    monkeypatch.setitem(sys.modules, "matplotlib", None)
    missing = shown()
    for pictured, words in (old, missing):
        assert not pictured
        assert "the caption" in words
        assert "matplotlib, 3.5 or newer" in words
