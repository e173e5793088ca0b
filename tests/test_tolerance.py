"""ob.Tolerance on random Fourier outlines and pairs of them, judged by far finer panels.

``bench/tolerance.py`` does the same with two hundred of them.
"""

import warnings

import numpy as np
import pytest
from random_bodies import judged, random_bodies

import offbody as ob

TOLERANCES = (1e-4, 1e-5, 1e-6, 1e-7, 1e-8, 1e-9)


@pytest.mark.parametrize("pair", [False, True])
def test_random_smooth_bodies_meet_their_tolerance(pair):
    ratios = []
    for k, tolerance in enumerate(TOLERANCES * 2):
        bodies = random_bodies(200 + 2 * k + pair)
        model = ob.solve(bodies, panels=ob.Tolerance(tolerance))
        assert model.estimated_error <= tolerance
        ratios.append(judged(bodies, model)[0] / tolerance)
    # Promised of two hundred: 95 percent of them, and none misses by more than ten times. Of a
    # dozen one may miss.
    assert np.sum(np.array(ratios) > 1.0) <= 1, np.round(ratios, 2)
    np.testing.assert_array_less(ratios, 10.0)


@pytest.mark.parametrize("body", [
    ob.circle(1.0), ob.ellipse(2.0, 0.02), ob.polygon([(0, 0), (1, 0), (1, 1), (0, 1)], 0.1),
    ob.four_digit("4412")])
def test_a_tighter_tolerance_takes_more_nodes_and_meets_it(body):
    models = [ob.solve(body, panels=ob.Tolerance(one)) for one in (1e-3, 1e-5, 1e-7)]
    np.testing.assert_array_less([one.estimated_error for one in models], [1e-3, 1e-5, 1e-7])
    nodes = [one.node_count for one in models]
    assert nodes[0] < nodes[1] < nodes[2], nodes


def test_a_model_says_how_it_met_its_tolerance():
    model = ob.solve(ob.ellipse(2.0, 0.2), panels=ob.Tolerance(1e-10))
    assert model.solves > 1, "the first guess is made for 1e-9"
    assert model.order == 16
    assert sum(model.panel_counts) * model.order == model.node_count
    assert model.estimated_error < 1e-10


def test_a_tolerance_beyond_rounding_is_warned_of_with_what_was_reached():
    with pytest.warns(ob.AccuracyWarning, match=r"Tolerance\(1e-12\) was not met: the estimated"):
        model = ob.solve(ob.ellipse(2.0, 0.005), panels=ob.Tolerance(1e-12))
    assert 1e-12 < model.estimated_error < 1e-8


def test_a_tolerance_that_is_met_is_not_warned_of():
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        ob.solve(ob.circle(1.0), panels=ob.Tolerance(1e-12))


@pytest.mark.parametrize("wrong", [0.0, 1e-13, 0.2, float("nan"), "1e-6", None])
def test_a_tolerance_out_of_its_limits_is_refused(wrong):
    with pytest.raises(ob.InputError, match="surface_speed"):
        ob.Tolerance(wrong)
