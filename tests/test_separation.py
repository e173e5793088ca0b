"""Separation points, the wakes they bound, and wakes with a base pressure."""

from functools import cache

import numpy as np
import pytest

import offbody as ob

SUBCRITICAL = 1e5


@cache
def tube(**wake):
    return ob.solve(ob.circle(1.0), wakes=ob.Wake(**wake) if wake else None)


@cache
def square():
    half = 0.5
    corners = [(-half, -half), (half, -half), (half, half), (-half, half)]
    return ob.solve(ob.polygon(corners, corner_radius=0.05))


def turned(vectors, degrees):
    angle = np.radians(degrees)
    return vectors @ np.array([[np.cos(angle), np.sin(angle)], [-np.sin(angle), np.cos(angle)]])


# --- where, and why -----------------------------------------------------------------------------


def test_a_tube_without_its_wake_has_the_measured_figure_below_the_drag_crisis_and_says_so():
    found = ob.separation(tube(), 0.0, SUBCRITICAL)
    assert found.state.tolist() == [["measured figure", "measured figure"]]
    # The wall's angle is linear in arc on a circle: rounding alone.
    np.testing.assert_allclose(found.turning, 80.0, rtol=1e-9)
    np.testing.assert_allclose(found.points[0, 0], 0.5 * np.array(
        [-np.cos(np.radians(80)), np.sin(np.radians(80))]), atol=1e-9)
    np.testing.assert_allclose(found.arc_fractions, [[100 / 360, 260 / 360]], rtol=1e-9)
    for sentence in found.why.ravel():
        assert "80 degrees measured on a circle" in sentence and "at 103.1" in sentence, sentence
    assert np.isnan(found.transition).all()


def test_above_the_drag_crisis_the_layer_turns_turbulent_and_leaves_far_behind():
    found = ob.separation(tube(), 0.0, 2e6)
    assert (found.state == "turbulent").all() and (found.turning > 110).all(), found.turning
    assert np.isfinite(found.transition).all()
    assert all("behind a short bubble" in sentence for sentence in found.why.ravel()), found.why


def test_the_earlier_of_march_and_measured_figure_is_taken():
    # At a given drag the march separates ahead of 80 degrees; without a wake it does not.
    marched = ob.separation(tube(drag_coefficient=1.2), 0.0, SUBCRITICAL)
    assert (marched.state == "laminar").all() and (marched.turning < 80).all(), marched.turning


def test_the_measured_figure_does_not_speak_for_a_slender_body():
    slender = ob.separation(ob.solve(ob.ellipse(4.0, 1.0)), 0.0, SUBCRITICAL)
    assert (slender.state == "laminar").all(), slender.state
    bluff = ob.separation(ob.solve(ob.ellipse(1.4, 1.0)), 0.0, SUBCRITICAL)
    assert (bluff.state == "measured figure").all(), bluff.state


@pytest.mark.parametrize("direction", [0.0, 5.0])
def test_a_square_is_left_at_its_windward_corners(direction):
    found = ob.separation(square(), direction, SUBCRITICAL)
    corners = np.array([[-0.5, 0.5], [-0.5, -0.5]])
    # Within the rounding, of radius 0.05.
    np.testing.assert_array_less(np.linalg.norm(found.points[0] - corners, axis=-1), 0.06)


def test_a_square_on_edge_is_left_at_its_side_corners_not_where_its_front_corner_ends():
    found = ob.separation(square(), 45.0, SUBCRITICAL)
    corners = np.array([[-0.5, 0.5], [0.5, -0.5]])
    np.testing.assert_array_less(np.linalg.norm(found.points[0] - corners, axis=-1), 0.06)


def test_a_section_within_its_incidence_is_left_close_to_its_edge():
    found = ob.separation(ob.solve(ob.four_digit("0012")), 2.0, 1e6)
    # The last two percent of the chord: at an edge of finite angle potential flow comes to rest.
    np.testing.assert_array_less(0.98, found.points[0, :, 0])
    assert set(found.state.ravel()) <= {"attached", "turbulent"}, found.state


def test_transition_moves_upstream_as_the_reynolds_number_grows():
    section = ob.solve(ob.four_digit("0012"))
    places = [ob.separation(section, 0.0, number).transition[0, 0, 0] for number in (1e5, 3e5, 1e6)]
    np.testing.assert_array_less(places[1:], places[:-1])


# --- conventions --------------------------------------------------------------------------------


@pytest.mark.parametrize("wake", [{}, {"drag_coefficient": 1.2}])
def test_a_vector_of_directions_adds_a_leading_axis_and_changes_nothing(wake):
    directions = np.array([0.0, 40.0, 200.0])
    together = ob.separation(tube(**wake), directions, SUBCRITICAL)
    assert together.points.shape == (3, 1, 2, 2) and together.why.shape == (3, 1, 2)
    probe = np.array([[2.0, 0.0], [0.0, 2.0]])
    for k, direction in enumerate(directions):
        alone = ob.separation(tube(**wake), direction, SUBCRITICAL)
        # All directions rest when the last does: 1e-6 of the perimeter.
        np.testing.assert_allclose(together.points[k], alone.points, atol=1e-5)
        np.testing.assert_array_equal(together.state[k], alone.state)
        np.testing.assert_array_equal(together.holds(probe)[k], alone.holds(probe))
        np.testing.assert_allclose(together.displacement_thickness(0, 0.5)[k],
                                   alone.displacement_thickness(0, 0.5), rtol=1e-4)


@pytest.mark.parametrize("wake", [{}, {"drag_coefficient": 1.2}])
def test_turning_the_stream_round_a_circle_turns_its_points(wake):
    directions = np.array([0.0, 33.0, 121.0])
    found = ob.separation(tube(**wake), directions, SUBCRITICAL)
    for direction, points in zip(directions, found.points[:, 0], strict=True):
        # Nodes stand elsewhere: what the front's pressure integrates to differs by 1e-4.
        np.testing.assert_allclose(points, turned(found.points[0, 0], direction), atol=2e-4)


def test_the_left_point_lies_on_the_left_of_the_stream_and_mirrors_the_right():
    found = ob.separation(ob.solve(ob.ellipse(1.0, 1.6)), 0.0, SUBCRITICAL).points[0]
    assert found[0, 1] > 0 > found[1, 1]
    np.testing.assert_allclose(found[0], found[1] * [1, -1], atol=1e-9)


def test_bodies_are_marched_each_at_its_own_reynolds_number():
    pair = ob.solve([ob.circle(1.0), ob.circle(1.0, centre=(0, 40))])
    found = ob.separation(pair, 0.0, [SUBCRITICAL, 2e6])
    assert found.state[:, 0].tolist() == ["measured figure", "turbulent"]
    assert found.reynolds == (SUBCRITICAL, 2e6)


def test_one_panel_term_marches_too():
    coarse = ob.solve(ob.circle(1.0), panels=200, order=1)
    found = ob.separation(coarse, 0.0, 2e6).transition[0, 0]
    # 103.1 degrees; two for constant-strength panels of 1.8 degrees.
    np.testing.assert_allclose(180 - np.degrees(np.arctan2(*found[::-1])), 103.1, atol=2)


@pytest.mark.parametrize("call, message", [
    (lambda: ob.separation("tube", 0.0, 1e5), "model must be what ob.solve returned"),
    (lambda: ob.separation(tube(), 0.0), "reynolds: body 0 has none"),
    (lambda: ob.separation(tube(), 0.0, -1.0), "reynolds must be greater than zero"),
    (lambda: ob.separation(tube(), 0.0, [1e5, 1e5]), "2 entries for 1 bodies"),
    (lambda: ob.separation(tube(), 0.0, 1e5).holds([1.0, 2.0, 3.0]), r"shape \(..., 2\)"),
    (lambda: ob.separation(tube(), [0.0], 1e5).streamlines(), "call once for each"),
    (lambda: ob.separation(ob.solve(ob.circle(1.0), circulation=9.0), 0.0, 1e5), "parts nowhere"),
    (lambda: ob.Wake(), "give one of the two"),
    (lambda: ob.Wake(1.0, base_pressure=-1.0), "give one of the two"),
    (lambda: ob.Wake(base_pressure=1.0), "base_pressure must be less than 1"),
    (lambda: ob.Wake(1.0, separation=80.0, reynolds=1e5), "give one of the two"),
    (lambda: ob.Wake(1.0, separation=181.0), "separation must be at most 180"),
    (lambda: ob.Wake(1.0, reynolds=0.0), "reynolds must be greater than zero"),
    (lambda: tube().wake(0), r"body = 0 .* has no wake"),
    (lambda: tube().with_wakes([None, None]), "wakes has 2 entries for 1 bodies"),
    (lambda: ob.solve(ob.four_digit("0012"), wakes=ob.Wake(0.1, separation=170.0)).wake(0),
     "separation = 170: the wall of body 0 .* does not turn through it"),
])
def test_what_cannot_be_used_is_named(call, message):
    with pytest.raises(ob.InputError, match=message):
        call()


# --- the wake's bound ---------------------------------------------------------------------------


def test_a_strip_of_ten_degrees_is_the_wake_and_twenty_its_margin():
    found = ob.separation(tube(), 30.0, SUBCRITICAL)
    start = 0.5 * np.array([-np.cos(np.radians(80)), np.sin(np.radians(80))])
    ahead = 4.0
    places, codes = [], []
    for slope, code in ((9.9, 2), (10.1, 1), (19.9, 1)):
        places.append(start + ahead * np.array([1.0, np.tan(np.radians(slope))]))
        codes.append(code)
    # The margin starts a tenth of a breadth, 0.985, farther up.
    places.append(start + [ahead, (ahead + 0.0985) * np.tan(np.radians(20.1))])
    places += [[-1.0, 0.0], start - [0.05, 0.0], start - [0.15, 0.0]]
    codes += [0, 0, 1, 0]
    places = turned(np.array(places), 30.0)
    np.testing.assert_array_equal(found.holds(places), codes)
    np.testing.assert_array_equal(found.holds(places[0]), codes[0])


def test_behind_a_section_that_holds_its_flow_there_is_a_margin_only():
    section = ob.solve(ob.curve(lambda s: np.stack(
        [0.5 * np.cos(2 * np.pi * s), 0.06 * np.sin(2 * np.pi * s) * np.sin(np.pi * s)], -1),
        sharp=0.0))
    found = ob.separation(section, 0.0, 1e6)
    expected = 1 if (found.state == "attached").all() else 2
    assert found.holds((2.0, 0.0)) == expected


def test_the_streamlines_that_leave_a_tube_stay_within_the_wake_and_its_margin():
    found = ob.separation(tube(drag_coefficient=1.2), 0.0, SUBCRITICAL)
    lines = found.streamlines(length=8.0)[0]
    for line in lines:
        codes = found.holds(line)
        assert (codes[20:] > 0).all(), line[20:][codes[20:] == 0]
        # A bubble first widens beyond the straight strip, by 0.05 diameters, and then narrows.
        assert (codes[line[:, 0] > 0.8] == 2).all()
    np.testing.assert_allclose(lines[0][-1], lines[1][-1] * [1, -1], atol=1e-3)
    # Far behind, what is blown through the lee is as wide as its source: Cd b / 2.
    np.testing.assert_allclose(lines[0][-1, 1] - lines[1][-1, 1], 0.6, rtol=0.02)


def test_a_layer_is_thinner_at_the_front_than_farther_on_and_gone_in_the_lee():
    found = ob.separation(tube(), 0.0, SUBCRITICAL)
    thickness = [found.displacement_thickness(0, (180 - angle) / 360) for angle in (0, 30, 60, 75)]
    np.testing.assert_array_less(thickness[:-1], thickness[1:])
    assert np.isnan(found.displacement_thickness(0, 0.0))
    np.testing.assert_allclose(found.displacement_thickness(0, 0.6),
                               found.displacement_thickness(0, 0.4), rtol=1e-9)


# --- wakes with a base pressure -----------------------------------------------------------------


def test_the_pressure_where_the_flow_leaves_is_that_of_the_base():
    model = tube(base_pressure=-1.0, separation=80.0)
    ahead, behind = (model.port_pressure(0, (180 - angle) / 360) for angle in (79.9999, 80.0001))
    np.testing.assert_allclose(behind, -1.0, rtol=1e-12)
    # The pressure ahead runs into it: 1e-4 degrees times its slope.
    np.testing.assert_allclose(ahead, -1.0, atol=1e-4)
    pressure = model.surface(0).pressure_coefficient
    assert np.isfinite(pressure).all() and (pressure == -1.0).sum() > 50


@pytest.mark.parametrize("direction", [0.0, 37.0])
def test_the_pressure_round_the_wall_makes_the_drag_that_the_source_stands_for(direction):
    model = tube(base_pressure=-1.0, separation=80.0)
    drag = model.wake(0, direction).drag_coefficient
    degrees = np.linspace(0, 360, 721)[:-1]
    stream = np.radians(direction)
    pressure = np.array([model.port_pressure(0, angle / 360, direction) for angle in degrees])
    inward = -np.cos(np.radians(degrees) - stream)
    # Panels' nodes stop short of where the flow leaves by up to two degrees: 1e-3.
    np.testing.assert_allclose(np.mean(pressure * inward) * np.pi, drag, rtol=1e-3)
    np.testing.assert_allclose(model.force(direction)[0] @ [np.cos(stream), np.sin(stream)], drag,
                               rtol=1e-12)


@pytest.mark.parametrize("wake", [
    {"base_pressure": -1.0}, {"drag_coefficient": 1.2, "reynolds": SUBCRITICAL}])
def test_far_away_such_a_wake_is_a_source_of_half_the_drag(wake):
    model = tube(**wake)
    angle = 2 * np.pi * np.arange(256) / 256
    outward = np.stack([np.cos(angle), np.sin(angle)], axis=-1)
    flux = 2 * np.pi * 5 * np.mean(np.sum(model.velocity(5 * outward, 10.0) * outward, axis=-1))
    np.testing.assert_allclose(flux, model.wake(0, 10.0).drag_coefficient / 2, rtol=1e-6)


def test_a_wake_by_drag_alone_only_displaces_and_has_no_pressure():
    wake = tube(drag_coefficient=1.2).wake(0)
    assert wake.drag_coefficient == pytest.approx(1.2, rel=1e-12) and np.isnan(wake.base_pressure)
    np.testing.assert_allclose(wake.points, [[0, 0.5], [0, -0.5]], atol=1e-9)


def test_a_reference_length_changes_the_coefficient_and_not_the_flow():
    own = ob.solve(ob.circle(1.0), wakes=ob.Wake(1.2, separation=80.0)).wake(0)
    other = ob.solve(ob.circle(1.0), wakes=ob.Wake(0.6, reference=2.0, separation=80.0)).wake(0)
    np.testing.assert_allclose(other.base_pressure, own.base_pressure, rtol=1e-12)
    np.testing.assert_allclose(other.drag_coefficient, 0.6, rtol=1e-12)


@pytest.mark.parametrize("body, wake", [
    (ob.circle(1.0), ob.Wake(0.6, reynolds=1e6)),
    (ob.circle(1.0), ob.Wake(base_pressure=-0.4, reynolds=1e7)),
    (ob.ellipse(8.0, 1.0), ob.Wake(0.1, reynolds=SUBCRITICAL)),
    (ob.ellipse(2.0, 1.0), ob.Wake(0.7, reynolds=SUBCRITICAL)),
    (ob.ellipse(0.2, 1.0), ob.Wake(1.9, reynolds=SUBCRITICAL)),
])
@pytest.mark.filterwarnings("error")
def test_wakes_of_turbulent_layers_and_of_slender_and_flat_bodies_rest(body, wake):
    model = ob.solve(body, wakes=wake)
    found = ob.separation(model)
    np.testing.assert_allclose(found.points[0], model.wake(0).points, atol=1e-5)
    assert (found.turning > 45).all(), found.turning


def test_wakes_of_several_bodies_rest_together():
    legs = [ob.circle(0.1, centre) for centre in ((-0.58, 0.0), (0.29, 0.5), (0.29, -0.5))]
    model = ob.solve(legs, wakes=ob.Wake(1.2, reynolds=5e4))
    wakes = [model.wake(body, 10.0) for body in range(3)]
    for body, wake in enumerate(wakes):
        np.testing.assert_allclose(wake.drag_coefficient, 1.2, rtol=1e-9)
        for fraction, side in zip(wake.arc_fractions, (1e-6, -1e-6), strict=True):
            ahead = model.port_pressure(body, (fraction - side) % 1, 10.0)
            behind = model.port_pressure(body, (fraction + side) % 1, 10.0)
            # 1e-5 of the perimeter between them, and rest at 1e-6.
            np.testing.assert_allclose(sorted([ahead, behind]), wake.base_pressure, atol=1e-3)


def test_a_drag_that_no_wake_has_is_refused():
    slender = ob.solve(ob.ellipse(3.0, 1.0), wakes=ob.Wake(30.0, separation=150.0))
    with pytest.raises(ob.InputError, match="give another drag_coefficient, or base_pressure"):
        slender.velocity((3.0, 3.0))


def test_other_wakes_on_a_solved_model_are_those_of_a_new_solve():
    wake = ob.Wake(0.7, separation=100.0)
    bare = tube()
    carried = bare.with_wakes(wake)
    point = (1.0, 1.3)
    np.testing.assert_allclose(carried.velocity(point),
                               ob.solve(ob.circle(1.0), wakes=wake).velocity(point), rtol=1e-9)
    assert bare.wakes == (None,)


# --- trust --------------------------------------------------------------------------------------


def test_a_survey_with_a_reynolds_number_starts_wakes_where_separation_does():
    sensors = [ob.PointSensor(-0.02, 0.503), ob.PointSensor(3.0, 1.3), ob.PointSensor(3.0, 0.0)]
    table = ob.survey(tube(), sensors, [0.0], reynolds=SUBCRITICAL)
    # The first lies ahead of the widest points, behind those at 80 degrees.
    assert table.in_wake.tolist() == [[True, False, True]]
    assert table.doubtful.tolist() == [[False, True, False]]
    assert table.trust.tolist() == [[False, True, False]]
    plain = ob.survey(tube(), sensors, [0.0])
    assert plain.in_wake.tolist() == [[False, False, True]]


def test_a_ports_pressure_behind_separation_is_the_bases_and_not_trusted():
    ports = [ob.WallPort(0, (180 - angle) / 360) for angle in (0.0, 60.0, 75.0, 82.0, 180.0)]
    model = tube(base_pressure=-1.0, separation=80.0)
    table = ob.survey(model, ports, [0.0], reynolds=SUBCRITICAL)
    assert table.trust.tolist() == [[True, True, True, False, False]]
    # A tenth of a breadth ahead of separation, so from 68 degrees on.
    assert table.doubtful.tolist() == [[False, False, True, False, False]]
    np.testing.assert_allclose(table.static_error[0, 3:], -1.0, rtol=1e-12)
    notes = [note for note in table.notes if "boundary layer" in note]
    assert len(notes) == 3 and "port 1" in notes[0], notes
