"""What the tests of pages share: a strict reading of HTML and SVG, and small ensembles."""

from __future__ import annotations

import re
from html.parser import HTMLParser
from xml.etree import ElementTree

import numpy as np

import procgen as pg

SVG = "{http://www.w3.org/2000/svg}"
TIME = {"start": "2027-01-04T00:00", "every": "1h", "steps": 60, "zone": "Europe/Berlin"}


class Page(HTMLParser):
    """A page read strictly: tags are closed in order, ids are there once; what could load or run is collected."""

    VOID = frozenset({"meta", "wbr"})

    def __init__(self, text: str):
        super().__init__(convert_charrefs=True)
        self.open: list[str] = []
        self.seen: list[str] = []
        self.ids: list[str] = []
        self.named: list[str] = []
        self.links: list[str] = []
        self.handlers: list[str] = []
        self.text: list[str] = []
        self.feed(text)
        self.close()
        assert self.open == []
        assert len(self.ids) == len(set(self.ids))
        assert set(self.named) <= set(self.ids)

    def handle_starttag(self, tag, attrs):
        self.seen.append(tag)
        for name, value in attrs:
            if name == "id":
                self.ids.append(value)
            elif name == "aria-labelledby":
                self.named += value.split()
            elif name in ("src", "href", "xlink:href", "action", "data", "srcset"):
                self.links.append(value)
            elif name.startswith("on"):
                self.handlers.append(name)
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.handle_starttag(tag, attrs)
        self.open.pop()

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        if self.open and self.open[-1] != "style":
            self.text.append(data)


def self_contained(text: str) -> Page:
    """The page, after looking that it loads nothing and runs nothing."""
    page = Page(text)
    assert all(link.startswith("#") for link in page.links)
    assert {link[1:] for link in page.links} <= set(page.ids)
    assert page.handlers == []
    assert not {"script", "iframe", "object", "embed", "link", "img", "form", "base"} & set(page.seen)
    assert not re.search(r"url\((?!#)|@import|https?://(?!www\.w3\.org/2000/svg)|javascript:", text)
    assert not re.search(r"[\"M ,]-?(nan|inf)\b", text)
    return page


def drawing(svg: str) -> ElementTree.Element:
    """A figure or a poster as a tree."""
    if "xmlns=" not in svg:
        svg = svg.replace("<svg", '<svg xmlns="http://www.w3.org/2000/svg"', 1)
    return ElementTree.fromstring(svg)


def of_class(tree: ElementTree.Element, *names: str) -> list[ElementTree.Element]:
    """Elements that have all these classes."""
    return [e for e in tree.iter() if set(names) <= set(e.get("class", "").split())]


def points(d: str) -> np.ndarray:
    """The corners of a polyline path as we write them: M x y l dx dy dx dy …"""
    found = []
    for start, steps in re.findall(r"M(-?\d+ -?\d+)(?:l([-\d ]+)|h0)", d):
        moves = np.array(re.findall(r"-?\d+", steps), int).reshape(-1, 2)
        first = np.array(start.split(), int)
        found.append(np.vstack([first, first + np.cumsum(moves, axis=0)]))
    return np.concatenate(found)


def scale(tree: ElementTree.Element, chart, left=620, right=4700):
    """From places in the picture to data: two functions, read off the clip rectangle and the chart's axes."""
    frame = next(e for e in tree.iter() if e.tag == f"{SVG}rect" and e.get("x") == str(left))
    top, height = int(frame.get("y")), int(frame.get("height"))

    def x(places):
        return chart.x.low + (np.asarray(places) - left) / (right - left) * (chart.x.high - chart.x.low)

    def y(places):
        return chart.y.high - (np.asarray(places) - top) / height * (chart.y.high - chart.y.low)

    return x, y


def ensemble(series, paths=60, steps=60, time=None, reveal=None, **more):
    """A small ensemble in memory."""
    raw = {"procgen": 1, "seed": 11, "paths": paths, "time": time or {**TIME, "steps": steps}, "series": series}
    return pg.render({**raw, **more}, reveal=reveal)
