"""Bearings and directions: the compass against the plane."""

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_less

import offbody as ob

COMPASS = [  # bearing the wind comes from, vector of the stream (x east, y north)
    (0.0, (0, -1)),
    (90.0, (-1, 0)),
    (180.0, (0, 1)),
    (270.0, (1, 0)),
    (225.0, (np.sqrt(0.5), np.sqrt(0.5))),
]


@pytest.mark.parametrize(("bearing", "stream"), COMPASS)
def test_wind_from_a_bearing_blows_to_the_opposite_side(bearing, stream):
    angle = np.radians(ob.from_bearing(bearing))
    # Rounding of sine and cosine.
    assert_allclose((np.cos(angle), np.sin(angle)), stream, atol=1e-15)


def test_there_and_back_is_the_same_angle_within_the_turn():
    angles = np.linspace(-720, 720, 977)
    # Each way rounds once at the size of 720.
    assert_allclose(ob.to_bearing(ob.from_bearing(angles)) % 360, angles % 360, atol=1e-12)
    assert_allclose(ob.from_bearing(ob.to_bearing(angles)) % 360, angles % 360, atol=1e-12)


def test_a_clockwise_turn_of_the_bearing_turns_the_direction_clockwise():
    assert ob.from_bearing(40.0) - ob.from_bearing(50.0) == 10.0


@pytest.mark.parametrize("convert", [ob.from_bearing, ob.to_bearing])
def test_results_stay_below_the_full_turn(convert):
    awkward = np.array([270.0, np.nextafter(270, 300), 270 + 1e-13, -90.0, 630.0, 1e6])
    assert_array_less(convert(awkward), 360.0)
    assert_array_less(-1e-300, convert(awkward))


@pytest.mark.parametrize("convert", [ob.from_bearing, ob.to_bearing])
def test_scalars_come_back_as_scalars_and_arrays_keep_their_shape(convert):
    assert isinstance(convert(10), float)
    assert convert(np.zeros((2, 3))).shape == (2, 3)
    assert convert([]).shape == (0,)


@pytest.mark.parametrize("wrong", [np.nan, [0.0, np.inf], "north", None, True])
def test_what_is_not_an_angle_is_refused_by_name(wrong):
    with pytest.raises(ob.InputError, match="bearing"):
        ob.from_bearing(wrong)
    with pytest.raises(ob.InputError, match="direction"):
        ob.to_bearing(wrong)
