"""The page: one file, offline, every string escaped."""

from __future__ import annotations

import re
from html.parser import HTMLParser

import pytest

import flyoff
from tests.conftest import SMALL

NASTY = "<script>alert('x')</script> & \\\"quotes\\\""


class Reader(HTMLParser):
    VOID = frozenset({"meta", "img", "br", "hr", "link", "input"})

    def __init__(self):
        super().__init__()
        self.open, self.tags, self.text, self.links = [], [], [], []

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        self.links += [v for k, v in attrs if k in ("src", "href") and v]
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        self.text.append(data)


@pytest.fixture(scope="module")
def html(tmp_path_factory):
    top = tmp_path_factory.mktemp("page")
    text = SMALL.format(runs=8, particles=50).replace(
        "experiment: small", f'experiment: small\npurpose: "{NASTY}"'
    )
    (top / "x.yaml").write_text(text)
    study = flyoff.run(top / "x.yaml", out=top / "out", jobs=1)
    return (study.folder / "report.html").read_text(), study


def test_it_is_well_formed_and_offline(html):
    reader = Reader()
    reader.feed(html[0])
    assert reader.open == []
    assert all(link.startswith("data:image/png;base64,") for link in reader.links)
    assert reader.tags.count("img") == 6
    assert not re.search(r"https?://", html[0])
    assert "script" not in reader.tags


def test_strings_are_escaped(html):
    assert "<script>" not in html[0]
    assert "&lt;script&gt;alert(" in html[0]
    reader = Reader()
    reader.feed(html[0])
    assert any("<script>alert('x')</script> & \"quotes\"" in t for t in reader.text)


def test_it_says_what_a_reviewer_asks_first(html):
    text, study = html
    for words in (
        "not flight clearance", "DO-178C", "radar (coordinated-turn), lossy",
        "R. E. Kalman, J. Basic Eng. 82:35-45, 1960", "N. Gordon", "Arasaratnam",
        study.manifest["source"], "flyoff reproduce results/small",
    ):  # fmt: skip
        assert words in text, words
    assert "scaled unscented" not in text.lower(), "a method that was not used is cited"
    assert str(study.folder) not in text
