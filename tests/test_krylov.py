"""The iteration gives what the factorisation gives, in steps that nodes and gaps do not add to."""

import numpy as np
import pytest

import offbody as ob
from offbody import krylov
from offbody.equation import Equation
from offbody.krylov import ConvergenceError, Iteration, solve
from offbody.laying import lay, measure
from offbody.panels import assemble


def laid(outlines, surroundings=None, panels=None, order=16):
    """The panels of a list of outlines, ``panels`` on each."""
    surroundings = surroundings or ob.OpenStream()
    walls, gaps = measure(outlines, surroundings)
    return assemble(walls, lay(walls, gaps, [panels] * len(walls)), order, surroundings)


def onset(panels):
    """Tangential velocities (2, N) of the two unit onset directions."""
    return np.stack([panels.tangents.real, panels.tangents.imag])


def right_hand_side(panels, tangential, circulation=None):
    """As the equation has it: without each body's mean, and with the circulation taken off."""
    right = -tangential
    for body in range(panels.bodies):
        part = panels.node_slice(body)
        length = panels.weights[part].sum()
        right[:, part] -= (right[:, part] @ panels.weights[part])[:, None] / length
        if circulation is not None:
            right[:, part] -= circulation[:, [body]] / length
    return right


def assert_as_factorised(panels, surroundings, circulation=None):
    """The iteration's strengths are those of the factorisation."""
    tangential = onset(panels)
    right = right_hand_side(panels, tangential, circulation)
    found = solve(panels, surroundings, right, tolerance=1e-11)
    expected = Equation(panels, surroundings).vortices(tangential, circulation)
    # The residual of 1e-11 grows by the condition number, here up to about 100 in the largest norm.
    np.testing.assert_allclose(found, expected, atol=1e-9 * np.abs(expected).max(), rtol=0)


def steps(panels, surroundings=None):
    """Steps of the iteration for the two onset directions, to 1e-9."""
    iteration, counts = Iteration(panels, surroundings or ob.OpenStream(), 1e-9), []
    for row in right_hand_side(panels, onset(panels)):
        iteration(row[None])
        counts.append(len(iteration.residuals))
    return np.array(counts)


def lobed(radius_change=0.1, lobes=20):
    """A round body with a wavy outline."""

    def points(s):
        angle = 2 * np.pi * np.asarray(s)
        radius = 1 + radius_change * np.cos(lobes * angle)
        return np.stack([radius * np.cos(angle), radius * np.sin(angle)], axis=-1)

    return ob.curve(points)


def row_of_ellipses(count):
    """Ellipses 2:1, each a tenth of its length from the next."""
    return [ob.ellipse(1.0, 0.5, centre=(1.1 * k, 0.0)) for k in range(count)]


BODIES = {
    "ellipse": [ob.ellipse(2.0, 1.0)],
    "lobes": [lobed(lobes=7)],
    "edge": [ob.four_digit("2412")],
    "two": [ob.circle(2.0), ob.circle(1.0, centre=(1.51, 0.0))],
}


@pytest.mark.parametrize("order", [1, 8, 16])
@pytest.mark.parametrize("name", BODIES)
def test_the_strengths_are_those_of_the_factorisation(name, order):
    assert_as_factorised(laid(BODIES[name], order=order), ob.OpenStream())


@pytest.mark.parametrize(
    "surroundings", [ob.Ground(-0.6), ob.Duct(-1.0, 1.4), ob.Row(1.3)],
    ids=["ground", "duct", "row"],
)
def test_walls_and_copies_round_the_bodies_are_as_in_the_factorisation(surroundings):
    bodies = [ob.circle(1.0), ob.ellipse(0.6, 0.3, centre=(0.9, 0.1))]
    assert_as_factorised(laid(bodies, surroundings), surroundings)


def test_a_circulation_wanted_is_the_circulation_found():
    panels = laid(BODIES["two"])
    wanted = np.array([[0.7, -0.2], [0.0, 3.0]])
    assert_as_factorised(panels, ob.OpenStream(), wanted)
    gamma = solve(panels, ob.OpenStream(), right_hand_side(panels, onset(panels), wanted))
    found = [
        gamma[:, panels.node_slice(b)] @ panels.weights[panels.node_slice(b)] for b in range(2)
    ]
    np.testing.assert_allclose(np.transpose(found), wanted, atol=1e-9)  # of the residual's 1e-10


@pytest.mark.parametrize("body", [[lobed()], row_of_ellipses(8)], ids=["lobes", "ellipses"])
def test_more_nodes_do_not_cost_more_steps(body):
    coarse = steps(laid(body, panels=240 // len(body)))
    fine = steps(laid(body, panels=1920 // len(body)))
    np.testing.assert_array_less(fine, coarse + 3)


def test_a_narrower_gap_does_not_cost_more_steps():
    counts = [
        steps(laid([ob.circle(2.0), ob.circle(1.0, centre=(1.5 + gap, 0.0))])).max()
        for gap in (1e-1, 1e-3, 1e-5)
    ]
    assert max(counts) <= counts[0] + 2, counts


def test_a_nearer_ground_does_not_cost_more_steps():
    counts = []
    for gap in (1e-1, 1e-3):
        ground = ob.Ground(-0.5 - gap)
        counts.append(steps(laid([ob.circle(1.0)], ground), ground).max())
    assert max(counts) <= counts[0] + 3, counts


def test_a_sharp_edge_does_not_cost_many_steps():
    assert steps(laid([ob.four_digit("0012")])).max() <= 16   # 40 without groups


def test_groups_too_large_to_be_solved_at_once_are_parted(monkeypatch):
    panels = laid([ob.circle(1.0, centre=(1.0001 * k, 0.0)) for k in range(3)])
    whole = steps(panels).max()
    monkeypatch.setattr(krylov, "GROUP", 160)
    iteration = Iteration(panels, ob.OpenStream())
    own = [count for _, count, _ in iteration._groups]
    assert max(own) <= 160, own
    assert steps(panels).max() <= 3 * whole


def test_no_right_hand_side_gives_no_strength():
    panels = laid(BODIES["ellipse"])
    gamma = solve(panels, ob.OpenStream(), np.zeros((2, len(panels.nodes))))
    np.testing.assert_array_equal(gamma, 0.0)


def test_an_iteration_given_up_says_how_far_it_came(monkeypatch):
    monkeypatch.setattr(krylov, "STEPS", 3)
    panels = laid(BODIES["two"])
    with pytest.raises(ConvergenceError, match="after 3 steps") as caught:
        solve(panels, ob.OpenStream(), right_hand_side(panels, onset(panels)))
    residuals = caught.value.residuals
    assert len(residuals) == 3 and np.all(np.diff(residuals) < 0) and residuals[-1] > 1e-10
    assert isinstance(caught.value, RuntimeError)


def test_a_right_hand_side_with_nan_is_given_up():
    panels = laid(BODIES["ellipse"])
    with pytest.raises(ConvergenceError):
        solve(panels, ob.OpenStream(), np.full((1, len(panels.nodes)), np.nan))


def test_memory_grows_like_the_number_of_nodes():
    sizes = [
        Iteration(laid(BODIES["ellipse"], panels=panels), ob.OpenStream())._near.data.nbytes
        for panels in (60, 240)
    ]
    np.testing.assert_allclose(sizes[1] / sizes[0], 4.0, rtol=0.05)
