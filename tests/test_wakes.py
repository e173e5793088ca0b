"""Wakes by their drag coefficient: what is blown, where, and what the flow then means."""

from functools import cache

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal, assert_array_less

import exact
import offbody as ob
from offbody.wakes import profile

SQUARE = ob.polygon([(-0.5, -0.5), (0.5, -0.5), (0.5, 0.5), (-0.5, 0.5)], corner_radius=0.05)
ANGLE = ob.polygon([(0, 0), (1, 0), (1, 0.4), (0.4, 0.4), (0.4, 1), (0, 1)], corner_radius=0.05)
BODIES = {
    "circle": ob.circle(1.0, (0.4, -0.2)),
    "ellipse": ob.ellipse(2.0, 1.0, turned=20.0),
    "square": SQUARE,
    "angle": ANGLE,
    "thick section": ob.four_digit("0030"),
}
EACH = pytest.mark.parametrize("name", BODIES)
DIRECTIONS = np.array([0.0, 33.0, 90.0, 200.0, -45.0])


@cache
def solved(name, drag_coefficient=1.2, order=None):
    return ob.solve(BODIES[name], wakes=ob.Wake(drag_coefficient), order=order)


def unit(direction):
    angle = np.radians(direction)
    return np.stack([np.cos(angle), np.sin(angle)], axis=-1)


def flux_round(model, direction, radius=3.0, centre=(0.3, 0.3), count=512):
    """Outward flux through a circle, by the trapezoidal rule."""
    outward = unit(360 * np.arange(count) / count)
    velocity = model.velocity(np.asarray(centre) + radius * outward, direction)
    return 2 * np.pi * radius * np.mean(np.sum(velocity * outward, axis=-1), axis=-1)


def bearing_behind(points, centre, direction):
    """Degrees, -180 to 180, of points from straight downstream of a centre."""
    angle = np.degrees(np.arctan2(*(np.asarray(points) - centre).T[::-1]))
    return (angle - direction + 180.0) % 360.0 - 180.0


# --- the profile ----------------------------------------------------------------------------------


def test_a_profile_is_of_unit_flux_symmetric_and_nothing_outside():
    arc = np.linspace(1.0, 4.0, 3001)
    shape = profile(arc, 1.5, 2.0)
    # The trapezoidal rule of what vanishes smoothly at both ends: rounding.
    assert_allclose(np.trapezoid(shape, arc), 1.0, rtol=1e-12)
    assert_array_equal(shape[(arc < 1.5) | (arc > 3.5)], 0.0)
    assert_allclose(shape, profile(5.0 - arc, 1.5, 2.0), atol=1e-12)
    assert_allclose(shape.max(), shape[np.argmin(abs(arc - 2.5))], rtol=1e-12)


def test_a_profile_vanishes_at_both_ends_with_its_first_five_derivatives():
    ends = profile(np.array([1e-3, 2e-3, 1 - 1e-3]), 0.0, 1.0)
    # As the sixth power of the distance: twice as far, 64 times as much.
    assert_allclose(ends[1] / ends[0], 64.0, rtol=1e-4)
    assert_allclose(ends[2], ends[0], rtol=1e-9)


# --- a tube, exactly ------------------------------------------------------------------------------


@pytest.mark.parametrize("order, panels, bound", [(4, 40, 5e-4), (8, 20, 2e-6), (16, 13, 1e-8)])
@pytest.mark.parametrize("direction", [0.0, 33.0])
def test_a_wake_adds_the_exact_surface_speed_and_field_of_its_normal_speed(
        order, panels, bound, direction):
    flux = 0.6

    def normal_speed(angle):  # sin^6 of the arc fraction over the lee half; 5/16 is its mean
        lee = np.maximum(np.cos(angle - np.radians(direction)), 0.0)
        return flux * lee**6 / (0.3125 * np.pi * 0.5)

    blown = exact.BlownCircle(normal_speed, 0.5, terms=2048)
    tube = ob.circle(1.0)
    model = ob.solve(tube, wakes=ob.Wake(1.2), order=order, panels=panels)
    plain = ob.solve(tube, order=order, panels=panels)
    # Measured 1.4e-4, 6e-7 and 2e-9 on the wall: the ends of the lee lie within panels.
    added = model.surface(0, direction).speed - plain.surface(0, direction).speed
    around = np.arctan2(*model.walls[0].T[::-1]) / (2 * np.pi)
    assert_allclose(added, blown.surface_speed(around), rtol=0, atol=bound)
    points = exact.Circle(0.5).offset_points(np.arange(90) / 90, np.c_[[1e-6, 1e-3, 0.05, 5.0]])
    pairs = exact.as_pairs(points)
    added = model.velocity(pairs, direction) - plain.velocity(pairs, direction)
    assert_allclose(added, exact.as_velocity(blown.velocity(points)), rtol=0, atol=bound)


def test_twice_the_drag_blows_and_moves_twice_as_much():
    points = np.random.default_rng(3).uniform(1.0, 3.0, (40, 2))
    none, one, two = (solved("square", cd).velocity(points, 33.0) for cd in (0.0, 0.7, 1.4))
    # Rounding.
    assert_allclose(two - none, 2 * (one - none), atol=1e-13)
    assert_allclose(none, ob.solve(SQUARE).velocity(points, 33.0), atol=1e-13)


# --- where it is blown ----------------------------------------------------------------------------


@EACH
def test_half_the_drag_flows_out_far_away_and_along_the_wall(name):
    model = solved(name)
    flux = 0.6 * model.breadth(0, DIRECTIONS)
    # Far away the quadrature itself; of a lee's end within a panel, measured 1e-7 on the section.
    assert_allclose(flux_round(model, DIRECTIONS), flux, rtol=1e-6)
    along = model.wall_normal_speed(0, DIRECTIONS)
    assert_allclose(along @ model._panels.weights, flux, rtol=1e-12)
    assert_array_less(-1e-15, along)


@pytest.mark.parametrize("direction", DIRECTIONS)
def test_a_tube_blows_through_its_lee_half_only_and_most_straight_behind(direction):
    model = solved("circle")
    behind = bearing_behind(model.walls[0], (0.4, -0.2), direction)
    speed = model.wall_normal_speed(0, direction)
    assert_array_equal(speed[abs(behind) > 90.0], 0.0)
    assert_array_less(0.0, speed[abs(behind) < 85.0])
    # 5/16 is the mean of sin^6, pi/2 the length of the lee; the nodes are 2 degrees apart.
    assert_allclose(speed.max(), 0.6 / (0.3125 * np.pi / 2), rtol=0.01)
    assert abs(behind[np.argmax(speed)]) < 2.0


@EACH
def test_the_flow_leaves_the_wall_as_blown(name):
    model = solved(name)
    body = BODIES[name]
    surface, blown = model.surface(0, 33.0), model.wall_normal_speed(0, 33.0)
    velocity = model.velocity(surface.points, 33.0)
    away = np.ones(len(blown), bool)
    if body.edge is not None:
        away = np.hypot(*(surface.points - model.edge_point(0)).T) > 1e-4
    # On a wall, of a default model; the square's jumps of curvature, measured 8e-5.
    speed = np.hypot(surface.speed, blown)
    assert_allclose(np.hypot(*velocity.T)[away], speed[away], rtol=0, atol=2e-4)


@EACH
def test_pressure_means_nothing_in_the_lee_and_something_everywhere_else(name):
    model = solved(name)
    surface, plain = model.surface(0, DIRECTIONS), ob.solve(BODIES[name]).surface(0, DIRECTIONS)
    lost = np.isnan(surface.pressure_coefficient)
    blown = model.wall_normal_speed(0, DIRECTIONS) > 0.0
    # sin^6 underflows to nothing before its ends do.
    assert_array_equal(lost & blown, blown)
    assert_array_less(lost.sum(axis=1) - blown.sum(axis=1), 20)
    assert not np.isnan(surface.speed).any()
    assert_allclose(surface.pressure_coefficient[~lost], 1 - surface.speed[~lost] ** 2, rtol=1e-12)
    assert not np.isnan(plain.pressure_coefficient).any()


@pytest.mark.parametrize("direction", DIRECTIONS)
def test_a_port_is_without_pressure_in_the_lee_of_a_tube_only(direction):
    model = solved("circle")
    for behind in (0.0, 60.0, 89.9, -89.9):
        fraction = (direction + behind) % 360 / 360
        assert np.isnan(model.port_pressure(0, fraction, direction)), f"{behind} degrees"
    for behind in (90.1, -90.1, 120.0, 180.0):
        fraction = (direction + behind) % 360 / 360
        pressure = model.port_pressure(0, fraction, direction)
        speed = model.velocity((0.4, -0.2) + 0.5 * unit(direction + behind), direction)
        # 1e-9 of the wall speed, as a wake has it.
        assert_allclose(pressure, 1 - speed @ speed, atol=1e-7)


def test_a_body_without_a_wake_keeps_its_pressure_beside_one_that_has():
    model = ob.solve([ob.circle(1.0), ob.circle(1.0, (0.0, 2.0))], wakes=[ob.Wake(1.0), None])
    assert np.isnan(model.surface(0).pressure_coefficient).any()
    assert not np.isnan(model.surface(1).pressure_coefficient).any()
    assert_array_equal(model.wall_normal_speed(1), 0.0)
    assert len(model.stagnation_points(0)) == 1 and len(model.stagnation_points(1)) == 2


@pytest.mark.parametrize("direction", DIRECTIONS)
def test_a_wake_leaves_one_stagnation_point_ahead(direction):
    found = solved("circle").stagnation_points(0, direction)
    # Ahead, by symmetry: the root of the speed's 1e-9.
    assert_allclose(found, [(0.4, -0.2) - 0.5 * unit(direction)], atol=1e-8)


# --- drag, tables, references ---------------------------------------------------------------------


@EACH
def test_the_force_along_the_stream_is_the_stated_drag(name):
    model = solved(name)
    drag = np.sum(model.force(DIRECTIONS)[:, 0] * unit(DIRECTIONS), axis=-1)
    # The stated number: rounding.
    assert_allclose(drag, 1.2 * model.breadth(0, DIRECTIONS), rtol=1e-12)


def test_the_force_across_the_stream_is_the_lift_of_the_flow():
    model = ob.solve(ob.circle(1.0), circulation=-0.8, wakes=ob.Wake(1.2))
    force = model.force(DIRECTIONS)[:, 0]
    lift = np.sum(force * unit(DIRECTIONS + 90.0), axis=-1)
    # Kutta-Joukowski: 2 G to the left of a clockwise circulation, more by what the sources feel in
    # the vortex's flow, which by symmetry is along the stream alone.
    assert_allclose(np.sum(force * unit(DIRECTIONS), axis=-1), 1.2, rtol=1e-12)
    assert_array_less(1.0, lift)


@pytest.mark.parametrize("direction, coefficient", [
    (0.0, 1.0), (45.0, 1.5), (90.0, 2.0), (135.0, 1.25), (180.0, 0.5), (270.0, 0.75),
    (-45.0, 0.875), (360.0, 1.0), (405.0, 1.5), (719.0, 1.0 - 0.5 / 180),
])
def test_a_table_is_linear_between_its_directions_and_round_the_clock(direction, coefficient):
    wake = ob.Wake({0.0: 1.0, 90: 2.0, 180.0: 0.5})
    assert_allclose(wake.drag(direction), coefficient, rtol=1e-14)
    force = ob.solve(BODIES["circle"], wakes=wake, order=4).force(direction)[0]
    # The breadth of a default circle of order 4.
    assert_allclose(force @ unit(direction), coefficient, rtol=1e-9)


def test_a_table_takes_its_directions_in_any_order_and_turn():
    one = ob.Wake({-90.0: 0.5, 0: 1.0, 450.0: 2.0})
    other = ob.Wake({90.0: 2.0, 270.0: 0.5, 360.0: 1.0})
    assert one == other
    assert_allclose(ob.Wake({77.0: 0.3}).drag(np.array([0.0, 200.0])), 0.3)
    assert_allclose(ob.Wake(np.float32(0.5)).drag(np.zeros(2)), 0.5)


def test_a_table_turns_with_the_directions_of_one_call():
    model = ob.solve(BODIES["circle"], wakes=ob.Wake({0.0: 1.0, 90.0: 2.0}))
    directions = np.linspace(-180.0, 160.0, 9)
    expected = 0.5 * np.interp(directions, [0.0, 90.0], [1.0, 2.0], period=360.0)
    assert_allclose(flux_round(model, directions), expected, rtol=1e-9)


def test_a_reference_length_takes_the_place_of_the_breadth():
    model = ob.solve(BODIES["ellipse"], wakes=ob.Wake(1.0, reference=0.7))
    assert_allclose(flux_round(model, DIRECTIONS), 0.35, rtol=1e-9)
    assert_allclose(np.sum(model.force(DIRECTIONS)[:, 0] * unit(DIRECTIONS), axis=-1), 0.7,
                    rtol=1e-12)
    plain = ob.solve(BODIES["ellipse"], wakes=ob.Wake(1.0))
    assert_allclose(flux_round(plain, DIRECTIONS), 0.5 * plain.breadth(0, DIRECTIONS), rtol=1e-9)


# --- with circulation, edges, and the ground ------------------------------------------------------


def test_a_wake_beside_a_section_keeps_its_kutta_condition_and_moves_its_circulation():
    bodies = [ob.four_digit("2412"), ob.circle(0.2, (0.5, 0.8))]
    model = ob.solve(bodies, wakes=[None, ob.Wake(1.2)])
    speed = model.surface(0, DIRECTIONS).speed
    # The condition itself: rounding of the solution.
    assert_allclose(speed[:, 0] + speed[:, -1], 0, atol=1e-9)
    moved = model.circulation(DIRECTIONS) - ob.solve(bodies).circulation(DIRECTIONS)
    assert_allclose(moved[:, 1], 0, atol=1e-12)
    assert_array_less(1e-3, abs(moved[:, 0]))


def test_over_the_ground_a_wake_has_its_mirror_image():
    ground = 0.2
    bodies = [ob.circle(1.0, (0.0, 1.0)), ob.ellipse(0.8, 0.3, (1.5, 0.6), turned=20.0)]
    images = [ob.circle(1.0, (0.0, -0.6)), ob.ellipse(0.8, 0.3, (1.5, -0.2), turned=-20.0)]
    wake = ob.Wake(1.2)
    model = ob.solve(bodies, surroundings=ob.Ground(ground), wakes=[wake, None],
                     circulation=[0.5, 0.0])
    both = ob.solve(bodies + images, wakes=[wake, None] * 2, circulation=[0.5, 0.0, -0.5, 0.0])
    points = np.random.default_rng(2).uniform(-3, 3, (200, 2))
    points[:, 1] = ground + abs(points[:, 1])
    points = points[~ob.inside(model, points)]
    apart = points[:, None] - np.concatenate(model.walls)
    clear = np.hypot(*np.moveaxis(apart, -1, 0)).min(axis=1) > 0.05
    for direction in (0.0, 180.0):
        # The same equation, once with its images in the kernel: the rounding of the solution.
        assert_allclose(model.velocity(points, direction), both.velocity(points, direction),
                        atol=1e-10)
        assert_allclose(model.velocity_gradient(points[clear], direction),
                        both.velocity_gradient(points[clear], direction), atol=1e-8)
        difference = (model.stream_function(points, direction)
                      - both.stream_function(points, direction))
        assert_allclose(difference - difference[0], 0, atol=1e-10)
        assert_allclose(model.force(direction), both.force(direction)[:2], atol=1e-10)
        assert_allclose(model.circulation(direction), [0.5, 0.0], atol=1e-10)
        on_ground = np.stack([np.linspace(-4, 4, 33), np.full(33, ground)], axis=-1)
        assert_allclose(model.velocity(on_ground, direction)[:, 1], 0, atol=1e-13)


# --- refusals -------------------------------------------------------------------------------------


@pytest.mark.parametrize("arguments, message", [
    (dict(drag_coefficient=-0.1), r"drag_coefficient must be at least 0\.0, got -0\.1"),
    (dict(drag_coefficient=np.nan), r"drag_coefficient must be finite, got nan"),
    (dict(drag_coefficient="bluff"), r"drag_coefficient must be a number, got 'bluff'"),
    (dict(drag_coefficient=True), r"drag_coefficient must be a number, got True"),
    (dict(drag_coefficient={}), r"drag_coefficient is an empty table; give \{direction: coeff"),
    (dict(drag_coefficient={0.0: 1.0, 90.0: -2.0}), r"drag_coefficient.* negative, got -2"),
    (dict(drag_coefficient={0.0: 1.0, 360.0: 2.0}), r"drag_coefficient.* twice \(0 is 360\)"),
    (dict(drag_coefficient={0.0: "big"}), r"drag_coefficient's values must hold real numbers"),
    (dict(drag_coefficient={"north": 1.0}), r"drag_coefficient's directions must hold real"),
    (dict(drag_coefficient={np.inf: 1.0}), r"drag_coefficient's directions must be finite"),
    (dict(drag_coefficient=1.0, reference=0.0), r"reference must be greater than zero, got 0\.0"),
    (dict(drag_coefficient=1.0, reference=-2), r"reference must be greater than zero, got -2"),
    (dict(drag_coefficient=1.0, reference="d"), r"reference must be a number, got 'd'"),
])
def test_a_wake_that_cannot_be_is_refused_with_name_and_value(arguments, message):
    with pytest.raises(ob.InputError, match=message):
        ob.Wake(**arguments)


def test_a_wake_cannot_be_changed():
    wake = ob.Wake(1.2)
    with pytest.raises(AttributeError):
        wake.reference = 3.0
