"""The exact solutions are exact: each is checked against what defines it, not against a solver.

A field that is analytic outside, tangential (or as blown) on the walls, of the stated circulation
and undisturbed far away is the only such field, so these four checks leave nothing open.
"""

import mpmath
import numpy as np
import pytest

import exact

DIRECTIONS = (0.0, 25.0, 90.0, -133.0)
SIDES = np.linspace(0, 1, 401)[1:-1] ** 2  # crowded at s = 0, short of the edge itself
SECTIONS = (exact.KarmanTrefftz(), exact.KarmanTrefftz(bending=0.04, edge=0.0))
BODIES = (
    exact.Circle(0.7, 0.2 - 0.4j, 1.3),
    exact.Ellipse(2.0, 0.2, 0.3 + 0.1j, 17.0, 0.8),
    exact.Ellipse(0.5, 2.0, 0.1j, -40.0),
    *SECTIONS,
)
PAIRS = (
    exact.TwoCircles.with_gap(1.0, 0.5, 0.25),
    exact.TwoCircles.with_gap(1.0, 1.0, 0.05),
    exact.TwoCircles.with_gap(1.0, 0.5, 0.001),
    exact.TwoCircles.above_ground(1.0, 0.25),
)
ROUND = np.exp(2j * np.pi * np.arange(64) / 64)


def circulation_of(solution, direction):
    value = getattr(solution, "circulation", 0.0)
    return value(direction) if callable(value) else value


def round_trip(velocity, centre, radius, count=4096):
    """Circulation and flux of a closed circle by the trapezoidal rule, spectrally accurate."""
    turn = np.exp(2j * np.pi * np.arange(count) / count)
    total = np.mean(velocity(centre + radius * turn) * 2j * np.pi * radius * turn)
    return total.real, total.imag


def assert_mean_value(velocity, points, radii):
    """An analytic function is the mean of its values round any circle that it is analytic in."""
    ring = velocity(points[..., None] + np.asarray(radii)[..., None] * ROUND)
    np.testing.assert_allclose(ring.mean(axis=-1), velocity(points), rtol=1e-12, atol=1e-12)


@pytest.mark.parametrize("direction", DIRECTIONS)
@pytest.mark.parametrize("body", BODIES)
def test_no_flow_crosses_the_wall_and_the_speed_along_it_is_the_surface_speed(body, direction):
    along = body.velocity(body.wall(SIDES), direction) * body.tangent(SIDES)
    # 1e-9: wall points next to an edge at x = 1 carry rounding of 1e-16 of the chord, at a
    # distance of 1e-9 from it.
    scale = 1 + abs(body.surface_speed(SIDES, direction)).max()
    np.testing.assert_allclose(along.imag / scale, 0, atol=1e-9)
    np.testing.assert_allclose(along.real / scale,
                               body.surface_speed(SIDES, direction) / scale, atol=1e-9)


@pytest.mark.parametrize("section", SECTIONS)
def test_a_section_is_exact_to_rounding_next_to_its_edge_in_coordinates_from_the_edge(section):
    near = np.concatenate([np.logspace(-12, -2, 50), 1 - np.logspace(-9, -2, 50)])
    along = section.velocity_from_edge(section.wall_from_edge(near), 7.0) * section.tangent(near)
    # Rounding of 1 - s, 1e-16 of 1e-9 at the least, is the largest error left.
    np.testing.assert_allclose(along, section.surface_speed(near, 7.0), rtol=1e-10, atol=1e-12)


@pytest.mark.parametrize("body", BODIES)
def test_the_tangent_follows_the_wall_counter_clockwise(body):
    s, step = np.linspace(0.02, 0.98, 50), 1e-6
    along = body.wall(s + step) - body.wall(s - step)
    # Central differences over 1e-6 of the parameter: good to about 1e-8.
    np.testing.assert_allclose(along / abs(along), body.tangent(s), atol=1e-7)
    corners = body.wall(np.linspace(0, 1, 100, endpoint=False))
    area = np.sum((np.conj(corners) * np.roll(corners, -1)).imag) / 2
    assert area > 0, f"area {area}: the outline runs clockwise"


@pytest.mark.parametrize("direction", DIRECTIONS)
@pytest.mark.parametrize("body", BODIES)
@pytest.mark.parametrize("distance", [1e-12, 1e-6, 1e-3, 0.1, 10.0])
def test_the_velocity_is_continuous_up_to_the_wall_and_analytic_outside(body, direction, distance):
    # Away from the edge of a section, whose own scale is the distance to it.
    s = np.linspace(0.1, 0.9, 33)
    points = body.offset_points(s, distance)
    if distance < 1e-5:
        # The gradient, at most the greatest speed over the radius of the nose, times the
        # distance; and rounding.
        np.testing.assert_allclose(body.velocity(points, direction) * body.tangent(s),
                                   body.surface_speed(s, direction),
                                   atol=3000 * distance + 1e-11)
    assert_mean_value(lambda z: body.velocity(z, direction), points,
                      np.full(len(s), 0.5 * min(distance, 1.0)))


@pytest.mark.parametrize("direction", DIRECTIONS)
@pytest.mark.parametrize("body", BODIES)
def test_circulation_flux_and_far_field_are_as_stated(body, direction):
    around, flux = round_trip(lambda z: body.velocity(z, direction), 0.3, 3.0)
    expected = circulation_of(body, direction)
    np.testing.assert_allclose([around, flux], [expected, 0], atol=1e-12)
    far = 1e6 * np.exp(1j * np.arange(8))
    undisturbed = np.exp(-1j * np.radians(direction))
    swirl = -1j * expected / (2 * np.pi * far)
    # The doublet left over is of the order of the size squared over distance squared, and the
    # circulation's arm of a size adds as much.
    np.testing.assert_allclose(body.velocity(far, direction) - undisturbed, swirl, atol=5e-12)


@pytest.mark.parametrize("body", BODIES[:3])
def test_the_gradient_is_the_derivative_of_the_velocity(body):
    points = body.offset_points(np.linspace(0, 1, 33), 0.02)
    radius = 0.01
    ring = body.velocity(points[:, None] + radius * ROUND, 25.0)
    derivative = (ring / ROUND).mean(axis=-1) / radius  # Cauchy's formula
    # Half-way to the wall, the 64-point rule is exact to 2^-64; rounding is divided by 0.01.
    np.testing.assert_allclose(body.gradient(points, 25.0), derivative, rtol=1e-10, atol=1e-10)


@pytest.mark.parametrize("thickness", [0.02, 0.2, 1.0])
def test_an_ellipse_along_the_stream_has_lambs_greatest_speed(thickness):
    ellipse = exact.Ellipse(2.0, thickness)
    # Lamb, Hydrodynamics: 1 + thickness / length, at the ends of the shorter axis.
    np.testing.assert_allclose(ellipse.surface_speed([0.25, 0.75]),
                               [-1 - thickness / 2, 1 + thickness / 2], rtol=1e-13)


@pytest.mark.parametrize("section", SECTIONS)
def test_a_section_agrees_with_the_map_evaluated_in_forty_digits(section):
    mpmath.mp.dps = 40
    n = 2 - mpmath.mpf(section.edge_angle) / 180
    centre = mpmath.mpc(-section.bluntness, section.bending)
    radius, tilt = abs(1 - centre), -mpmath.arg(1 - centre)
    stream = mpmath.expj(mpmath.radians(5))
    lift = -4 * mpmath.pi * radius * mpmath.sin(mpmath.radians(5) + tilt)

    def power_map(c):
        # The branch is carried from far away, where the ratio's logarithm is small.
        power = mpmath.exp(n * (mpmath.log(1 - 1 / c) - mpmath.log(1 + 1 / c)))
        return n * (1 + power) / (1 - power)

    # 0.999: some 1e-5 chord from the edge; beyond the last the points are far from the body.
    for s, outward in [(0.001, 1.0), (0.2, 1.001), (0.5, 1.000001), (0.7, 1.5), (0.999, 1), (0, 9)]:
        c = centre + outward * radius * mpmath.expj(2 * mpmath.pi * mpmath.mpf(s) - tilt)
        z = power_map(c)
        on_circle = (1 / stream - stream * (radius / (c - centre)) ** 2
                     - 1j * lift / (2 * mpmath.pi * (c - centre)))
        expected = complex(on_circle / mpmath.diff(power_map, c))
        found = section.velocity_from_edge(section._scale * complex(z - n), 5.0)
        np.testing.assert_allclose(found, expected, rtol=1e-12)
    np.testing.assert_allclose(section.circulation(5.0), section._scale * float(lift), rtol=1e-14)


@pytest.mark.parametrize("section", SECTIONS)
def test_a_section_is_of_unit_chord_about_twelve_percent_thick_with_the_stated_edge(section):
    s = np.linspace(0, 1, 4001)[1:-1]
    wall = section.wall_from_edge(s)
    np.testing.assert_allclose(wall.real.min(), -1, atol=1e-6)  # sampled at 1 / 4000
    stations = np.linspace(-0.95, -0.05, 200)
    upper = np.interp(stations, wall[:2000].real[::-1], wall[:2000].imag[::-1])
    lower = np.interp(stations, wall[2000:].real, wall[2000:].imag)
    np.testing.assert_allclose((upper - lower).max(), 0.12, atol=0.001)
    upper_slope, lower_slope = np.angle(-section.tangent(1e-6)), np.angle(section.tangent(1 - 1e-6))
    # The sides turn by about their distance from the edge to the power 1 / n.
    np.testing.assert_allclose(np.degrees(lower_slope - upper_slope), 12.0, atol=1e-3)


@pytest.mark.parametrize("direction", DIRECTIONS)
@pytest.mark.parametrize("pair", PAIRS)
def test_two_circles_let_no_flow_through_and_have_no_circulation(pair, direction):
    for index, circle in enumerate(pair.bodies):
        s = np.linspace(0, 1, 512, endpoint=False)
        along = pair.velocity(circle.wall(s), direction) * circle.tangent(s)
        # Rounding, magnified by the doublets that crowd within the square root of the gap.
        np.testing.assert_allclose(along.imag, 0, atol=1e-11)
        np.testing.assert_allclose(along.real, pair.surface_speed(index, s, direction))
        # A wall is the widest circle round one body alone: its average shows the circulation;
        # 4000 points, 20 to the square root of the narrowest gap, are exact to rounding.
        fine = np.linspace(0, 1, 4000, endpoint=False)
        np.testing.assert_allclose(pair.surface_speed(index, fine, direction).mean(), 0, atol=1e-12)


@pytest.mark.parametrize("pair", PAIRS)
def test_two_circles_are_analytic_outside_and_undisturbed_far_away(pair):
    gap = abs(np.subtract(*pair.centres)) - sum(pair.radii)
    axis = np.subtract(*pair.centres) / abs(np.subtract(*pair.centres))
    middle = pair.centres[1] + axis * (pair.radii[1] + gap / 2)
    points = np.array([middle, 5 + 2j, -4j])
    assert_mean_value(lambda z: pair.velocity(z, 25.0), points, [0.2 * gap, 0.5, 0.5])
    far = 1e6 * np.exp(1j * np.arange(8))
    # The doublets together: area over distance squared.
    np.testing.assert_allclose(pair.velocity(far, 25.0), np.exp(-1j * np.radians(25)), atol=1e-11)


def test_a_circle_above_ground_lets_no_flow_through_the_ground():
    pair = exact.TwoCircles.above_ground(1.0, 0.25)
    np.testing.assert_allclose(pair.velocity(np.linspace(-5, 5, 101)).imag, 0, atol=1e-14)


def test_circles_a_gap_of_many_radii_apart_are_each_as_if_alone():
    pair = exact.TwoCircles.with_gap(1.0, 1.0, 1e6)
    alone = exact.Circle(1.0, pair.centres[0])
    points = alone.offset_points(np.linspace(0, 1, 9), 0.1)
    # The other one's doublet, 1 / distance squared.
    np.testing.assert_allclose(pair.velocity(points, 30.0), alone.velocity(points, 30.0),
                               atol=5e-12)


REPEATED = (
    exact.CircleRow(1.0, 4.0, 0.2 + 0.1j, 2.0),
    exact.CircleInDuct(1.0, -2.0, 2.0),
    exact.CircleInDuct(0.5, -1.0, 2.0, 0.3 + 0.2j, 1.1),
)


@pytest.mark.parametrize("circle", REPEATED)
def test_a_repeated_circle_lets_no_flow_through_and_has_its_circulation(circle):
    s = np.linspace(0, 1, 256, endpoint=False)
    along = circle.velocity(circle.wall(s), 180.0) * circle.tangent(s)
    # 24 multipoles, each 0.27 of the last, of speeds up to 3.
    np.testing.assert_allclose(along.imag, 0, atol=1e-13)
    np.testing.assert_allclose(along.real, circle.surface_speed(s, 180.0), rtol=1e-14)
    around = 2 * np.pi * circle.radius * along.real.mean()
    np.testing.assert_allclose(around, circle.circulation, rtol=0, atol=1e-14)


@pytest.mark.parametrize("circle", REPEATED)
def test_a_repeated_circle_repeats_and_is_analytic_between_itself_and_its_copies(circle):
    points = circle.centre + np.array([1.2 + 0.1j, -1.4j, -3.0 + 0.5j]) * circle.radius
    assert_mean_value(lambda z: circle.velocity(z, 180.0), points,
                      np.array([0.15, 0.2, 1.0]) * circle.radius)
    period = circle.pitch if isinstance(circle, exact.CircleRow) else (
        2 * (circle.upper - circle.lower))
    np.testing.assert_allclose(circle.velocity(points + 1j * period, 180.0),
                               circle.velocity(points, 180.0), rtol=1e-13)


@pytest.mark.parametrize("circle", REPEATED[1:])
def test_a_circle_in_a_duct_lets_no_flow_through_the_walls_nor_moves_the_stream_far_away(circle):
    along = np.linspace(-9, 9, 101)
    for wall in (circle.lower, circle.upper):
        np.testing.assert_allclose(circle.velocity(along + 1j * wall).imag, 0, atol=1e-15)
    np.testing.assert_allclose(circle.velocity(np.array([-1e3, 1e3]) + 0j), 1, rtol=1e-15)


@pytest.mark.parametrize("direction", [0.0, 30.0, 200.0])
def test_a_row_of_circles_leaves_the_stream_far_upstream_as_given(direction):
    circle = REPEATED[0]
    upstream = -1e3 if np.cos(np.radians(direction)) > 0 else 1e3
    np.testing.assert_allclose(circle.velocity(upstream + 0.3j, direction),
                               np.exp(-1j * np.radians(direction)), rtol=0, atol=1e-15)


def test_a_row_of_circles_far_apart_is_a_circle_alone():
    row, alone = exact.CircleRow(1.0, 1e5, 0.2j, 0.7, terms=4), exact.Circle(1.0, 0.2j, 0.7)
    points = alone.offset_points(np.linspace(0, 1, 9), 0.4)
    # Half the row's turning, G/(2 pitch) = 3.5e-6, has happened at the circle, which at most
    # doubles it.
    np.testing.assert_allclose(row.velocity(points), alone.velocity(points), rtol=0, atol=7e-6)


@pytest.mark.parametrize("place", [1.05 + 0.0j, -2 + 3j])
def test_a_source_and_vortex_near_a_circle_send_nothing_through_it_nor_round_it(place):
    solution = exact.SingularityNearCircle(place, source=0.7, vortex=-1.1)
    s = np.linspace(0, 1, 1024, endpoint=False)
    along = solution.velocity(solution.wall(s)) * solution.tangent(s)
    np.testing.assert_allclose(along.imag, 0, atol=1e-13)
    np.testing.assert_allclose(along.real, solution.surface_speed(s))
    np.testing.assert_allclose(along.real.mean(), 0, atol=1e-13)
    round_all = round_trip(solution.velocity, 0.0, 10.0)
    np.testing.assert_allclose(round_all, [-1.1, 0.7], atol=1e-13)
    round_it = round_trip(solution.onset, place, 0.01)
    np.testing.assert_allclose(round_it, [-1.1, 0.7], atol=1e-13)


def test_a_blown_circle_blows_what_it_is_told_with_no_circulation():
    def blown(angle):
        return 0.2 + np.cos(angle - 0.4) + 0.3 * np.sin(5 * angle) + np.exp(np.sin(angle))

    solution = exact.BlownCircle(blown, radius=1.7, terms=64)
    s = np.linspace(0, 1, 101)
    along = solution.velocity(solution.wall(s)) * solution.tangent(s)
    # W = (speed along the wall + i outward speed) / tangent; rounding.
    np.testing.assert_allclose(along.imag, blown(2 * np.pi * s), atol=1e-14)
    np.testing.assert_allclose(along.real, solution.surface_speed(s), atol=1e-14)
    around, flux = round_trip(solution.velocity, 0.0, 5.0)
    np.testing.assert_allclose([around, flux], [0, solution.flux], atol=1e-13)
    angles = 2 * np.pi * np.arange(1000) / 1000
    np.testing.assert_allclose(solution.flux, 2 * np.pi * 1.7 * blown(angles).mean(), rtol=1e-13)


def test_a_uniformly_blown_circle_is_a_source():
    solution = exact.BlownCircle(np.ones_like, radius=2.0)
    z = np.array([2.0, 3j, -50 + 1j])
    np.testing.assert_allclose(solution.velocity(z), 2 / z, rtol=1e-14)


def test_walls_and_velocities_turn_into_pairs_and_back():
    z = np.array([[1 + 2j, -3j]])
    np.testing.assert_array_equal(exact.as_complex(exact.as_pairs(z)), z)
    np.testing.assert_array_equal(exact.as_velocity(3 - 4j), [3, 4])
    assert exact.as_function(exact.Circle())(np.zeros((4, 3))).shape == (4, 3, 2)
