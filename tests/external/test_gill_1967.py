"""Sensors beside a stack: Gill, Olsson, Sela and Suda, Bull. Amer. Meteor. Soc. 48 (1967) 665-674.

Three diameters out from its face, they are within 10 percent in speed and 10 degrees in direction
over an arc of about 180 degrees.
"""

import numpy as np
import pytest

import offbody as ob

DIAMETER = 2.0


def longest_arc(good):
    """Most neighbouring directions, one degree apart and all round, which are good."""
    if good.all():
        return len(good)
    bad = np.flatnonzero(~good)
    return int(np.diff(np.append(bad, bad[0] + len(good))).max() - 1)


# Common practice: about 1.2 below the drag crisis, 0.3 to 0.7 beyond it.
@pytest.mark.parametrize("drag_coefficient", [None, 0.5, 1.2])
def test_a_sensor_three_diameters_from_a_stack_is_good_over_half_the_horizon(drag_coefficient):
    wakes = None if drag_coefficient is None else [ob.Wake(drag_coefficient)]
    model = ob.solve([ob.circle(DIAMETER)], wakes=wakes)
    sensor = ob.PointSensor(3.5 * DIAMETER, 0.0)
    table = ob.survey(model, [sensor], np.arange(360.0))
    good = (table.trust[:, 0]
            & (abs(table.speed_ratio[:, 0] - 1) < 0.10)
            & (abs(table.direction_error[:, 0]) < 10))
    assert longest_arc(good) >= 180, f"good over {longest_arc(good)} degrees only"
