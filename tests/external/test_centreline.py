"""The distances upstream of a tube that potential flow asks for (exact: 1 - (a / r)^2)."""

import numpy as np
import pytest

import offbody as ob

DIAMETER = 0.3
# The default solve of a circle is far better than this; a hundredth of the least effect looked at.
TOLERANCE = 1e-6


def speed_ratio(points, direction=0.0):
    model = ob.solve([ob.circle(DIAMETER)])
    return np.linalg.norm(model.velocity(points, direction), axis=-1)


@pytest.mark.parametrize("diameters, ratio", [(5.0, 0.99), (np.sqrt(50), 0.995)])
def test_the_speed_is_one_percent_low_at_5_and_half_a_percent_at_7_diameters(diameters, ratio):
    upstream = np.array([-diameters * DIAMETER, 0.0])
    np.testing.assert_allclose(speed_ratio(upstream), ratio, rtol=0, atol=TOLERANCE)


@pytest.mark.parametrize("direction", [0.0, 72.0])
def test_the_speed_at_45_degrees_to_the_stream_errs_in_second_order_only(direction):
    radii = DIAMETER * np.array([1.0, 2.0, 5.0])
    bearing = np.radians(direction + 180 + 45)
    points = radii[:, None] * np.array([np.cos(bearing), np.sin(bearing)])
    expected = np.sqrt(1 + (DIAMETER / 2 / radii) ** 4)
    np.testing.assert_allclose(speed_ratio(points, direction), expected, rtol=0, atol=TOLERANCE)
