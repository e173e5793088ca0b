"""The page of a survey stands alone, says what the table says, draws to scale and can be rerun."""

import base64
import re
from html.parser import HTMLParser

import numpy as np
import pytest

import offbody as ob
from offbody import charts, pages, reports, survey_pages
from offbody.cases import read_case
from offbody.separations import (
    DOUBTFUL,
    DOUBTFUL_HALF_ANGLE,
    DOUBTFUL_START,
    IN_WAKE,
    WAKE_HALF_ANGLE,
    wake_codes,
)

CASE = """\
title = "Vessel \\"Mirren\\" <script>alert(1)</script> & mast"
length_unit = "m"
stream = { bearings = 15, speed = 10.0, speed_unit = "m/s", prevailing_bearing = 240 }

[[body]]
name = "mast <b>"
shape = "circle"
diameter = 0.4
drag_coefficient = 1.2

[[sensor]]
name = "cup </td>"
kind = "point"
reads = "speed"
boom = { bearing = 240, length = 1.9, from = "axis" }

[[sensor]]
name = "vane & \\"co\\""
kind = "point"
reads = "both"
boom = { bearing = 90, length = 2.0, from = "axis" }

[[sensor]]
name = "tap"
kind = "wall_port"
arc_fraction = 0.0

[uncertainty]
boom_length = { within = 0.03 }
alignment = { within_degrees = 1.5 }
speed_calibration = { standard_percent = 0.5 }
"""

VOID = {"meta", "img", "br", "hr", "input", "link"}


class Document(HTMLParser):
    """The elements of a page, in order, and a complaint for each that is closed wrongly."""

    def __init__(self, text):
        super().__init__()
        self.elements, self.texts, self.open, self.complaints = [], [], [], []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attributes):
        self.elements.append((tag, dict(attributes)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attributes):
        self.elements.append((tag, dict(attributes)))

    def handle_endtag(self, tag):
        if not self.open or self.open.pop() != tag:
            self.complaints.append(f"</{tag}> at {self.getpos()}")

    def handle_data(self, data):
        if self.open:
            self.texts.append((self.open[-1], data))

    def all(self, tag):
        return [attributes for name, attributes in self.elements if name == tag]

    def text_of(self, tag):
        return "".join(data for name, data in self.texts if name == tag)


@pytest.fixture(scope="module")
def surveyed(tmp_path_factory):
    path = tmp_path_factory.mktemp("case") / "mirren.toml"
    path.write_text(CASE, encoding="utf-8")
    case = read_case(path)
    table = case.survey(case.solve())
    return case, table, case.uncertainty(table)


@pytest.fixture(scope="module")
def text(surveyed):
    pictures, cautions = [(240.0, b"\x89PNG picture")], ["The gap <is> narrow."]
    return survey_pages.survey_page(*surveyed, pictures, "", cautions)


@pytest.fixture(scope="module")
def document(text):
    return Document(text)


# --- alone, whole and readable --------------------------------------------------------------------


def test_the_page_asks_for_nothing_from_outside_and_runs_no_script(text, document):
    tags = {tag for tag, _ in document.elements}
    assert not tags & {"script", "link", "iframe", "object", "embed", "base", "form"}
    for tag, attributes in document.elements:
        for name, value in attributes.items():
            assert not name.startswith("on"), (tag, name)
            if name in ("src", "href", "srcset", "data", "xlink:href"):
                assert value.startswith("data:"), (tag, name, value)
    assert "http" not in text and "@import" not in text
    assert {found[:1] for found in re.findall(r"url\(\s*(.)", text)} == {"#"}


def test_every_element_is_closed_and_every_fill_is_defined_once(text, document):
    assert document.complaints == [] and document.open == []
    names = [attributes["id"] for _, attributes in document.elements if "id" in attributes]
    assert len(names) == len(set(names))
    assert set(re.findall(r"url\(#([\w-]+)\)", text)) <= set(names)


def test_the_page_says_its_language_and_what_its_figures_and_tables_are(document):
    assert document.all("html")[0]["lang"] == "en"
    assert len(document.all("h1")) == 1
    nested = [svg for svg in document.all("svg") if "x" in svg]  # parts of another drawing
    for svg in document.all("svg"):
        assert svg.get("aria-label") or svg.get("aria-hidden") or svg in nested, svg
    assert all(picture["alt"] for picture in document.all("img"))
    assert len(document.all("caption")) == len(document.all("table")) > 0
    assert all(head.get("scope") in ("col", "row") for head in document.all("th"))


def test_whatever_stands_in_a_case_stays_text(surveyed, document):
    case, table, _ = surveyed
    assert document.text_of("h1") == case.title
    heads = document.text_of("th")
    assert all(name in heads for name in table.names)
    assert not {"b", "is"} & {tag for tag, _ in document.elements}
    assert "The gap <is> narrow." in document.text_of("li")


def test_a_picture_is_in_the_page_byte_for_byte(document):
    (picture,) = document.all("img")
    kind, _, code = picture["src"].partition(",")
    assert kind == "data:image/png;base64"
    assert base64.b64decode(code) == b"\x89PNG picture"


def test_without_pictures_the_page_says_why(surveyed):
    assert "<p>no pictures: none &lt;here&gt;</p>" in survey_pages.survey_page(
        *surveyed, no_pictures="no pictures: none <here>"
    )


def test_the_case_in_the_page_makes_the_same_page_again(surveyed, text, tmp_path):
    kept = Document(text).text_of("pre").removeprefix("\n")
    (tmp_path / "mirren.toml").write_text(kept, encoding="utf-8")
    case = read_case(tmp_path / "mirren.toml")
    table = case.survey(case.solve())
    again = survey_pages.survey_page(
        case, table, case.uncertainty(table), [(240.0, b"\x89PNG picture")], "",
        ["The gap <is> narrow."],
    )
    assert again == text
    assert ob.__version__ in text


# --- what it says ---------------------------------------------------------------------------------


def test_the_page_names_its_limits(document):
    said = document.text_of("li")
    for words in ("two-dimensional", "steady", "low speed", "without turbulence", "not predicted",
                  "Work at height", "local codes", "licensed practice"):
        assert words in said, words


def test_the_answer_comes_first_and_is_that_of_the_table(surveyed, document):
    case, table, _ = surveyed
    headings = [data for tag, data in document.texts if tag == "h2"]
    assert headings[0] == "Answer"
    good = np.any(table.trust[:, :2] & (np.abs(table.speed_ratio[:, :2] - 1) <= 0.01), axis=1)
    (lead,) = (data for tag, data in document.texts if tag == "p" and "one or more" in data)
    assert f"At {good.sum()} of 24 bearings" in lead
    cells = document.text_of("td")
    for place in (0, 1):
        angle, ratio = table.worst()[place]
        error = f"{100 * (ratio - 1):+.2f} percent ({10 * (ratio - 1):+.2f} m/s)"
        assert f"{error} at bearing {angle:g}" in cells
    # The boom at 240 stands in the lee of a wind from 60, and of its neighbours.
    assert "45 to 75: in the lee of mast <b>" in cells


@pytest.mark.parametrize("diameters, beyond", [(5.001, 0), (4.999, 3)])
def test_a_tube_without_its_wake_is_within_1_percent_from_five_diameters(
    tmp_path, diameters, beyond
):
    # 1 - (a/r)^2 ahead, 1 + (a/r)^2 abeam, so that just inside five diameters the winds from
    # ahead and from both sides are beyond the limit: Milne-Thomson, Theoretical Hydrodynamics. A
    # thousandth of a diameter to spare is far more than the default panels' error.
    path = tmp_path / "tube.toml"
    path.write_text(CASE[: CASE.index("drag_coefficient")] + f"""
        [[sensor]]
        kind = "point"
        reads = "speed"
        boom = {{ bearing = 0, length = {0.4 * diameters}, from = "axis" }}
    """, encoding="utf-8")
    case = read_case(path)
    table = case.survey(case.solve())
    page = Document(survey_pages.survey_page(case, table, None))
    (lead,) = (data for tag, data in page.texts if tag == "p" and "the sensor reads" in data)
    # The lee, which the law does not know, is left out besides.
    assert f"At {table.trust.sum() - beyond} of 24 bearings" in lead


def test_tolerances_of_a_case_are_those_of_the_library_in_its_units(surveyed):
    case, table, found = surveyed
    booms = ("cup </td>", 'vane & "co"')
    expected = ob.uncertainty(
        table, boom_foot=(0.0, 0.0), boom_length=dict.fromkeys(booms, ob.Rectangular(0.03)),
        alignment=ob.Rectangular(1.5), speed_calibration=ob.Normal(0.005),
    )
    np.testing.assert_array_equal(found.speed, expected.speed)
    np.testing.assert_array_equal(found.direction, expected.direction)
    assert np.isfinite(found.speed).any()


def test_the_part_of_the_boom_is_held_against_half_a_percent(tmp_path):
    # A tube across the stream, its wake left out, 6 diameters below the instrument: the circle
    # theorem's 1 + (a/r)^2 = 1 + 1/144 at most (Milne-Thomson, Theoretical Hydrodynamics).
    path = tmp_path / "boom.toml"
    path.write_text(CASE[: CASE.index("[uncertainty]")].replace(
        'length = 1.9, from = "axis"', 'length = 1.9, from = "axis", diameter = 0.05, height = 0.3'
    ), encoding="utf-8")
    case = read_case(path)
    table = case.survey(case.solve())
    errors = {each.name: each for each in reports.readings(case, table, 0)}["by boom"].errors
    assert errors[table.trust[:, 0]].max() == pytest.approx(100 / 144, abs=0.05)
    lines = reports.summary(case, table).splitlines()
    (line,) = (line for line in lines if line.startswith("    by boom within 0.5 percent "))
    assert not line.endswith(("everywhere", "nowhere"))


def test_what_the_case_does_not_state_is_said_not_to_count(document):
    (line,) = (data for tag, data in document.texts if tag == "p" and "Not stated" in data)
    assert "boom angle" in line and "model speed" in line
    assert "boom length" not in line and "speed calibration" not in line


@pytest.mark.parametrize("entry, complaint", [
    ("alignment = 1.5", r"uncertainty\.alignment: expected a table, got 1\.5"),
    ("alignment = { within = 1 }", "alignment.within_degrees or standard_degrees: missing"),
    ("alignment = { within_degrees = 1, k = 2 }", "alignment.k: unknown key"),
    ("position = { within = 1, standard = 1 }", "position.standard: given beside 'within'"),
    ("position = { within = -1 }", "position.within must be"),
    ("allignment = { within_degrees = 1 }", "allignment: unknown key; did you mean 'alignment'"),
])
def test_a_tolerance_that_cannot_be_used_is_refused_by_name(tmp_path, entry, complaint):
    path = tmp_path / "case.toml"
    path.write_text(CASE[: CASE.index("boom_length = ")] + entry, encoding="utf-8")
    with pytest.raises(ob.InputError, match=complaint):
        read_case(path)


def test_a_boom_tolerance_without_a_boom_is_refused(tmp_path):
    path = tmp_path / "case.toml"
    without = re.sub(r"boom = \{ bearing = \d+.*\}", "x = 3\ny = 3", CASE)
    path.write_text(without, encoding="utf-8")
    with pytest.raises(ob.InputError, match="boom_length: no sensor has a boom; say 'position'"):
        read_case(path)


def test_the_shares_of_a_printed_budget_add_up(surveyed):
    case, table, budget = surveyed
    reading = next(iter(reports.readings(case, table, 0)))
    printed = Document(survey_pages._budget(
        case, table, budget, 0, reading, survey_pages._expanded(budget, 0, reading)
    ))
    cells = [data for tag, data in printed.texts if tag == "td"]
    shares = [float(cell) for cell in cells[3::4]]
    contributions = [float(cell) for cell in cells[2::4]]
    assert "bearing 240" in printed.text_of("caption")
    assert shares == sorted(shares, reverse=True)
    # Each line is rounded to a twentieth, and lines below a tenth are left out.
    assert sum(shares) == pytest.approx(100, abs=0.1 * (len(shares) + 4))
    (row,) = np.flatnonzero(table.angles == 240)
    # Rounded to a half of the last printed digit, and the rest below a thousandth of it.
    np.testing.assert_allclose(
        np.hypot.reduce(contributions), 100 * budget.speed[row, 0], rtol=2e-3, atol=1e-3
    )


# --- drawings -------------------------------------------------------------------------------------


def numbers(path):
    return np.array(re.findall(r"-?\d+\.?\d*", path), float)


def paths(svg, **wanted):
    return [
        element["d"] for element in Document(svg).all("path")
        if all(element.get(name.replace("_", "-")) == value for name, value in wanted.items())
    ]


def a_plan(**changes):
    square = np.array([[-1.0, -1.0], [1.0, -1.0], [1.0, 1.0], [-1.0, 1.0]])
    settings = {
        "bodies": [square], "booms": [np.array([[0.0, 0.0], [0.0, 8.0]])],
        "markers": [pages.Marker(np.array([0.0, 8.0]), "1")], "length_unit": "m",
    }
    return pages.plan(pages.Plan(**(settings | changes)), "a plan")


@pytest.mark.parametrize("changes", [
    {}, {"walls": (-5.0,)}, {"walls": (-5.0, 20.0)},
    {"rings": [pages.Ring("1", ((0.0, 90.0, "within"),))]},
])
def test_a_plan_is_to_scale(changes):
    svg = a_plan(**changes)
    length = float(re.search(r">([\d.]+) m</text>", svg)[1])
    (bar,) = (d for d in paths(svg, stroke_width="1.5") if "v5h" in d)
    scale = numbers(bar)[3] / length
    x0, y0, x1, y1 = numbers(paths(svg, stroke_width="2", stroke=pages.INK)[-1])
    # The drawing rounds to a tenth of a pixel.
    np.testing.assert_allclose([x1 - x0, y0 - y1], [0.0, 8.0 * scale], atol=0.1 * (1 + 8 / length))
    corners = numbers(paths(svg, fill="#444")[0]).reshape(-1, 2)
    np.testing.assert_allclose(np.ptp(corners, axis=0), 2.0 * scale, atol=0.1 * (1 + 2 / length))


def test_everything_on_a_plan_lies_inside_its_ring():
    svg = a_plan(rings=[pages.Ring("1", ((0.0, 360.0, "within"),))])
    _, _, wide, high = numbers(Document(svg).all("svg")[0]["viewbox"])
    inner = pages.PLAN_RADIUS - pages.RING_BREADTH - pages.RING_GAP
    centre = np.array([pages.WIDTH / 2, pages.PLAN_RADIUS + 30.0])
    corners = numbers(paths(svg, fill="#444")[0]).reshape(-1, 2)
    assert np.hypot(*(corners - centre).T).max() < inner
    assert centre[1] + pages.PLAN_RADIUS < high and centre[0] + pages.PLAN_RADIUS < wide


@pytest.mark.parametrize("by_bearing, angle, side", [
    (True, 90.0, (1, 0)),    # a wind from the east stands on the right
    (True, 0.0, (0, -1)),    # from the north, on top: y runs down in a drawing
    (False, 0.0, (-1, 0)),   # a stream toward +x comes from the left
    (False, 90.0, (0, 1)),
])
def test_a_ring_shows_a_sector_where_the_stream_comes_from(by_bearing, angle, side):
    # A sensor three diameters behind a tube in this stream, and ahead of it in the opposite one.
    direction = float(ob.from_bearing(angle)) if by_bearing else angle
    place = 3 * np.array([np.cos(np.radians(direction)), np.sin(np.radians(direction))])
    table = ob.survey(
        ob.solve(ob.circle(1.0)), ob.PointSensor(*place),
        **{"bearings" if by_bearing else "directions": np.arange(0, 360, 10)},
    )

    class Case:
        speed = None

    Case.by_bearing = by_bearing
    svg = a_plan(rings=[pages.Ring("1", tuple(survey_pages._ring(Case, table, 0)))])
    (excluded,) = paths(svg, fill="url(#hatch)")
    # The first of two arcs ends in the middle of the sector.
    middle = numbers(re.findall(r"A[\d. ]+", excluded)[0])[-2:] - (
        pages.WIDTH / 2, pages.PLAN_RADIUS + 30.0
    )
    # Printed to a hundredth of a pixel.
    np.testing.assert_allclose(
        middle, (pages.PLAN_RADIUS - pages.RING_GAP) * np.array(side), atol=0.011
    )


def test_a_curve_breaks_off_where_there_is_no_value_and_its_band_with_it():
    x = np.arange(5.0)
    y = np.array([0.0, 1.0, np.nan, 1.0, 0.0])
    chart = pages.Chart("x (1)", "y (1)", (pages.Line(x, y, low=y - 0.5, high=y + 0.5),),
                        (0.0, 4.0), (-1.0, 2.0))
    svg = pages.chart(chart, "two pieces")
    assert len(paths(svg, stroke=pages.BLUE)) == 2
    assert len(paths(svg, fill=pages.FILLS["band"])) == 2
    assert "nan" not in svg


def test_a_point_of_a_curve_is_drawn_at_its_value():
    line = pages.Line(np.array([0.0, 3.0]), np.array([1.0, -2.0]))
    chart = pages.Chart("x (1)", "y (1)", (line,), (0.0, 4.0), (-2.0, 2.0), limit=1.0)
    document = Document(pages.chart(chart, "a line"))
    (axes,) = (svg for svg in document.all("svg") if "x" in svg)
    wide, high = float(axes["width"]), float(axes["height"])
    dots = [(float(dot["cx"]), float(dot["cy"])) for dot in document.all("circle")]
    # Printed to a tenth of a pixel.
    np.testing.assert_allclose(dots, [(0, high / 4), (0.75 * wide, high)], atol=0.051)
    (strip,) = (box for box in document.all("rect") if box["fill"] == pages.FILLS["limit"])
    np.testing.assert_allclose(
        [float(strip["y"]), float(strip["height"])], [high / 4, high / 2], atol=0.051
    )


def test_the_page_draws_no_curve_where_a_sensor_is_left_out(surveyed):
    case, table, budget = surveyed
    reading = next(iter(reports.readings(case, table, 0)))
    band = survey_pages._expanded(budget, 0, reading)
    chart = survey_pages._chart(case, table, 0, reading, band, True)
    (line,) = chart.lines
    shown = np.isfinite(line.y)
    np.testing.assert_array_equal(shown, table.trust[:, 0])
    for start, stop, fill in chart.spans:
        if fill == "excluded":
            assert not (shown & (line.x > start) & (line.x < stop)).any()
    known = np.isfinite(line.low)
    # High less low is twice the expanded uncertainty, to rounding.
    np.testing.assert_allclose(
        (line.high - line.low)[known], 200 * budget.expanded_speed[known, 0], rtol=1e-9
    )


@pytest.mark.parametrize("low, high, expected", [
    (-1.3, 2.2, [-1, 0, 1, 2]), (0.0, 360.0, [0, 100, 200, 300]), (0.012, 0.019, [0.012, 0.014,
                                                                               0.016, 0.018]),
])
def test_marks_of_an_axis_are_round_and_lie_within_it(low, high, expected):
    # The marks are whole multiples of a step in binary: to rounding.
    np.testing.assert_allclose(pages.ticks(low, high), expected, rtol=1e-12)


# --- the map --------------------------------------------------------------------------------------


@pytest.mark.parametrize("direction", [0.0, 37.0, 250.0])
@pytest.mark.parametrize("wake", [None, ob.Wake(1.2)])
def test_the_hatched_strips_of_the_map_are_the_wake_and_margin_of_the_survey(direction, wake):
    shapely = pytest.importorskip("shapely")
    model = ob.solve(ob.ellipse(1.0, 0.5, (0.3, 0.2), 20.0), wakes=wake)
    ends = charts._leaving(model, 0, direction)
    ahead = DOUBTFUL_START * (ends[0] - ends[1]) @ charts._along(direction + 90.0)
    generator = np.random.default_rng(5)
    places = generator.uniform(-5, 5, (4000, 2))
    codes = wake_codes(places, ends[None], np.array([direction]))[0]
    for code, corners in (
        (IN_WAKE, charts._strip(ends, direction, WAKE_HALF_ANGLE, 60.0)),
        (DOUBTFUL, charts._strip(ends, direction, DOUBTFUL_HALF_ANGLE, 60.0, ahead)),
    ):
        drawn = shapely.contains_xy(shapely.Polygon(corners), *places.T)
        # Beyond the ends of a line askew to the stream the survey starts its wake square to it.
        differing = (drawn != (codes >= code)).mean()
        assert differing <= 0.002, (code, differing)
    clear = places[~ob.inside(model.outlines, places)][:60]
    table = ob.survey(model, [ob.PointSensor(*place) for place in clear], [direction])
    np.testing.assert_array_equal(table.in_wake[0], wake_codes(
        clear, ends[None], np.array([direction])
    )[0] == IN_WAKE)
