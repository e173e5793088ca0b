"""Uncertainty of corrected readings: first order against closed forms, draws, and whole records."""

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal, assert_array_less

import offbody as ob
from exact import Circle

TUBE = 0.3
BEARINGS = np.arange(0.0, 360.0)


def at(bearing, distance):
    """A place as seen from the mast."""
    angle = np.radians(bearing)
    return distance * np.sin(angle), distance * np.cos(angle)


CUP = ob.PointSensor(*at(195, 1.5), name="cup", reads="speed")
VANE = ob.PointSensor(*at(285, 1.2), name="vane", reads="direction")
SONIC = ob.PointSensor(*at(240, 1.4), name="sonic")
MOUNTING = {
    "boom_foot": (0.0, 0.0),
    "boom_length": ob.Rectangular(0.03),
    "boom_angle": ob.Rectangular(2.0),
}


@pytest.fixture(scope="module")
def tube():
    return ob.solve(ob.circle(TUBE))


@pytest.fixture(scope="module")
def table(tube):
    return ob.survey(tube, [CUP, VANE, SONIC], bearings=BEARINGS)


def exact_reading(place, bearing, radius=TUBE / 2):
    """Ratio and clockwise direction error at a place, x + i y, by the closed form."""
    direction = 270.0 - np.asarray(bearing)
    stream = np.exp(1j * np.radians(direction))
    velocity = np.conj(Circle(radius).velocity(place, direction))
    return np.abs(velocity), -np.angle(velocity / stream, deg=True)


def half_turn(degrees):
    return (degrees + 180.0) % 360.0 - 180.0


def slope(function, x, step):
    return (function(x + step) - function(x - step)) / (2 * step)


# --- first order ----------------------------------------------------------------------------------


def test_sensitivities_are_the_derivatives_of_the_closed_form(table):
    result = ob.uncertainty(table, **MOUNTING, alignment=ob.Normal(0.4))
    place, foot_angle = complex(SONIC.x, SONIC.y), 1j * np.radians(1.0) * complex(SONIC.x, SONIC.y)
    unit = place / abs(place)
    for bearing in (30.0, 222.0, 290.0):
        ratio = exact_reading(place, bearing)[0]
        error_slope = slope(lambda b: exact_reading(place, b)[1], bearing, 1e-3)
        ratio_slope = slope(lambda b: exact_reading(place, b)[0], bearing, 1e-3)
        if not table.trust[int(bearing), 2]:
            continue
        for name, step in (("boom length", unit), ("boom angle", foot_angle)):
            def moved(x, which, step=step, bearing=bearing):
                return exact_reading(place + x * step, bearing)[which]

            turn = slope(lambda x: moved(x, 1), 0.0, 1e-4) / (1 + error_slope)
            share = slope(lambda x: moved(x, 0), 0.0, 1e-4) / ratio - ratio_slope / ratio * turn
            speed = {line["source"]: line for line in result.budget("sonic", bearing)}
            direction = {
                line["source"]: line for line in result.budget("sonic", bearing, "direction")
            }
            # The slopes against the direction are central differences over two degrees: 2e-4.
            assert_allclose(speed[name]["sensitivity"], share, rtol=1e-3, atol=1e-6)
            assert_allclose(direction[name]["sensitivity"], turn, rtol=1e-3, atol=1e-5)
        assert_allclose(direction["alignment"]["sensitivity"], 1 / (1 + error_slope), rtol=1e-4)


def test_a_cup_has_its_direction_from_the_vane(table):
    result = ob.uncertainty(table, alignment={"vane": ob.Normal(1.0)})
    bearing = 240.0
    ratio, _ = exact_reading(complex(CUP.x, CUP.y), bearing)
    place = complex(VANE.x, VANE.y)
    turn = 1 / (1 + slope(lambda b: exact_reading(place, b)[1], bearing, 1e-3))
    steep = slope(lambda b: exact_reading(complex(CUP.x, CUP.y), b)[0], bearing, 1e-3) / ratio
    assert_allclose(result.speed[240, 0], abs(steep * turn), rtol=1e-3)
    assert_allclose(result.direction[240, 1], turn, rtol=1e-3)
    other = ob.uncertainty(table, alignment={"vane": ob.Normal(1.0)},
                           direction_from={"cup": "sonic"})
    assert_allclose(other.speed[240, 0], 0.0, atol=1e-5)


def test_what_is_not_trusted_has_no_uncertainty(table):
    result = ob.uncertainty(table, speed_calibration=ob.Normal(0.01))
    assert_array_equal(np.isnan(result.direction[:, 1]), ~table.trust[:, 1])
    assert_array_equal(np.isnan(result.speed[:, 0]), ~(table.trust[:, 0] & table.trust[:, 1]))
    assert np.isnan(result.speed[:, 1]).all() and np.isnan(result.direction[:, 0]).all()
    assert_array_equal(result.dominant("cup") == "", np.isnan(result.speed[:, 0]))


def test_a_budget_adds_up_and_names_what_dominates(table):
    result = ob.uncertainty(table, **MOUNTING, alignment=ob.Rectangular(1.0),
                            speed_calibration=ob.Normal(0.002), model_speed=ob.Rectangular(0.001))
    for quantity, combined in (("speed", result.speed), ("direction", result.direction)):
        lines = result.budget("sonic", 300.0, quantity)
        assert_allclose(sum(line["share"] for line in lines), 1.0, rtol=1e-12)
        total = np.sqrt(sum(line["contribution"] ** 2 for line in lines))
        assert_allclose(total, combined[300, 2], rtol=1e-12)
        assert result.dominant("sonic", quantity)[300] == lines[0]["source"]
        for line in lines:
            product = line["sensitivity"] * line["standard_uncertainty"]
            assert_allclose(line["contribution"], product, rtol=1e-12)
    assert_allclose(result.expanded_speed, 2 * result.speed, rtol=1e-15)
    shares = np.stack(list(result.shares("sonic").values()))
    trusted = table.trust[:, 2]
    assert_allclose(shares[:, trusted].sum(axis=0), 1.0, rtol=1e-12)


def test_a_bodys_size_enters_by_two_surveys_as_the_closed_form_says(table, tube):
    changed = ob.survey(ob.solve(ob.circle(TUBE + 1e-4)), table.sensors, bearings=BEARINGS)
    size = ob.InfluenceQuantity.from_surveys(
        "mast diameter", ob.Rectangular(0.005), table, changed, 1e-4
    )
    place = complex(SONIC.x, SONIC.y)
    ratio = slope(lambda d: exact_reading(place, BEARINGS, d / 2)[0], TUBE, 1e-4)
    error = slope(lambda d: exact_reading(place, BEARINGS, d / 2)[1], TUBE, 1e-4)
    # A one-sided difference over a three-thousandth of the diameter.
    assert_allclose(size.speed_ratio[:, 2], ratio, rtol=0, atol=1e-3 * np.abs(ratio).max())
    assert_allclose(size.direction_error[:, 2], error, rtol=0, atol=1e-3 * np.abs(error).max())
    result = ob.uncertainty(table, influences=[size])
    (line, *_) = result.budget("sonic", 60.0 + 180.0)
    assert line["source"] == "mast diameter" and line["sensor"] == "all"


def test_the_tables_own_numerical_error_is_counted_as_a_half_width(tube):
    table = ob.survey(tube, SONIC, bearings=BEARINGS)
    plain = ob.uncertainty(table)
    object.__setattr__(table, "numerical_error", np.full((360, 1), 0.003))
    result = ob.uncertainty(table)
    added = np.sqrt(result.speed**2 - plain.speed**2)[table.trust]
    # A half-width of 0.003 of the undisturbed speed, and the distortion of a hundredth: along the
    # stream it changes the ratio, across it the direction.
    assert_allclose(added, 0.003 / np.sqrt(3), rtol=0.02)
    added = np.sqrt(result.direction**2 - plain.direction**2)[table.trust]
    assert_allclose(added, np.degrees(0.003) / np.sqrt(3), rtol=0.03)


def test_the_straight_lines_between_the_tables_angles_are_counted(tube):
    coarse = ob.survey(tube, SONIC, bearings=np.arange(0, 360, 10))
    result = ob.uncertainty(coarse)
    between = np.arange(0.0, 360.0, 0.25)
    ratio, error = exact_reading(complex(SONIC.x, SONIC.y), between)
    corrected = ob.Correction.from_survey(coarse).correct(ratio, (between + error) % 360.0)
    ok = corrected.reason == ob.Reason.OK
    worst = np.abs(corrected.speed[ok] - 1).max()
    limit = np.nanmax(result.speed) * np.sqrt(3)
    # The half-width is that of the curve's greatest bend, to the order of the step squared.
    assert 0.9 * worst < limit < 1.5 * worst, (worst, limit)


def test_over_a_ground_the_direction_is_taken_as_known():
    model = ob.solve(ob.circle(0.3, (0.0, 1.0)), surroundings=ob.Ground())
    table = ob.survey(model, ob.PointSensor(-2.0, 1.0, name="probe"))
    result = ob.uncertainty(table, alignment=ob.Normal(1.0), speed_calibration=ob.Normal(0.01))
    assert_allclose(result.speed[0], 0.01, rtol=1e-12)


# --- Monte Carlo ----------------------------------------------------------------------------------


@pytest.mark.parametrize("sensor", ["cup", "sonic"])
def test_draws_agree_with_the_first_order_where_the_field_is_nearly_linear(table, sensor):
    result = ob.uncertainty(
        table, boom_foot=(0.0, 0.0), boom_length=ob.Normal(0.01), boom_angle=ob.Normal(0.5),
        alignment=ob.Normal(0.5), speed_calibration=ob.Normal(0.0005),
    )
    bearings = [225.0, 240.0, 320.0]
    drawn = result.monte_carlo(sensor, bearings, draws=10_000)
    # The standard deviation of 10,000 draws is good to 0.7 percent: three times that, and 0.5
    # percent for what is not linear.
    assert_allclose(drawn.speed_standard, drawn.speed_first, rtol=0.026)
    assert_allclose(drawn.direction_standard, drawn.direction_first, rtol=0.026)
    assert drawn.speed_agrees().all() and drawn.direction_agrees().all()
    assert_array_equal(drawn.refused, 0)


def test_draws_show_where_the_first_order_fails(tube):
    # Upstream on the centreline of a bearing along the boom the ratio is stationary against a turn
    # of the boom: first order says nothing, a turn of 20 degrees does.
    table = ob.survey(tube, SONIC, bearings=BEARINGS)
    result = ob.uncertainty(table, boom_foot=(0.0, 0.0), boom_angle=ob.Rectangular(20.0))
    drawn = result.monte_carlo("sonic", 240.0, draws=2000)
    assert drawn.speed_standard > 5 * drawn.speed_first
    assert not drawn.speed_agrees()


def test_every_kind_of_sensor_is_moved_and_surveyed_anew(tube):
    x, y = at(240, 1.4)
    sensors = [
        ob.DiscSensor((x, y), 0.1, name="disc"),
        ob.CrossedPaths([((x - 0.1, y), (x + 0.1, y)), ((x, y - 0.1), (x, y + 0.1))], name="two"),
    ]
    table = ob.survey(tube, sensors, bearings=np.arange(0, 360, 5))
    result = ob.uncertainty(table, position=ob.Rectangular(0.02))
    for name in ("disc", "two"):
        drawn = result.monte_carlo(name, 285.0, draws=1000)
        # 1,000 draws: 2.2 percent; slopes from a step of five degrees: 1 percent.
        assert_allclose(drawn.speed_standard, drawn.speed_first, rtol=0.08)
        assert_allclose(drawn.direction_standard, drawn.direction_first, rtol=0.08)


def test_the_same_seed_gives_the_same_draws(table):
    result = ob.uncertainty(table, position=ob.Rectangular(0.02))
    one, other, third = (result.monte_carlo("sonic", 300.0, 200, seed) for seed in (1, 1, 2))
    assert_array_equal(one.speed_errors, other.speed_errors)
    assert np.any(one.speed_errors != third.speed_errors)


# --- whole records --------------------------------------------------------------------------------

STATED = {
    **MOUNTING,
    "position": ob.Rectangular(0.005),
    "alignment": ob.Rectangular(1.0),
    "speed_calibration": ob.Normal(0.001),
    "direction_calibration": ob.Normal(0.5),
}


def drawn_mounts(sensor, generator, count):
    """Places, speed factors and turns of a sensor that was mounted as stated, by its own code."""
    foot_to_sensor = complex(sensor.x, sensor.y)
    length = abs(foot_to_sensor) + generator.uniform(-0.03, 0.03, count)
    angle = np.angle(foot_to_sensor) + np.radians(generator.uniform(-2, 2, count))
    place = length * np.exp(1j * angle)
    place += generator.uniform(-0.005, 0.005, count) + 1j * generator.uniform(-0.005, 0.005, count)
    factor = 1 + generator.normal(0, 0.001, count)
    turn = generator.uniform(-1, 1, count) + generator.normal(0, 0.5, count)
    return place, factor, turn


def test_the_stated_band_covers_95_percent_of_ten_thousand_mounts(table):
    generator = np.random.default_rng(20)
    count = 10_000
    doubt = ob.uncertainty(table, **STATED)
    correction = ob.Correction.from_survey(table, ["cup", "vane"], uncertainty=doubt)
    bearing = generator.uniform(0.0, 360.0, count)
    speed = generator.uniform(3.0, 20.0, count)
    cup, factor, _ = drawn_mounts(CUP, generator, count)
    vane, _, turn = drawn_mounts(VANE, generator, count)
    sensed_speed = speed * factor * exact_reading(cup, bearing)[0]
    sensed = (bearing + exact_reading(vane, bearing)[1] + turn) % 360.0
    corrected = correction.correct(sensed_speed, sensed)
    ok = corrected.reason == ob.Reason.OK
    inside = np.abs(corrected.speed - speed)[ok] <= 2 * corrected.speed_uncertainty[ok]
    turned = np.abs(half_turn(corrected.direction - bearing))[ok]
    inside_turn = turned <= 2 * corrected.direction_uncertainty[ok]
    print(f"coverage: speed {inside.mean():.4f}, direction {inside_turn.mean():.4f}, "
          f"{ok.sum()} trusted")
    assert 0.93 < inside.mean() < 0.97, inside.mean()
    assert 0.93 < inside_turn.mean() < 0.97, inside_turn.mean()


def test_a_corrected_record_is_biased_by_less_than_stated_in_every_trusted_sector(table):
    generator = np.random.default_rng(7)
    count = 400_000
    doubt = ob.uncertainty(table, **STATED)
    correction = ob.Correction.from_survey(table, ["cup", "vane"], uncertainty=doubt)
    (cup,), (factor,), _ = drawn_mounts(CUP, generator, 1)
    (vane,), _, (turn,) = drawn_mounts(VANE, generator, 1)
    bearing = generator.uniform(0.0, 360.0, count)
    speed = 8.0 * (1 + 0.02 * generator.standard_normal(count))
    noise = 1 + 0.01 * generator.standard_normal(count)
    sensed_speed = speed * noise * factor * exact_reading(cup, bearing)[0]
    sensed = (bearing + exact_reading(vane, bearing)[1] + turn) % 360.0
    missing = generator.random((2, count)) < 0.02
    sensed_speed[missing[0]] = sensed[missing[1]] = np.nan
    corrected = correction.correct(sensed_speed, sensed)
    assert_array_equal(corrected.reason[missing[0]], ob.Reason.MISSING)
    assert_array_equal(corrected.direction_reason[missing[1]], ob.Reason.MISSING)
    ok = corrected.reason == ob.Reason.OK
    sector = (bearing // 10).astype(int)
    raw, biases, turns, limits, turn_limits = [], [], [], [], []
    for each in np.unique(sector[ok]):
        here = ok & (sector == each)
        if here.sum() < 5000:  # the edge of a lee
            continue
        raw.append(np.mean(sensed_speed[here] / speed[here]) - 1)
        biases.append(np.mean(corrected.speed[here] / speed[here]) - 1)
        turns.append(np.mean(half_turn(corrected.direction - bearing)[here]))
        limits.append(2 * np.mean(corrected.speed_uncertainty[here] / corrected.speed[here]))
        turn_limits.append(2 * np.mean(corrected.direction_uncertainty[here]))
    assert len(biases) > 25
    # The noise of a sector's mean, 1 percent over the root of 5,000, is within 1.5e-4.
    assert_array_less(np.abs(biases), np.array(limits) + 1.5e-4)
    assert_array_less(np.abs(turns), turn_limits)
    # And it was worth it: uncorrected, some sector is beyond any such band.
    assert np.abs(raw).max() > 2 * max(limits)


# --- refusals -------------------------------------------------------------------------------------


@pytest.mark.parametrize("arguments, words", [
    ({"alignment": 1.0}, "bare number"),
    ({"alignment": {"vain": ob.Normal(1.0)}}, "did you mean 'vane'"),
    ({"boom_length": ob.Normal(0.01)}, "boom_foot is missing"),
    ({"boom_length": ob.Normal(0.01), "boom_foot": (SONIC.x, SONIC.y)}, "own place"),
    ({"direction_from": {"cup": "vain"}}, "did you mean 'vane'"),
    ({"direction_from": {"sonic": "cup"}}, "reads no direction"),
    ({"influences": [1.0]}, "InfluenceQuantity"),
    ({"influences": [ob.InfluenceQuantity("wear", ob.Normal(1.0), np.ones(3), np.ones(3))]},
     "shape"),
])
def test_sources_that_cannot_be_used_are_named(table, arguments, words):
    with pytest.raises(ob.InputError, match=words):
        ob.uncertainty(table, **arguments)


def test_questions_about_what_is_not_there_are_refused(table):
    result = ob.uncertainty(table, alignment=ob.Normal(1.0))
    with pytest.raises(ob.InputError, match="did you mean 'vane'"):
        result.budget("vain", 0.0)
    with pytest.raises(ob.InputError, match="quantity"):
        result.budget("vane", 0.0, "pressure")
    with pytest.raises(ob.InputError, match="angle of the table"):
        result.monte_carlo("sonic", 0.5)
    with pytest.raises(ob.InputError, match="not trusted"):
        result.monte_carlo("sonic", 60.0)
    with pytest.raises(ob.InputError, match="half_width"):
        ob.Rectangular(-1.0)
    with pytest.raises(ob.InputError, match="finite"):
        ob.Normal(np.nan)
