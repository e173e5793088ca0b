"""A case file means what it says, and what it cannot mean is refused with a mend."""

import numpy as np
import pytest

import offbody as ob
from offbody.cases import read_case

PLAIN = """\
title = "Osterlund pier, mast 1"
length_unit = "m"

[stream]
bearings = 10
prevailing_bearing = 240

[[body]]
name = "mast"
shape = "circle"
diameter = 0.4

[[sensor]]
name = "cup"
kind = "point"
reads = "speed"
boom = { body = "mast", bearing = 240, length = 2.0, from = "axis" }
"""


def written(folder, text):
    path = folder / "case.toml"
    path.write_text(text, encoding="utf-8")
    return path


@pytest.fixture
def case_of(tmp_path):
    """Reads the plain case with some of its text changed."""

    def read(*changes):
        text = PLAIN
        for old, new in changes:
            assert old in text, f"{old!r} is not in the plain case"
            text = text.replace(old, new)
        return read_case(written(tmp_path, text))

    return read


def test_the_plain_case_is_read_whole(case_of):
    case = case_of()
    assert case.title == "Osterlund pier, mast 1"
    assert (case.length_unit, case.by_bearing) == ("m", True)
    np.testing.assert_array_equal(case.angles, np.arange(0, 360, 10))
    assert case.entries["body"][0]["diameter"] == 0.4
    assert isinstance(case.surroundings, ob.OpenStream)


# --- angles ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("said", "meant"),
    [
        ('"all"', np.arange(360.0)),
        ("0.5", np.arange(720) * 0.5),
        ("[240, 60, 61.5]", [240.0, 60.0, 61.5]),
        ("{ from = 10, to = 40, step = 10 }", [10.0, 20.0, 30.0, 40.0]),
        ("{ from = 340, to = 20, step = 20 }", [340.0, 0.0, 20.0]),
        ("{ from = 0, to = 360, step = 90 }", [0.0, 90.0, 180.0, 270.0]),
        ("{ from = 0, to = 0.3, step = 0.1 }", [0.0, 0.1, 0.2, 0.3]),
    ],
)
def test_bearings_are_all_a_step_a_list_or_a_range(case_of, said, meant):
    case = case_of(("bearings = 10", f"bearings = {said}"))
    # Multiples of a step are exact to rounding.
    np.testing.assert_allclose(case.angles, meant, rtol=0, atol=1e-12)


@pytest.mark.parametrize(("word", "along"), [("directions", [0, 180]), ("bearings", [90, 270])])
def test_all_over_a_ground_is_both_ways_along_it(tmp_path, word, along):
    text = f"""
    length_unit = "m"
    surroundings = {{ kind = "ground", y = -1.0 }}
    stream = {{ {word} = "all" }}
    body = [{{ shape = "circle", diameter = 1.0 }}]
    """
    case = read_case(written(tmp_path, text))
    np.testing.assert_array_equal(case.angles, along)
    np.testing.assert_array_equal(np.sort(case.directions(case.angles)), [0, 180])
    assert case.surroundings == ob.Ground(-1.0)


@pytest.mark.parametrize(
    ("said", "meant"),
    [
        ('kind = "open"', ob.OpenStream()),
        ('kind = "ground"', ob.Ground(0.0)),
        ('kind = "duct"\nlower = -3\nupper = 5', ob.Duct(-3.0, 5.0)),
        ('kind = "row"\npitch = 4', ob.Row(4.0)),
    ],
)
def test_every_kind_of_surroundings_can_be_said(case_of, said, meant):
    case = case_of(("bearings = 10\nprevailing_bearing = 240", 'bearings = "all"'),
                   ("[[body]]", f"[surroundings]\n{said}\n[[body]]"))
    assert case.surroundings == meant


def test_a_case_said_by_directions_is_the_same_survey_as_one_said_by_bearings(tmp_path, case_of):
    case = case_of()
    by_bearings = case.survey(case.solve())
    # Bearing 240 points to direction 90 - 240; wind from bearing b goes to direction 270 - b.
    text = PLAIN.replace("bearing = 240, length", "direction = -150, length")
    text = text.replace("prevailing_bearing = 240", "prevailing_direction = 30")
    text = text.replace("bearings = 10", "directions = 10")
    text = text.replace('"speed"', '"both"')
    case = read_case(written(tmp_path, text))
    by_directions = case.survey(case.solve())
    order = np.argsort(by_bearings.directions)
    # Equal but for rounding of the boom's end.
    np.testing.assert_allclose(
        by_directions.speed_ratio, by_bearings.speed_ratio[order], rtol=0, atol=1e-12
    )
    assert np.isnan(by_bearings.direction_error).all()
    assert np.isfinite(by_directions.direction_error).all()


# --- places ---------------------------------------------------------------------------------------


def test_a_boom_from_the_axis_points_along_its_bearing_as_seen_from_the_mast(case_of):
    (cup,) = case_of(("diameter = 0.4", "diameter = 0.4\ncentre = [5.0, -1.0]")).sensors
    # Bearing 240 is west-south-west of the mast: x = sin, y = cos.
    there = 5.0 + 2.0 * np.sin(np.radians(240)), -1.0 + 2.0 * np.cos(np.radians(240))
    np.testing.assert_allclose((cup.x, cup.y), there, rtol=0, atol=1e-14)  # rounding


@pytest.mark.parametrize(
    ("body", "depth"),
    [
        ('shape = "circle"\ndiameter = 0.4', 0.2),
        ('shape = "ellipse"\nlength = 0.4\nthickness = 0.1\nturned = 30', 0.2),
        ('shape = "rectangle"\nwidth = 0.4\ndepth = 0.8\ncorner_radius = 0.02\nturned = 30', 0.2),
        ('shape = "polygon"\npoints = [[0, 0], [0.6, 0], [0.6, 0.6], [0, 0.6]]\n'
         "corner_radius = 0.01\nturned = 30", 0.3),
    ],
)
def test_a_boom_from_the_face_counts_from_the_wall(case_of, body, depth):
    case = case_of(('shape = "circle"\ndiameter = 0.4', body), ('from = "axis"', 'from = "face"'))
    (cup,) = case.sensors
    far = abs(complex(cup.x, cup.y) - case.bodies[0].axis)
    # The wall is found to rounding; the polygon's axis, its centroid, to a millionth of its size.
    assert far == pytest.approx(2.0 + depth, abs=2e-6), far


def test_an_offset_lies_square_to_the_boom_on_its_left(case_of):
    offset = "length = 2.0", "length = 2.0, offset = 0.1"
    case = case_of(offset, ("bearing = 240", "bearing = 90"))
    (cup,) = case.sensors
    np.testing.assert_allclose((cup.x, cup.y), (2.0, 0.1), rtol=0, atol=1e-14)  # rounding
    np.testing.assert_allclose(case.booms[0], [[0, 0], [2, 0], [2, 0.1]], rtol=0, atol=1e-14)


def test_booms_count_from_the_axis_that_a_body_is_given(case_of):
    case = case_of(("diameter = 0.4", "diameter = 0.4\naxis = [0.1, 0.0]"),
                   ("bearing = 240", "bearing = 90"), ('from = "axis"', 'from = "face"'))
    (cup,) = case.sensors
    np.testing.assert_allclose((cup.x, cup.y), (2.2, 0.0), rtol=0, atol=1e-12)  # root finding


def test_paths_on_a_boom_are_centred_on_its_end_and_lie_along_their_bearings(case_of):
    case = case_of(
        ('kind = "point"\nreads = "speed"', 'kind = "path"\npath_length = 0.2\npath_bearing = 0'),
        ("bearing = 240, length", "bearing = 90, length"),
    )
    (path,) = case.sensors
    np.testing.assert_allclose((path.start, path.end), [[2, -0.1], [2, 0.1]], rtol=0, atol=1e-14)
    case = case_of(
        ('kind = "point"\nreads = "speed"',
         'kind = "crossed_paths"\npath_length = 0.2\npath_bearings = [0, 90]'),
        ("bearing = 240, length", "bearing = 90, length"),
    )
    (sonic,) = case.sensors
    np.testing.assert_allclose(sonic.paths[1].start, [1.9, 0.0], rtol=0, atol=1e-14)
    np.testing.assert_allclose(sonic.centre, [2.0, 0.0], rtol=0, atol=1e-14)


def test_every_kind_of_sensor_can_be_given_by_coordinates(tmp_path):
    text = PLAIN[: PLAIN.index("[[sensor]]")] + """
    [[sensor]]
    kind = "disc"
    reads = "both"
    radius = 0.1
    x = 1.0
    y = 2.0
    [[sensor]]
    kind = "path"
    start = [1, 0]
    end = [1, 1]
    [[sensor]]
    kind = "crossed_paths"
    paths = [{ start = [2, 0], end = [2, 1] }, { start = [1.5, 0.5], end = [2.5, 0.5] }]
    [[sensor]]
    name = "tap"
    kind = "wall_port"
    arc_fraction = 0.25
    """
    sensors = read_case(written(tmp_path, text)).sensors
    assert [sensor.kind for sensor in sensors] == ["disc", "path", "crossed paths", "port"]
    assert [sensor.name for sensor in sensors] == ["sensor 1", "sensor 2", "sensor 3", "tap"]
    assert sensors[0] == ob.DiscSensor((1.0, 2.0), 0.1, name="sensor 1", reads="both")


# --- bodies ---------------------------------------------------------------------------------------


def test_an_outline_file_is_looked_for_beside_the_case(tmp_path, case_of):
    (tmp_path / "leg.csv").write_text("x,y\n0,0\n400,0\n400,300\n0,300\n", encoding="utf-8")
    case = case_of((
        'shape = "circle"\ndiameter = 0.4',
        'shape = "points"\nfile = "leg.csv"\ncorner_radius = 10\nscaled = 0.001\nmoved = [1, 0]',
    ))
    points = case.bodies[0].outline.points(400)
    np.testing.assert_allclose(points.min(axis=0), [1.0, 0.0], rtol=0, atol=1e-12)
    np.testing.assert_allclose(points.max(axis=0), [1.4, 0.3], rtol=0, atol=1e-12)


def test_a_section_stands_with_its_nose_where_it_is_set(case_of):
    case = case_of((
        'shape = "circle"\ndiameter = 0.4',
        'shape = "section"\ncode = "0012"\nchord = 0.5\nnose = [1, 2]\nturned = 90',
    ))
    outline = case.bodies[0].outline
    edge = complex(outline.position(outline.edge))
    assert abs(edge - (1 + 2.5j)) < 1e-12, edge  # turning and moving cost rounding alone


def test_drag_coefficients_against_bearings_are_those_of_the_stream_from_there(case_of):
    case = case_of(("diameter = 0.4", "diameter = 0.4\ndrag_reference = 0.5\n"
                    "drag_coefficient = { bearings = [270, 180], values = [1.2, 0.6] }"))
    wake = case.bodies[0].wake
    # Wind from the west goes to direction 0, from the south to 90.
    np.testing.assert_allclose(wake.drag(np.array([0.0, 90.0])), [1.2, 0.6], rtol=1e-15)
    assert wake.reference == 0.5


def test_panels_circulation_and_wake_reach_the_model(case_of):
    case = case_of(("diameter = 0.4", "diameter = 0.4\ndrag_coefficient = 1.2\ncirculation = 0.3"),
                   ("[[sensor]]", "[panels]\ncount = 12\norder = 4\n[[sensor]]"))
    model = case.solve()
    assert (model.panel_counts, model.order) == ((12,), 4)
    assert model.wakes == (ob.Wake(1.2),)
    # The circulation is a row of the equation: set to rounding.
    np.testing.assert_allclose(model.circulation(30.0), [0.3], rtol=0, atol=1e-12)


# --- the region of the grid -----------------------------------------------------------------------


def test_the_region_holds_bodies_and_sensors_unless_the_case_says_another(case_of):
    case = case_of()
    x, y = case.grid_lines(case.solve())
    assert x[0] < case.sensors[0].x and x[-1] > 0.2
    assert y[0] < case.sensors[0].y and y[-1] > 0.2
    case = case_of(("[[sensor]]", "[field]\nx = [-1, 3]\ny = [0, 1]\nspacing = 0.5\n[[sensor]]"))
    x, y = case.grid_lines(case.solve())
    np.testing.assert_allclose(x, np.linspace(-1, 3, 9), rtol=0, atol=1e-15)
    np.testing.assert_allclose(y, [0, 0.5, 1.0], rtol=0, atol=1e-15)


def test_a_grid_that_no_memory_holds_is_refused(case_of):
    case = case_of(("[[sensor]]", "[field]\nspacing = 1e-12\n[[sensor]]"))
    with pytest.raises(ob.InputError, match="widen the spacing"):
        case.grid_lines(case.solve())


# --- what is refused ------------------------------------------------------------------------------

BOOM = 'boom = { body = "mast", bearing = 240, length = 2.0, from = "axis" }'


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("diameter", "diametre", r"body\[1\]\.diametre: unknown key; did you mean 'diameter'\?"),
        ("diameter = 0.4", 'diameter = "wide"', r"\[1\]\.diameter must be a number, got 'wide'"),
        ("diameter = 0.4", "diameter = true", r"body\[1\]\.diameter must be a number, got True"),
        ("diameter = 0.4", "diameter = nan", r"body\[1\]\.diameter must be finite"),
        ("diameter = 0.4", "diameter = 0", r"body\[1\]\.diameter must be greater than zero"),
        ("diameter = 0.4", "", r"body\[1\]\.diameter: missing; expected a number"),
        ("diameter = 0.4", "diameter = 0.4\ncolour = 1", r"\[1\]\.colour: unknown key; known: "),
        ("diameter = 0.4", "diameter = 0.4\ncenter = [0, 0]", r"did you mean 'centre'\?"),
        ("diameter = 0.4", "diameter = 0.4\ncentre = [0, 'a']",
         r"body\[1\]\.centre: expected a point \[x, y\], got 'a'"),
        ("diameter = 0.4", "diameter = 0.4\ncentre = 3", r"body\[1\]\.centre must have shape"),
        ("diameter = 0.4", "diameter = 0.4\ndrag_reference = 1", r"drag_coefficient: missing"),
        ("diameter = 0.4",
         "diameter = 0.4\ndrag_coefficient = { bearings = [0, 90], values = [1] }",
         r"body\[1\]\.drag_coefficient\.values: expected 2 numbers"),
        ('"circle"', '"cirle"', r"body\[1\]\.shape: 'cirle' is not known; did you mean 'circle'\?"),
        ('"circle"', '"ellipse"', r"body\[1\]\.length: missing; expected a number"),
        ('shape = "circle"\ndiameter = 0.4', 'shape = "section"\ncode = "00x2"\nchord = 1',
         r"body\[1\]: code must be four digits"),
        ('shape = "circle"\ndiameter = 0.4',
         'shape = "polygon"\npoints = [[0, 0], [1, 1]]\ncorner_radius = 0.1',
         r"body\[1\]: points must hold at least three distinct points"),
        ('shape = "circle"\ndiameter = 0.4', 'shape = "points"\nfile = "leg.csv"',
         r"body\[1\]\.file: no such file"),
        ("[[body]]", "[body]", r"body: expected an array of tables; write \[\[body\]\]"),
        ("[stream]", "[steam]", r"steam: unknown key; did you mean 'stream'\?"),
        ("length_unit", "#", r"length_unit: missing; expected one of 'm'"),
        ('"m"', '"metres"', r"length_unit: 'metres' is not known; known: cm, ft, in, km, m, mm"),
        ("title = ", "title  ", r"not valid TOML: .*line 1"),
        ("bearings = 10", "", r"stream\.bearings or directions: missing"),
        ("bearings = 10", "bearing = 10", r"stream\.bearing: unknown key; did you mean 'bearings'"),
        ("bearings = 10", "bearings = 7", r"stream\.bearings: a step must divide 360"),
        ("bearings = 10", 'bearings = "al"', r"stream\.bearings: 'al' is not known; did you mean"),
        ("bearings = 10", "bearings = [0, 360]", r"stream\.bearings: the same angle is given tw"),
        ("bearings = 10", "bearings = [0, 'x']", r"stream\.bearings: expected a list .* got 'x'"),
        ("bearings = 10", "bearings = { from = 0, to = 9 }", r"stream\.bearings\.step: missing"),
        ("bearings = 10", "bearings = 10\ndirections = 10",
         r"stream\.directions: given beside 'bearings'"),
        ("bearings = 10", "directions = 10",
         r"stream\.prevailing_bearing: a bearing in a case that gives stream\.directions"),
        ("bearings = 10", "bearings = 10\nspeed = 8", r"stream\.speed_unit: missing"),
        ("bearing = 240, length", "direction = 240, length",
         r"sensor\[1\]\.boom\.direction: a direction in a case that gives stream\.bearings"),
        ("[[body]]", '[surroundings]\nkind = "ground"\n[[body]]', r"use direction 0 or 180 \(bear"),
        ("[[body]]", '[surroundings]\nkind = "grund"\n[[body]]', r"did you mean 'ground'\?"),
        ("[[body]]", "[panels]\norder = 17\n[[body]]", r"panels\.order must be from 1 to 16"),
        ("[[body]]", "[panels]\ncount = [9, 9]\n[[body]]", r"panels\.count: expected one number"),
        ("[[body]]", "[field]\nx = [1, 0]\ny = [0, 1]\n[[body]]", r"field\.x: .*runs upward"),
        ("[[body]]", "[field]\nx = [0, 1]\n[[body]]", r"field\.y: missing"),
        ('"mast", bearing', '"mats", bearing', r"boom\.body: 'mats' is not known; did you mean"),
        (', from = "axis"', "", r"\[1\]\.boom\.from: missing; expected one of 'axis', 'face'"),
        (BOOM, "", r"sensor\[1\]\.boom or x or y: missing; expected a position"),
        (BOOM, "x = 1", r"sensor\[1\]\.y: missing"),
        (BOOM, f"x = 1\n{BOOM}", r"sensor\[1\]\.x: given beside 'boom'"),
        (BOOM, "boom = 3", r"sensor\[1\]\.boom: expected a table, got 3"),
        ('reads = "speed"', "", r"sensor\[1\]\.reads: missing; expected one of 'speed'"),
        ('"point"', '"pint"', r"sensor\[1\]\.kind: 'pint' is not known; did you mean 'point'\?"),
    ],
)
def test_a_mistake_is_named_with_file_key_and_mend(case_of, old, new, message):
    with pytest.raises(ob.InputError, match=r"case\.toml: .*" + message):
        case_of((old, new))


def test_a_boom_from_the_face_needs_an_axis_inside_the_body(case_of):
    outside = "diameter = 0.4", "diameter = 0.4\naxis = [9, 9]"
    assert case_of(outside).sensors[0].x > 7
    with pytest.raises(ob.InputError, match=r'boom\.from: "face" needs an axis inside .* \(9, 9\)'):
        case_of(outside, ('from = "axis"', 'from = "face"'))


def test_two_of_one_name_are_refused(tmp_path):
    twice = PLAIN + PLAIN[PLAIN.index("[[sensor]]"):]
    with pytest.raises(ob.InputError, match=r"sensor\[2\]\.name: 'cup' is given twice"):
        read_case(written(tmp_path, twice))


def test_what_the_library_refuses_is_told_in_the_names_of_the_case(case_of):
    case = case_of(("length = 2.0", "length = 0.1"))
    with pytest.raises(ob.InputError, match=r"case\.toml: sensor\[1\] \(cup, .* across mast \("):
        case.survey(case.solve())
    case = case_of(("[[body]]", '[[body]]\nname = "leg"\nshape = "circle"\ndiameter = 1\n[[body]]'))
    with pytest.raises(ob.InputError, match=r"leg \(circle .*\) and mast \(circle .*\) overlap"):
        case.solve()


def test_a_case_without_sensors_has_no_survey(tmp_path):
    case = read_case(written(tmp_path, PLAIN[: PLAIN.index("[[sensor]]")]))
    with pytest.raises(ob.InputError, match=r"needs a \[\[sensor\]\]"):
        case.survey(case.solve())


def test_a_missing_file_is_named_with_the_nearest_one(tmp_path):
    written(tmp_path, PLAIN)
    with pytest.raises(ob.InputError, match=r"cas\.toml: no such case file; did you mean .*case\."):
        read_case(tmp_path / "cas.toml")


def test_a_file_that_is_not_utf8_is_refused_with_its_line(tmp_path):
    path = tmp_path / "case.toml"
    path.write_bytes(b'length_unit = "m"\ntitle = "caf\xe9"\n')
    with pytest.raises(ob.InputError, match=r"case\.toml: line 2: not UTF-8"):
        read_case(path)


def test_a_byte_order_mark_and_windows_line_ends_do_no_harm(tmp_path):
    path = tmp_path / "case.toml"
    path.write_bytes(b"\xef\xbb\xbf" + PLAIN.replace("\n", "\r\n").encode())
    assert read_case(path).bodies[0].name == "mast"
