"""Bodies in an endless row, against multipole series, momentum, and rows of flat plates.

H. Lamb, Hydrodynamics, for rows of vortices and doublets; N. E. Joukowski's theorem for a row: the
force on each body is that of its circulation in the mean of the streams far up- and downstream.
F. Weinig, Die Stroemung um die Schaufeln von Turbomaschinen (1935), for the row of flat plates
(from memory; it follows from the map tanh(pi z/pitch) of the plates to one slit).
"""

from functools import cache

import numpy as np
import pytest

import exact
import offbody as ob

SIDES = np.linspace(0, 1, 97, endpoint=False)
DISTANCES = np.array([1e-12, 1e-6, 1e-3, 0.1, 0.5])
PLAIN = exact.CircleRow(1.0, 4.0)
SPINNING = exact.CircleRow(1.0, 4.0, 0.2 + 0.1j, 2.0)
CASES = pytest.mark.parametrize(
    "solution, direction",
    [(PLAIN, 0.0), (PLAIN, 30.0), (PLAIN, 90.0), (PLAIN, -90.0), (SPINNING, 0.0),
     (SPINNING, 70.0), (SPINNING, 200.0)],
)


@cache
def solved(solution):
    centre = np.real(solution.centre), np.imag(solution.centre)
    return ob.solve(ob.circle(2 * solution.radius, centre), ob.Row(solution.pitch),
                    circulation=solution.circulation)


@CASES
def test_a_row_of_circles_meets_its_multipole_series_on_and_off_the_wall(solution, direction):
    model = solved(solution)
    beside = solution.offset_points(SIDES, DISTANCES[:, None]).ravel()
    points = np.concatenate([beside, beside + 4j, beside - 40j,   # a copy's, and a far one's
                             np.linspace(1.3, 20, 40), np.linspace(-20, -1.3, 40) + 2j])
    np.testing.assert_allclose(model.velocity(exact.as_pairs(points), direction),
                               exact.as_velocity(solution.velocity(points, direction)),
                               rtol=0, atol=1e-11)   # the default panels' on a circle is 1e-12
    surface = model.surface(0, direction)
    on_wall = solution.velocity(exact.as_complex(surface.points), direction)
    np.testing.assert_allclose(
        surface.speed, exact.along_wall(surface.points, exact.as_velocity(on_wall)),
        rtol=0, atol=1e-11)


@CASES
def test_the_stream_far_up_and_downstream_of_a_row_is_exact(solution, direction):
    along = np.array([-1e3, 1e3])
    far = solved(solution).velocity(np.stack([along, 0.3 + 0 * along], axis=-1), direction)
    stream = np.array([np.cos(np.radians(direction)), np.sin(np.radians(direction))])
    # Continuity keeps u; the circulations of the row turn v by G/pitch from up- to downstream.
    turned = stream + [0, np.sign(round(stream[0], 9)) * solution.circulation / solution.pitch]
    expected = [stream, turned] if stream[0] >= 0 else [turned, stream]
    np.testing.assert_allclose(far, expected, rtol=0, atol=1e-15)


def test_circles_abreast_are_a_circle_in_a_duct():
    row = ob.solve(ob.circle(1.0), ob.Row(2.0))
    duct = ob.solve(ob.circle(1.0), ob.Duct(-1.0, 1.0))
    points = np.stack(np.meshgrid([-2.0, 0.1, 0.7], [-0.9, 0.55, 1.0]), axis=-1)
    # Two ways to the same images; both within the panels' 1e-12.
    np.testing.assert_allclose(row.velocity(points), duct.velocity(points), rtol=0, atol=1e-11)


@pytest.mark.parametrize("pitch", [1.5, 0.8, 0.5])
@pytest.mark.parametrize("direction", [20.0, 40.0])
def test_lifting_sections_turn_the_stream_by_what_momentum_and_joukowski_say(pitch, direction):
    model = ob.solve(ob.four_digit("4412").turned(25.0), ob.Row(pitch))
    before, after = model.velocity([(-40.0, 0.1), (40.0, 0.1)], direction)
    np.testing.assert_allclose(after[0], before[0], rtol=0, atol=1e-14)   # continuity
    circulation, force = model.circulation(direction)[0], model.force(direction)[0]
    np.testing.assert_allclose(after[1] - before[1], circulation / pitch, rtol=0, atol=1e-14)
    mean = (before + after) / 2
    # Default panels are good to 1e-5 at the jump of curvature at greatest camber, and the force,
    # an integral over it, to 1e-6.
    by_circulation = 2 * circulation * np.array([mean[1], -mean[0]])
    np.testing.assert_allclose(force, by_circulation, rtol=0, atol=2e-6)
    by_momentum = pitch * np.array([after @ after - before @ before,
                                    2 * before[0] * (before[1] - after[1])])
    np.testing.assert_allclose(force, by_momentum, rtol=0, atol=2e-6)


def test_sections_at_close_pitch_guide_the_stream_along_themselves():
    # Half a chord apart, whatever the stream upstream.
    model = ob.solve(ob.four_digit("0001").turned(30.0), ob.Row(0.5))
    leaving = model.velocity((40.0, 0.0), [15.0, 30.0, 45.0])
    angles = np.degrees(np.arctan2(leaving[:, 1], leaving[:, 0]))
    # Flat plates: within exp(-2 pi cos 30) of 15 degrees, 0.07; these are 2 percent of the passage
    # thick, and their own two sides half a degree apart.
    np.testing.assert_allclose(angles, 30.0, atol=0.3)


@pytest.mark.parametrize("pitch", [1.0, 0.5])
def test_thin_sections_square_to_their_row_leave_weinigs_share_of_the_cross_flow(pitch):
    def share(code):
        model = ob.solve(ob.four_digit(code), ob.Row(pitch))
        before, after = model.velocity([(-40.0, 0.0), (40.0, 0.0)], 5.0)
        return after[1] / before[1]

    thin, thicker, thickest = share("0001"), share("0002"), share("0004")
    plate = (8 * thin - 6 * thicker + thickest) / 3   # to no thickness, by a parabola
    # The parabola leaves the cube of the thickness over the pitch, (0.04/0.5)^3.
    np.testing.assert_allclose(plate, np.exp(-np.pi / pitch), rtol=1e-3)


def test_a_stream_along_a_row_is_refused_where_something_turns_it_or_pushes_it_aside():
    circle = ob.circle(0.3)
    turning = ob.solve(circle, ob.Row(1.0), circulation=1.0)
    pushing = ob.solve(circle, ob.Row(1.0), wakes=ob.Wake(1.0))
    lifting = ob.solve(ob.four_digit("0012"), ob.Row(2.0))
    for model, direction in ((turning, 90.0), (pushing, -90.0), (lifting, [0.0, 90.0])):
        with pytest.raises(ob.InputError, match="along a row.*use another direction"):
            model.velocity((3.0, 0.0), direction)
    with pytest.raises(ob.InputError, match="overlaps or touches its own copy.*pitch larger"):
        ob.solve(circle, ob.Row(0.3))


@pytest.mark.parametrize("direction", [0.0, 30.0])
def test_wakes_in_a_row_leave_the_stream_far_upstream_as_it_was(direction):
    model = ob.solve(ob.circle(0.3), ob.Row(2.0), wakes=ob.Wake(1.0))
    before, after = model.velocity([(-1e3, 0.1), (1e3, 0.1)], direction)
    stream = np.array([np.cos(np.radians(direction)), np.sin(np.radians(direction))])
    np.testing.assert_allclose(before, stream, rtol=0, atol=1e-15)
    # Each wake blows Cd b/2 = 0.15 into a passage of 2.
    np.testing.assert_allclose(after, stream + [0.15 / 2, 0], rtol=0, atol=1e-14)


def test_the_turning_far_downstream_is_the_circulation_over_the_pitch():
    model = ob.solve(ob.circle(1.0), surroundings=ob.Row(3.0), circulation=-1.5)
    # Kelvin's circulation round one pitch of the row: the velocity along it turns by G/pitch.
    onset = np.array([np.cos(np.radians(20.0)), np.sin(np.radians(20.0))])
    np.testing.assert_allclose(model.far_downstream(20.0) - onset, (0.0, -0.5), atol=1e-12)
    np.testing.assert_allclose(model.velocity((1e4, 1.0), 20.0), model.far_downstream(20.0),
                               atol=1e-12)
