"""ob.Tolerance on random Fourier outlines and pairs of them, judged by far finer panels.

``bench/tolerance.py`` does the same with two hundred of them.
"""

import warnings

import numpy as np
import pytest

import offbody as ob
from random_bodies import judged, random_bodies

TOLERANCES = (1e-4, 1e-5, 1e-6, 1e-7, 1e-8, 1e-9)


@pytest.mark.parametrize("seeds, tolerances", [
    (range(200, 236, 2), TOLERANCES * 3), (range(201, 213, 2), TOLERANCES[:4] + TOLERANCES[:2])])
def test_random_smooth_bodies_and_pairs_meet_their_tolerance(seeds, tolerances):
    ratios = []
    for seed, tolerance in zip(seeds, tolerances, strict=True):
        bodies = random_bodies(seed)
        model = ob.solve(bodies, panels=ob.Tolerance(tolerance))
        assert model.estimated_error <= tolerance
        ratios.append(judged(bodies, model)[0] / tolerance)
    # Promised of two hundred: 95 percent of them, and none misses by more than ten times. Of a
    # dozen or so one may miss.
    assert np.sum(np.array(ratios) > 1.0) <= 1, np.round(ratios, 2)
    np.testing.assert_array_less(ratios, 10.0)


@pytest.mark.parametrize("body, tolerances", [
    (ob.circle(1.0), (1e-3, 1e-6, 1e-10)),
    (ob.ellipse(2.0, 0.02), (1e-3, 1e-5, 1e-8)),
    (ob.polygon([(0, 0), (1, 0), (1, 1), (0, 1)], 0.1), (1e-3, 1e-5)),
    (ob.four_digit("0012"), (1e-3, 1e-5, 1e-7)),
    (ob.four_digit("4412"), (1e-3, 1e-4)),
])
def test_a_tighter_tolerance_takes_more_nodes_and_meets_it(body, tolerances):
    models = [ob.solve(body, panels=ob.Tolerance(one)) for one in tolerances]
    np.testing.assert_array_less([one.estimated_error for one in models], tolerances)
    nodes = [one.node_count for one in models]
    assert nodes == sorted(set(nodes)), nodes


def test_a_model_says_how_it_met_its_tolerance():
    model = ob.solve(ob.ellipse(2.0, 0.2), panels=ob.Tolerance(1e-10))
    assert model.solves > 1, "the first guess is made for 1e-9"
    assert model.order == 16
    assert sum(model.panel_counts) * model.order == model.node_count
    assert model.estimated_error < 1e-10


def test_a_tolerance_beyond_rounding_is_warned_of_with_what_was_reached():
    with pytest.warns(ob.AccuracyWarning, match=r"Tolerance\(1e-12\) was not met: the estimated"):
        model = ob.solve(ob.ellipse(2.0, 0.05), panels=ob.Tolerance(1e-12))
    assert 1e-12 < model.estimated_error < 1e-9


def test_a_tolerance_that_is_met_is_not_warned_of():
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        ob.solve(ob.circle(1.0), panels=ob.Tolerance(1e-12))


@pytest.mark.parametrize("wrong", [0.0, 1e-13, 0.2, float("nan"), "1e-6", None])
def test_a_tolerance_out_of_its_limits_is_refused(wrong):
    with pytest.raises(ob.InputError, match="surface_speed"):
        ob.Tolerance(wrong)
