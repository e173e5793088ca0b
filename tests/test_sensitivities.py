"""Derivatives of survey columns: exact circles, motions of the whole, and differences.

Differences are central, of three steps, extrapolated (Richardson) to the sixth power of the step.
"""

import numpy as np
import pytest

import exact
import offbody as ob
from offbody.sensitivities import sensitivity

COLUMNS = ("speed_ratio", "direction_error", "component_error", "static_error")
SECTION = ob.curve(exact.as_function(exact.KarmanTrefftz()), sharp=0.0)


def difference(function, step):
    def central(h):
        return (function(h) - function(-h)) / (2 * h)

    first, second, third = (central(step / 2**k) for k in range(3))
    return (16 * (4 * third - second) / 3 - (4 * second - first) / 3) / 15


def column(found, name):
    return [parameter for parameter, _ in found.parameters].index(name)


def assert_meets_differences(outlines, sensors, directions, bound=1e-6, steps=0.01,
                             bearings=False, **options):
    """Compare every column's derivative with differences of models solved and surveyed anew."""
    def surveyed(bodies, angles):
        model = ob.solve(bodies, **options)
        named = {"bearings" if bearings else "directions": angles}
        return ob.survey(model, sensors, **named)

    angles = np.array(directions, float)
    table = surveyed(outlines, angles)
    found = sensitivity(table)
    ways = {"direction": (1.0, lambda h: (outlines, angles + h))}
    if table.model.surroundings.walls:
        assert np.isnan(found.speed_ratio[..., column(found, "direction")]).all()
        ways = {}

    def with_body(body, change):
        return lambda h: ([change(one, h) if k == body else one
                           for k, one in enumerate(outlines)], angles)

    for body, place in enumerate(found.about):
        ways[f"body {body} x"] = steps, with_body(body, lambda one, h: one.moved(h, 0.0))
        ways[f"body {body} y"] = steps, with_body(body, lambda one, h: one.moved(0.0, h))
        ways[f"body {body} turn"] = 1.0, with_body(
            body, lambda one, h, place=place: one.turned(h, place))
        ways[f"body {body} size"] = steps, with_body(
            body, lambda one, h, place=place: one.scaled(1 + h, place))
    for name, (step, way) in ways.items():
        tables = {}

        def moved(h, way=way, tables=tables):
            tables[h] = surveyed(*way(h)) if h not in tables else tables[h]
            return tables[h]

        for quantity in COLUMNS:
            expected = difference(lambda h, q=quantity, f=moved: getattr(f(h), q), step)
            result = getattr(found, quantity)[..., column(found, name)]
            scale = max(1.0, np.nanmax(np.abs(expected), initial=0.0))
            np.testing.assert_allclose(result, expected, rtol=0, atol=bound * scale,
                                       err_msg=f"{quantity} by {name}")


SENSORS = [ob.PointSensor(-1.6, 0.7), ob.PathSensor((-1.5, -1.2), (-1.0, -1.4)),
           ob.DiscSensor((0.1, 1.9), 0.1), ob.WallPort(0, 0.3)]
TURNED = ob.ellipse(2.0, 1.0, turned=20.0)


# Differences of models good to 1e-13, in steps of 0.01 and a degree: 1e-9 and better.
@pytest.mark.parametrize("bearings", [False, True])
def test_one_body_with_circulation_meets_differences(bearings):
    assert_meets_differences([TURNED], SENSORS, [0.0, 37.0, 160.0], 1e-9, bearings=bearings,
                             panels=30, circulation=1.3)


def test_two_bodies_meet_differences():
    second = ob.ellipse(1.0, 0.5, centre=(1.0, -1.2))
    assert_meets_differences([TURNED, second], [*SENSORS, ob.WallPort(1, 0.6)], [0.0, 160.0],
                             1e-9, panels=26, circulation=[1.3, None])


@pytest.mark.parametrize("surroundings, directions", [
    (ob.Ground(-0.2), [0.0, 180.0]), (ob.Duct(-0.2, 2.2), [0.0, 180.0]),
    (ob.Row(2.4), [0.0, 50.0, 180.0])], ids=["ground", "duct", "row"])
def test_images_move_with_their_body(surroundings, directions):
    sensors = [ob.PointSensor(-1.1, 0.7), ob.DiscSensor((0.1, 1.9), 0.1), ob.WallPort(0, 0.3)]
    assert_meets_differences([ob.ellipse(1.0, 0.5, (0.0, 1.0), 20.0)], sensors, directions, 1e-9,
                             surroundings=surroundings, panels=26, circulation=1.3)


# With an edge the Kutta condition is met to about 1e-10, over steps of 0.01: 1e-7.
@pytest.mark.parametrize("surroundings, directions", [
    (ob.OpenStream(), [0.0, 6.0]), (ob.Row(1.5), [20.0, 170.0])], ids=["open", "row"])
def test_the_circulation_of_a_section_follows(surroundings, directions):
    sensors = [ob.PointSensor(-0.3, 0.3), ob.PointSensor(0.5, -0.3), ob.WallPort(0, 0.3)]
    assert_meets_differences([SECTION], sensors, directions, 1e-6, surroundings=surroundings,
                             panels=50)


def test_a_section_with_flap_and_a_tube_keep_step_with_a_motion_of_the_whole():
    flap = SECTION.scaled(0.4).turned(-15.0).moved(1.05, -0.1)
    tube = ob.circle(0.3, centre=(0.5, 0.6))
    places = np.array([[-0.3, 0.3], [0.5, -0.3], [1.2, 0.3]])
    model = ob.solve([SECTION, flap, tube])
    table = ob.survey(model, [ob.PointSensor(*place) for place in places], [0.0, 5.0])
    found = sensitivity(table, about=(0.0, 0.0))

    def together(quantity, motion):
        return sum(getattr(found, quantity)[..., column(found, f"body {body} {motion}")]
                   for body in range(3))

    for quantity in ("speed_ratio", "direction_error", "static_error"):
        values = getattr(found, quantity)
        by_x, by_y, by_direction = np.moveaxis(values[..., :3], -1, 0)
        scale = np.abs(values).max()
        # Bodies and sensors moved together, or grown together, see nothing; nor do they, turned
        # with the stream: exact but for the panels, 1e-8 with an edge, and its slope.
        bound = 1e-6 * scale
        np.testing.assert_allclose(together(quantity, "x") + by_x, 0, atol=bound)
        np.testing.assert_allclose(together(quantity, "y") + by_y, 0, atol=bound)
        grown = places[:, 0] * by_x + places[:, 1] * by_y
        np.testing.assert_allclose(together(quantity, "size") + grown, 0, atol=bound)
        turned = np.radians(places[:, 0] * by_y - places[:, 1] * by_x)
        np.testing.assert_allclose(together(quantity, "turn") + turned + by_direction, 0,
                                   atol=bound)


@pytest.mark.parametrize("place", [(-3.0, 0.0), (0.4, 1.7), (1.02, 0.3)])
def test_a_circle_has_the_derivatives_of_its_exact_field(place):
    table = ob.survey(ob.solve(ob.circle(2.0), panels=20), ob.PointSensor(*place), [0.0, 30.0])
    found = sensitivity(table)
    z, stream = complex(*place), np.exp(1j * np.radians(table.directions))
    w = stream.conj() - stream / z**2            # u - i v, radius 1 (Milne-Thomson)
    by_size, by_place = -2 * stream / z**2, 2 * stream / z**3
    speed = np.abs(w)

    def of_speed(change):
        return (change * w.conj()).real / speed

    def of_direction(change):   # degrees
        return np.degrees((change / w).conj().imag)

    for quantity, derivative in (("speed_ratio", of_speed), ("direction_error", of_direction)):
        values = getattr(found, quantity)[:, 0]
        expected = {"sensor x": by_place, "sensor y": 1j * by_place, "body 0 x": -by_place,
                    "body 0 y": -1j * by_place, "body 0 turn": 0.0 * w, "body 0 size": by_size}
        for name, change in expected.items():
            # The field of 20 panels is good to 1e-14, its gradient next to the wall to 1e-11.
            np.testing.assert_allclose(values[:, column(found, name)], derivative(change),
                                       rtol=0, atol=1e-9, err_msg=f"{quantity} by {name}")


def test_a_port_on_a_circle_sees_its_pressure_turn_with_the_body():
    table = ob.survey(ob.solve(ob.circle(2.0)), ob.WallPort(0, 0.15), [10.0])
    found = sensitivity(table)
    angle = 2 * np.pi * 0.15 - np.radians(10.0)
    by_angle = np.radians(-8 * np.sin(angle) * np.cos(angle))   # of 1 - 4 sin^2, per degree
    expected = [np.nan, np.nan, -by_angle, 0.0, 0.0, by_angle, 0.0]
    np.testing.assert_allclose(found.static_error[0, 0], expected, rtol=0, atol=1e-10)
    assert np.isnan(found.speed_ratio).all()


def test_what_has_no_tangent_is_refused():
    sensor = ob.PointSensor(-3.0, 0.0)
    circle = ob.circle(1.0)
    with pytest.raises(ob.InputError, match="table must be what ob.survey returned"):
        sensitivity(ob.solve(circle))
    with pytest.raises(ob.InputError, match="wakes or bracings"):
        sensitivity(ob.survey(ob.solve(circle, wakes=ob.Wake(1.0)), sensor))
    with pytest.raises(ob.InputError, match="order = 1.*order 2 or more"):
        sensitivity(ob.survey(ob.solve(circle, order=1), sensor))
    with pytest.raises(ob.InputError, match=r"about has shape \(3, 2\)"):
        sensitivity(ob.survey(ob.solve(circle), sensor), about=np.zeros((3, 2)))
