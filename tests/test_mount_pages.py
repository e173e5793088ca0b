"""The page of a search for mounts stands alone, says what was found, and keeps texts as texts."""

import re

import numpy as np
import pytest

from offbody import pages
from offbody.cases import read_case
from offbody.mount_pages import _ring, mounts_page
from test_pages import Document

CASE = """\
title = "Quillane <script>alert(1)</script> & mast"
length_unit = "m"
stream = { bearings = 15 }

[[body]]
name = "mast <b>"
shape = "circle"
diameter = 0.3

[[sensor]]
name = "cup </td>"
kind = "disc"
reads = "speed"
radius = 0.09
x = -1.0
y = 2.0

[mounts]
"""
SEARCHES = {
    "booms": 'reach = { greatest = 3.0 }\ncarries = ["cup </td>"]\ncount = 2\n'
             "keep_out = [[[0.5, 0.5], [1.5, 0.5], [1.5, 1.5], [0.5, 1.5]]]\n",
    "one boom": "reach = { greatest = 3.0 }\n",
    "area": "area = { points = [[-3, -1], [-1, -1], [-1, 1], [-3, 1]] }\n"
            "bearings = { from = 225, to = 315, step = 15 }\n",
    "port": "stretch = { }\nbearings = [270]\n",
    "pair": "stretch = { first = 0.25, last = 0.75 }\nbearings = [270]\ncount = 2\n",
}


@pytest.fixture(scope="module", params=SEARCHES)
def searched(request, tmp_path_factory):
    path = tmp_path_factory.mktemp("case") / "quillane.toml"
    path.write_text(CASE + SEARCHES[request.param], encoding="utf-8")
    case = read_case(path)
    found = case.best_mounts(case.solve())
    table = found.survey()
    return case, found, table, mounts_page(case, found, table, ["The gap <is> narrow."])


def test_the_page_is_whole_and_asks_for_nothing_from_outside(searched):
    text = searched[-1]
    document = Document(text)
    assert document.complaints == [] and document.open == []
    assert not {"script", "link", "iframe", "img"} & {tag for tag, _ in document.elements}
    assert "http" not in text and "@import" not in text
    assert {found[:1] for found in re.findall(r"url\(\s*(.)", text)} == {"#"}
    drawn = " ".join(
        value for _, attributes in document.elements
        for name, value in attributes.items() if name in ("d", "x", "y", "cx", "cy", "height")
    )
    assert "nan" not in drawn and "inf" not in drawn


def test_whatever_stands_in_a_case_of_mounts_stays_text(searched):
    case, _, _, text = searched
    document = Document(text)
    assert document.text_of("h1") == case.title
    assert not {"b", "is"} & {tag for tag, _ in document.elements}
    assert "The gap <is> narrow." in document.text_of("li")
    assert case.text.strip() in document.text_of("pre")


def test_the_answer_comes_first_and_is_that_of_the_search(searched):
    _, found, _, text = searched
    document = Document(text)
    headings = [text for tag, text in document.texts if tag == "h2"]
    assert headings[0] == "Answer" and ("Trade-off" in headings) == (found.curve is not None)
    lead = next(text for tag, text in document.texts if tag == "p" and "wind bearings" not in text
                and "lengths in" not in text and "offbody" not in text)
    for x, y in found.best.places:
        assert f"({x:.4g}, {y:.4g}) m" in document.text_of("li") + lead, lead
    if getattr(found.best, "length", None) is not None:
        assert f"{found.best.length:.4g} m" in lead, lead
    bound = 100 * found.search.bound if "error" in found.search.quantity else found.search.bound
    if found.search.quantity in ("length", "worst error"):
        assert f"nothing beyond {bound:.4g}" in document.text_of("p")


def test_the_ring_of_a_mount_leaves_out_where_it_is_not_trusted(searched):
    case, found, table, _ = searched
    for place in range(len(table.sensors)):
        sectors = list(_ring(case, found, table, place))
        for angle, trusted in zip(table.angles, table.trust[:, place], strict=True):
            here = 90.0 - angle  # where the wind of a bearing comes from
            fills = {fill for start, stop, fill in sectors
                     if np.any([start <= here + turn <= stop for turn in (-360, 0, 360)])}
            assert ("excluded" in fills) == (not trusted), (angle, fills)
    assert {fill for *_, fill in sectors} <= set(pages.FILLS)
