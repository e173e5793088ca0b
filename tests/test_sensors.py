"""Sensors alone: their samples as quadratures, and what they refuse."""

import dataclasses

import numpy as np
import pytest
from numpy.testing import assert_allclose

import offbody as ob
from exact import Circle, as_complex

CIRCLE = Circle(radius=1.0)
PATH = ((1.2, 0.6), (0.3, 1.7))
SENSORS = {
    "point": ob.PointSensor(1.0, 2.0),
    "path": ob.PathSensor(*PATH),
    "two paths": ob.CrossedPaths([PATH, ((0.5, 1.0), (1.0, 1.5))]),
    "three paths": ob.CrossedPaths([PATH, ((0.5, 1.0), (1.0, 1.5)), ((0.5, 1.3), (1.2, 1.3))]),
    "disc": ob.DiscSensor((1.0, 1.0), 0.3),
}
VECTOR_SENSORS = {kind: sensor for kind, sensor in SENSORS.items() if kind != "path"}


def sensed(sensor, velocity):
    """The sensed vector, complex, in a field given as a function u + i v of z."""
    at_samples = velocity(as_complex(sensor.points))
    return np.sum(sensor.direct * at_samples + sensor.turned * np.conj(at_samples))


def exact_path_mean(start, end, direction=0.0):
    """Mean component past the circle: the difference of the potential of z + 1/z over the length.

    Milne-Thomson, Theoretical Hydrodynamics (circle in a stream).
    """
    stream = np.exp(1j * np.radians(direction))
    z = np.array([complex(*start), complex(*end)])
    potential = (z * np.conj(stream) + stream / z).real
    return (potential[1] - potential[0]) / abs(z[1] - z[0])


@pytest.mark.parametrize("sensor", SENSORS.values(), ids=SENSORS.keys())
def test_weights_sum_to_one_about_the_centre(sensor):
    # Rounding of a sum over at most 144 samples.
    assert_allclose(sensor.weights.sum(), 1.0, rtol=1e-14)
    assert_allclose(sensor.weights @ sensor.points, sensor.centre, atol=1e-14)


@pytest.mark.parametrize("sensor", VECTOR_SENSORS.values(), ids=VECTOR_SENSORS.keys())
def test_a_vector_sensor_reads_a_uniform_stream_exactly(sensor):
    # Rounding of a sum over at most 144 samples.
    assert_allclose(sensed(sensor, lambda z: np.full(z.shape, 0.6 - 0.8j)), 0.6 - 0.8j, rtol=1e-14)


def test_a_path_reads_only_the_component_of_a_uniform_stream_along_it():
    reading = sensed(ob.PathSensor((0, 0), (0, 2)), lambda z: np.full(z.shape, 0.6 - 0.8j))
    # Rounding of a sum over 48 samples.
    assert_allclose(reading, -0.8j, atol=1e-15)


@pytest.mark.parametrize(
    ("length", "clearance", "tolerance"),
    [(1.0, 0.02, 1e-13), (4.0, 0.02, 1e-11), (10.0, 0.02, 1e-4), (10.0, 2.0, 1e-13)],
)
def test_a_path_past_a_circle_averages_to_the_difference_of_potential(
    length, clearance, tolerance
):
    # Tolerances: those of the docstring, in radii of the circle.
    start, end = (-length / 2, 1 + clearance), (length / 2, 1 + clearance)
    for direction in (0.0, 35.0, 90.0):
        path = ob.PathSensor(start, end)
        reading = sensed(path, lambda z, d=direction: np.conj(CIRCLE.velocity(z, d)))
        expected = exact_path_mean(start, end, direction)
        assert_allclose(reading / path.axis, expected, atol=tolerance)


def test_crossed_paths_solve_for_the_vector_of_the_mean_components():
    pairs = [PATH, ((0.5, 1.1), (1.0, 1.5)), ((0.5, 1.3), (1.2, 1.3))]
    axes = np.array([np.subtract(end, start) for start, end in pairs])
    axes /= np.hypot(*axes.T)[:, None]
    components = [exact_path_mean(start, end, 20.0) for start, end in pairs]
    for count in (2, 3):
        fit, *_ = np.linalg.lstsq(axes[:count], components[:count], rcond=None)
        crossed = ob.CrossedPaths(pairs[:count])
        reading = sensed(crossed, lambda z: np.conj(CIRCLE.velocity(z, 20.0)))
        # The paths' own quadrature, at a third of a radius from the wall, reaches rounding.
        assert_allclose((reading.real, reading.imag), fit, atol=1e-13)


@pytest.mark.parametrize(
    ("radius", "clearance", "tolerance"),
    [(0.3, 0.02, 1e-6), (1.0, 0.5, 1e-7), (3.0, 0.5, 1e-4)],
)
def test_the_mean_vector_over_a_disc_is_that_at_its_centre(radius, clearance, tolerance):
    # The mean value property of harmonic functions.
    disc = ob.DiscSensor((0.0, 1 + clearance + radius), radius)
    reading = sensed(disc, lambda z: np.conj(CIRCLE.velocity(z)))
    expected = np.conj(CIRCLE.velocity(complex(*disc.centre)))
    # Equal angles are exact up to the twentieth harmonic, which the outer rings of a large disc
    # near the wall still feel.
    assert_allclose(reading, expected, atol=tolerance)


@pytest.mark.parametrize(
    ("radius", "clearance", "tolerance"),
    [(0.3, 0.02, 2e-5), (1.0, 0.02, 1e-4), (1.0, 0.5, 1e-7), (0.3, 0.5, 1e-11)],
)
def test_the_mean_speed_over_a_disc_is_that_of_a_fine_rule(radius, clearance, tolerance):
    # Tolerances: those of the docstring, in radii of the circle.
    share, weight = np.polynomial.legendre.leggauss(40)
    rings = np.sqrt((share + 1) / 2)[:, None] * np.exp(2j * np.pi * np.arange(400) / 400)
    for side in np.exp(1j * np.radians([0.0, 30.0, 60.0, 90.0])):
        centre = (1 + clearance + radius) * side
        disc = ob.DiscSensor((centre.real, centre.imag), radius)
        speed = disc.weights @ np.abs(CIRCLE.velocity(as_complex(disc.points)))
        fine = np.abs(CIRCLE.velocity(centre + radius * rings)).mean(axis=1) @ weight / 2
        assert_allclose(speed, fine, atol=tolerance)


WALL = np.exp(2j * np.pi * np.arange(200) / 200)


@pytest.mark.parametrize(
    ("sensor", "meets"),
    [
        (ob.PathSensor((-2, 0.5), (2, 0.5)), True),
        (ob.PathSensor((-2, 0), (0.1, 0.2)), True),
        (ob.PathSensor((-2, 1.01), (2, 1.01)), False),
        (ob.PathSensor((1.01, 0), (2, 0)), False),
        (ob.PathSensor((-3, 0.5), (-2, 0.5)), False),
        (ob.CrossedPaths([((2, 0), (3, 0)), ((2, -1), (3, 1))]), False),
        (ob.CrossedPaths([((2, 0), (3, 0)), ((0, -2), (2, 2))]), True),
        (ob.DiscSensor((2, 0), 0.99), False),
        (ob.DiscSensor((2, 0), 1.01), True),
        (ob.DiscSensor((0, 0), 5.0), True),
        (ob.PointSensor(0, 0), False),
    ],
)
def test_a_sensor_meets_a_wall_where_its_path_or_disc_reaches_it(sensor, meets):
    assert sensor.meets(WALL) is meets


def test_a_disc_meets_the_middle_of_a_long_straight_wall():
    square = np.array([-10 - 10j, 10 - 10j, 10 + 10j, -10 + 10j])
    assert ob.DiscSensor((0, 10.5), 0.6).meets(square)
    assert not ob.DiscSensor((0, 10.5), 0.4).meets(square)


@pytest.mark.parametrize(
    ("build", "message"),
    [
        (lambda: ob.PointSensor(np.nan, 0), "x must be finite, got nan"),
        (lambda: ob.PointSensor(0, "1"), "y must be a number, got '1'"),
        (lambda: ob.PointSensor(0, 1, reads="sped"), "reads = 'sped'.*did you mean 'speed'"),
        (lambda: ob.PointSensor(0, 1, reads=None), "reads = None"),
        (lambda: ob.PointSensor(0, 1, name=" "), "name must be a text"),
        (lambda: ob.PointSensor(0, 1, name=3), "name must be a text.*got 3"),
        (lambda: ob.PathSensor((0, 0, 0), (1, 1)), r"start must have shape"),
        (lambda: ob.PathSensor((0, 0), (0, np.inf)), "end must be finite"),
        (lambda: ob.PathSensor((0, 1), (0, 1)), r"end = \(0.0, 1.0\) is also the start"),
        (lambda: ob.CrossedPaths([PATH]), "two or three paths, got 1"),
        (lambda: ob.CrossedPaths([PATH] * 4), "two or three paths, got 4"),
        (lambda: ob.CrossedPaths(7), "two or three paths"),
        (lambda: ob.CrossedPaths([PATH, 7]), r"paths\[1\] must be a PathSensor"),
        (lambda: ob.CrossedPaths([PATH, ((0, 0), (0, 0))]), r"paths\[1\]: end = "),
        (lambda: ob.CrossedPaths([PATH, PATH]), "cross at 0 degrees at most"),
        (lambda: ob.CrossedPaths([PATH, PATH[::-1]]), "cross at .*degrees at most"),
        (
            lambda: ob.CrossedPaths([((0, 0), (1, 0)), ((0, 0), (-1, 0.1))]),
            "cross at 5.71 degrees at most",
        ),
        (lambda: ob.DiscSensor((0, 0), 0), "radius must be greater than zero, got 0"),
        (lambda: ob.DiscSensor((0, 0), -1), "radius must be greater than zero, got -1"),
        (lambda: ob.DiscSensor(3, 1), "centre must"),
        (lambda: ob.WallPort(0.5, 0.5), "body must be the index of a body, got 0.5"),
        (lambda: ob.WallPort(True, 0.5), "body must be the index of a body, got True"),
        (lambda: ob.WallPort(0, 1.5), "arc_fraction must be at most 1, got 1.5"),
        (lambda: ob.WallPort(0, -0.1), "arc_fraction must be at least 0, got -0.1"),
    ],
)
def test_what_cannot_be_a_sensor_is_refused_with_name_and_value(build, message):
    with pytest.raises(ob.InputError, match=message):
        build()


@pytest.mark.parametrize("sensor", SENSORS.values(), ids=SENSORS.keys())
def test_a_sensor_cannot_be_changed_and_compares_by_value(sensor):
    field = dataclasses.fields(sensor)[0].name
    with pytest.raises(dataclasses.FrozenInstanceError):
        setattr(sensor, field, 0.0)
    assert dataclasses.replace(sensor) == sensor
    assert hash(dataclasses.replace(sensor)) == hash(sensor)


def test_numpy_numbers_and_points_are_stored_as_plain_numbers():
    assert ob.PointSensor(np.float32(1), np.int64(2)) == ob.PointSensor(1.0, 2.0)
    assert ob.PathSensor(np.zeros(2), np.ones(2)) == ob.PathSensor((0, 0), [1, 1])
    assert ob.WallPort(np.int64(1), 0) == ob.WallPort(1, 0.0)
