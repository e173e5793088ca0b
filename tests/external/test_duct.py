"""Bodies between two walls, against multipole series and the published blockage correction.

H. Glauert, The Elements of Aerofoil and Airscrew Theory; H. J. Allen and W. G. Vincenti, NACA
Report 782 (1944): a body in the middle of a duct of height H meets a stream that its images make
faster by (pi^2/12)(d/H)^2 for a circle of diameter d, by (pi^2/24) t (c + t)/H^2 for an ellipse of
chord c and thickness t along the stream (the same doublet; from memory).
"""

import numpy as np
import pytest

import exact
import offbody as ob

SIDES = np.linspace(0, 1, 97, endpoint=False)
DISTANCES = np.array([1e-12, 1e-6, 1e-3, 0.1, 0.5])
HALF_BLOCKED = exact.CircleInDuct(1.0, -2.0, 2.0)
LOW_WITH_CIRCULATION = exact.CircleInDuct(0.5, -1.0, 2.0, 0.3 + 0.2j, 1.1)
CASES = pytest.mark.parametrize("solution", [HALF_BLOCKED, LOW_WITH_CIRCULATION])
DIRECTIONS = pytest.mark.parametrize("direction", [0.0, 180.0])
PROMISE = 1e-9  # of the undisturbed speed, at 50 percent blockage


def solved(solution, **options):
    centre = np.real(solution.centre), np.imag(solution.centre)
    return ob.solve(ob.circle(2 * solution.radius, centre),
                    ob.Duct(solution.lower, solution.upper),
                    circulation=solution.circulation, **options)


def points_between(solution):
    """Beside the circle, along the duct's middle and on both walls."""
    along = 6 * np.linspace(-1, 1, 61)
    points = np.concatenate([
        solution.offset_points(SIDES, DISTANCES[:, None] * solution.radius).ravel(),
        along + 1j * (solution.lower + solution.upper) / 2,
        along + 1j * solution.lower, along + 1j * solution.upper,
    ])
    within = (points.imag >= solution.lower) & (points.imag <= solution.upper)
    return points[within & (abs(points - solution.centre) > solution.radius)]


@DIRECTIONS
@CASES
def test_a_circle_in_a_duct_meets_its_multipole_series_on_and_off_the_wall(solution, direction):
    model, points = solved(solution), points_between(solution)
    np.testing.assert_allclose(model.velocity(exact.as_pairs(points), direction),
                               exact.as_velocity(solution.velocity(points, direction)),
                               rtol=0, atol=PROMISE)
    surface = model.surface(0, direction)
    on_wall = solution.velocity(exact.as_complex(surface.points), direction)
    np.testing.assert_allclose(
        surface.speed, exact.along_wall(surface.points, exact.as_velocity(on_wall)),
        rtol=0, atol=PROMISE)


@pytest.mark.parametrize("order, bound", [(1, 0.3), (4, 1e-3), (8, 1e-5), (12, 1e-8)])
def test_a_duct_costs_no_order_its_accuracy(order, bound):
    # Bounds: about ten times the error of the same number of panels on a circle in an open stream;
    # for order 1, whose wall is a polygon, at a tenth of a radius.
    points = HALF_BLOCKED.offset_points(SIDES, 0.1)
    found = solved(HALF_BLOCKED, order=order).velocity(exact.as_pairs(points))
    np.testing.assert_allclose(found, exact.as_velocity(HALF_BLOCKED.velocity(points)),
                               rtol=0, atol=bound)


@DIRECTIONS
@CASES
def test_far_up_and_downstream_the_stream_in_a_duct_is_undisturbed_to_rounding(
        solution, direction):
    far = solved(solution).velocity([(-1e3, 0.1), (-60.0, 0.5), (60.0, -0.5), (1e3, 0.1)],
                                    direction)
    # The disturbance falls by exp(-2 pi) in twice the duct's height: to 1e-20 at 60 lengths.
    np.testing.assert_allclose(far, np.tile([np.cos(np.radians(direction)), 0], (4, 1)),
                               rtol=0, atol=3e-16)


@CASES
def test_no_flow_crosses_the_walls_of_a_duct(solution):
    along = 8 * np.linspace(-1, 1, 101)
    walls = np.concatenate([along + 1j * solution.lower, along + 1j * solution.upper])
    across = solved(solution).velocity(exact.as_pairs(walls))[:, 1]
    # The images are exact: rounding of a sum of a few hundred strengths.
    np.testing.assert_allclose(across, 0, atol=1e-13)


@CASES
def test_the_gradient_and_the_stream_function_in_a_duct_are_those_of_the_velocity(solution):
    model, ring = solved(solution), np.exp(2j * np.pi * np.arange(48) / 48)
    for place in (-1.9 + 0.4j, 0.2 + 1.5j, 0.1 - 0.75j, 5.0 + 0.3j):
        radius = 0.05
        around = place + radius * ring
        w = exact.as_complex(model.velocity(exact.as_pairs(around))).conj()
        slope = (w / ring).mean() / radius   # Cauchy's formula, exact to 48 powers of a half
        expected = [[slope.real, -slope.imag], [-slope.imag, -slope.real]]
        np.testing.assert_allclose(model.velocity_gradient([place.real, place.imag]), expected,
                                   rtol=0, atol=1e-9)
        psi = model.stream_function(exact.as_pairs(around))
        # d(psi) = -v dx + u dy round the ring: the derivative of psi by the angle is the imaginary
        # part of W dz/d(angle), here by Fourier series.
        turned = np.fft.ifft(np.fft.fft(psi) * 1j * np.fft.fftfreq(48, 1 / 48)).real
        np.testing.assert_allclose(turned, (w * 1j * radius * ring).imag, rtol=0, atol=1e-9)


@pytest.mark.parametrize("ratio", [0.02, 0.05, 0.1])
def test_small_blockage_speeds_a_circle_up_by_glauerts_correction(ratio):
    model = ob.solve(ob.circle(ratio), ob.Duct(-0.5, 0.5))
    speed = np.hypot(*model.velocity((0.0, ratio / 2)))   # twice the stream that the circle meets
    published = np.pi**2 / 12 * ratio**2
    # The next term is the correction's square and (d/H)^4, of its own order.
    np.testing.assert_allclose(speed / 2 - 1, published, rtol=2 * ratio**2)


@pytest.mark.parametrize("chord, thickness", [(0.1, 0.05), (0.05, 0.02)])
def test_small_blockage_speeds_an_ellipse_up_by_allen_and_vincentis_correction(chord, thickness):
    model = ob.solve(ob.ellipse(chord, thickness), ob.Duct(-0.5, 0.5))
    speed = np.hypot(*model.velocity((0.0, thickness / 2)))
    published = np.pi**2 / 24 * thickness * (chord + thickness)
    in_open_stream = 1 + thickness / chord   # Lamb
    # The images' field changes over the chord by (chord/H)^2 of itself.
    np.testing.assert_allclose(speed / in_open_stream - 1, published, rtol=4 * chord**2)


def test_a_section_in_a_duct_turns_no_stream_and_lifts_more_than_in_an_open_one():
    section = ob.four_digit("0012").turned(-4.0)
    free, held = ob.solve(section), ob.solve(section, ob.Duct(-1.0, 1.0))
    far = held.velocity([(-1e3, 0.1), (1e3, 0.1)])
    np.testing.assert_allclose(far, [[1, 0], [1, 0]], rtol=0, atol=1e-15)
    # Allen and Vincenti, NACA Report 782: walls raise the circulation of a thin section by twice
    # sigma = (pi^2/48)(c/H)^2, half for its incidence and half for its camber, and with the speed
    # by Lambda sigma, Lambda about 2 (t/c)(1 + t/c) (from memory). The rest is of its square.
    sigma = np.pi**2 / 48 * 0.5**2
    gain = held.circulation()[0] / free.circulation()[0] - 1
    np.testing.assert_allclose(gain, (2 + 2 * 0.12 * 1.12) * sigma, rtol=0, atol=4 * sigma**2)


def test_a_duct_refuses_streams_across_it_and_bodies_through_its_walls():
    circle = ob.circle(0.3)
    with pytest.raises(ob.InputError, match="direction = 30.*use direction 0 or 180"):
        ob.solve(circle, ob.Duct(-1.0, 1.0)).velocity((3.0, 0.0), 30.0)
    with pytest.raises(ob.InputError, match=r"wall y = 0\.1.*move it down"):
        ob.solve(circle, ob.Duct(-1.0, 0.1))


@pytest.mark.parametrize("blocked", [0.1, 0.05, 0.02])
def test_the_blockage_of_a_circle_is_that_of_its_images(blocked):
    model = ob.solve(ob.circle(blocked), surroundings=ob.Duct(-0.5, 0.5))
    # (pi^2/12) (d/H)^2 (Glauert; Allen and Vincenti, NACA Report 782), to its next term, (d/H)^2.
    np.testing.assert_allclose(model.blockage([0.0, 180.0])[:, 0], np.pi**2 / 12 * blocked**2,
                               rtol=blocked**2)


def test_a_wake_in_a_duct_speeds_up_the_stream_far_downstream_by_its_flux():
    model = ob.solve(ob.circle(1.0), surroundings=ob.Duct(-2.0, 2.0), wakes=ob.Wake(0.8))
    # Continuity: Cd b/2 through a height of 4.
    np.testing.assert_allclose(model.far_downstream(), (1.1, 0.0), rtol=0, atol=1e-12)
    np.testing.assert_allclose(model.velocity((1e4, 1.0)), model.far_downstream(), atol=1e-12)
