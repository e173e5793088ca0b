"""Bracing is a source spread along a face, beside bodies and between walls; against exact flow.

That is of a circle and point sources outside it, by the circle theorem (Milne-Thomson,
Theoretical Hydrodynamics).
"""

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal
from scipy.integrate import quad_vec

import offbody as ob

START, END = (-0.5, -2.0), (-1.5, 1.5)
FACE = ob.Bracing(START, END, 0.4)
POINTS = np.array([(-3.0, 0.2), (1.5, 1.0), (0.0, -1.3), (-1.1, 1.0), (-1.05, 0.0)])


def strength(share):
    """Of the face at shares of its length, per unit on the average: even, but for its ends."""
    fade = min(share, 1 - share) / 0.1
    return (1.0 if fade > 1 else 3 * fade**2 - 2 * fade**3) / 0.9


def exact(points, direction):
    """u + i v of a unit circle in a stream, beside the face."""
    z = points[:, 0] + 1j * points[:, 1]
    stream = np.exp(1j * np.radians(direction))
    start, end = complex(*START), complex(*END)
    across = abs((stream.conjugate() * (end - start) / abs(end - start)).imag)

    def source(share):
        place = start + share * (end - start)
        flow = 1 / (z - place) + 1 / (z - 1 / np.conj(place)) - 1 / z
        return strength(share) * flow * abs(end - start) / (2 * np.pi)

    total, _ = quad_vec(source, 0, 1, epsabs=1e-12, points=[0.1, 0.9])
    return np.conj(stream.conjugate() - stream / z**2 + 0.2 * across * total)


@pytest.mark.parametrize("direction", [0.0, 70.0, 180.0])
def test_beside_a_circle_it_is_what_the_circle_theorem_says(direction):
    model = ob.solve(ob.circle(2.0), bracings=FACE)
    velocity = model.velocity(POINTS, direction) @ [1, 1j]
    # The default panels on a circle are good to 1e-10, the quadrature to 1e-12.
    assert_allclose(velocity, exact(POINTS, direction), atol=1e-9)


def test_the_stream_passes_through_and_leaves_faster_by_the_strength():
    face, off = ob.Bracing((0.0, -1.0), (0.0, 1.0), 0.3), 1e-9
    model = ob.solve(ob.circle(0.1, centre=(5.0, 0.0)), bracings=[face])
    before, behind = model.velocity([(-off, 0.0), (off, 0.0)])
    # Cd/2 over the even part, which is 1/0.9 of the mean; 1e-8: the two points' distance.
    assert_allclose(behind - before, [0.15 / 0.9, 0.0], atol=1e-8)


@pytest.mark.parametrize("direction", [0.0, 25.0, 90.0])
def test_the_flux_through_a_loop_is_that_of_wakes_and_faces(direction):
    wake = ob.Wake(1.2)
    model = ob.solve(ob.circle(0.5), wakes=wake, bracings=[ob.Bracing((1, -1), (1, 1), 0.3)])
    angle = 2 * np.pi * np.arange(1024) / 1024
    outward = np.stack([np.cos(angle), np.sin(angle)], axis=-1)
    through = 2 * np.pi * 4 * np.mean(np.sum(model.velocity(4 * outward, direction) * outward, -1))
    source = 0.5 * 1.2 * 0.5 + 0.5 * 0.3 * 2 * abs(np.cos(np.radians(direction)))
    # The trapezoidal rule is exact to rounding on a circle clear of all sources.
    assert_allclose(through, source, rtol=1e-10, atol=1e-12)


@pytest.mark.parametrize("surroundings", [ob.OpenStream(), ob.Ground(-3.0), ob.Duct(-3.0, 4.0)])
def test_gradient_stream_function_and_velocity_agree(surroundings):
    model = ob.solve(ob.circle(2.0), surroundings, wakes=ob.Wake(1.0), bracings=FACE)
    # Clear of the cuts, which run along the face and then downstream.
    points, step = np.array([(-3.0, 0.2), (1.5, 1.8), (0.0, -1.3)]), 1e-6
    ahead = [model.velocity(points + shift) for shift in ((step, 0), (0, step))]
    behind = [model.velocity(points - shift) for shift in ((step, 0), (0, step))]
    slope = np.stack(np.subtract(ahead, behind), axis=-1) / (2 * step)
    # Central differences: rounding of 1e-15 over the step, squared steps.
    assert_allclose(model.velocity_gradient(points), slope, atol=1e-8)
    psi = [model.stream_function(points + s) - model.stream_function(points - s)
           for s in np.array([(step, 0), (0, step)])]
    velocity = np.stack([psi[1], -psi[0]], axis=-1) / (2 * step)
    assert_allclose(model.velocity(points), velocity, atol=1e-8)


def test_in_a_duct_the_stream_far_upstream_is_the_undisturbed_one_and_downstream_carries_more():
    model = ob.solve(ob.circle(0.5), ob.Duct(-2.0, 3.0), bracings=ob.Bracing((1, -1), (1, 1), 0.3))
    velocity = model.velocity([(-60.0, 0.3), (60.0, 0.3)])
    # The images of the far field die out like exp(-2 pi x / 10): below rounding at 60.
    assert_allclose(velocity, [(1, 0), (1 + 0.3 / 5, 0)], atol=1e-12)


def test_the_walls_stay_tight_and_the_error_estimate_knows():
    model = ob.solve(ob.circle(2.0), bracings=FACE)
    assert model.estimated_error < 1e-8, model.estimated_error
    assert model.numerical_error(POINTS, 70.0).max() < 1e-9


def test_streamlines_go_through_a_face_along_the_velocity():
    model = ob.solve(ob.circle(0.2, centre=(0.0, 1.5)), bracings=ob.Bracing((0, -1), (0, 1), 0.3))
    (line,) = model.streamlines((-2.0, 0.5), length=4.0)
    assert line[-1, 0] > 1.9 and line[-1, 1] > line[0, 1], line[-1]
    before = line[line[:, 0] < 0]
    psi = model.stream_function(before)
    # The accuracy of the tracing, 1e-9 of the length per step.
    assert_allclose(psi, psi[0], atol=1e-7)


# --- trust ----------------------------------------------------------------------------------------


def test_behind_a_face_nothing_is_trusted_and_ahead_of_it_all_is():
    posts = [ob.circle(0.05, centre=(0.0, y)) for y in (-2.0, 2.0)]
    face = ob.Bracing((0.0, -1.975), (0.0, 1.975), 0.1)
    sensors = [ob.PointSensor(x, 0.0) for x in (1.5, -1.5)]
    table = ob.survey(ob.solve(posts, bracings=face), sensors, [0.0, 180.0])
    assert_array_equal(table.trust, [[False, True], [True, False]])
    assert table.reason[0, 0] == "in the lee of bracing 0"
    bare = ob.survey(ob.solve(posts), sensors, [0.0, 180.0])
    assert bare.trust.all()


def test_its_ends_come_with_the_one_on_the_streams_left_first():
    ends = ob.Bracing((0.0, -1.0), (0.0, 1.0), 0.1).ends(np.array([0.0, 180.0]))
    assert_array_equal(ends, [[(0, 1), (0, -1)], [(0, -1), (0, 1)]])


# --- what is refused ------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("bracing", "complaint"),
    [
        (lambda: ob.Bracing((0, 0), (0, 0), 0.1), "is also the start"),
        (lambda: ob.Bracing((0, 0), (0, 1), -0.1), "drag_coefficient must be at least 0"),
        (lambda: ob.Bracing((-2, 0), (2, 0), 0.1), r"bracings\[0\].*lies in or crosses body 0"),
        (lambda: ob.Bracing((-0.2, 0), (0.2, 0), 0.1), "lies in or crosses body 0"),
        (lambda: ob.Bracing((0, 1.5), (0, 9), 0.1), "reaches beyond the wall of Duct"),
        (lambda: "girder", r"bracings must hold ob.Bracing\(...\), got 'girder'"),
    ],
)
def test_a_face_that_does_not_fit_is_refused(bracing, complaint):
    with pytest.raises(ob.InputError, match=complaint):
        ob.solve(ob.circle(1.0), ob.Duct(-4.0, 4.0), bracings=bracing())
