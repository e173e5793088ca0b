"""The compiled kernels equal their plain-NumPy twin, and both equal the integrals they stand for.

Against sources outside the project: Neumann's integral for the Legendre functions of the second
kind (DLMF 14.12; values by mpmath), adaptive quadrature of the bare integral, principal values
included (R. Piessens et al., QUADPACK, 1983, through SciPy), and the plane source element of
J. L. Hess and A. M. O. Smith, Progress in Aeronautical Sciences 8 (1967) 1-138 (from memory).
"""

import threading
from functools import cache

import mpmath
import numpy as np
import pytest
from numpy.polynomial import legendre
from scipy.integrate import quad

import offbody as ob
from offbody import _kernels, flow, reference

ORDERS = (1, 2, 3, 4, 8, 16)
AGREEMENT = 1e-12  # what the project promises between the two, relative
both = pytest.mark.parametrize("kernels", [_kernels, reference], ids=["compiled", "reference"])
every_order = pytest.mark.parametrize("order", ORDERS)


# --- solved bodies and the awkward places about them ------------------------------------------


@cache
def laid(order):
    """Panels of a body with hollows, so that outside points lie between a chord and its curve."""

    def lobes(s):
        radius = 1.0 + 0.3 * np.cos(6 * np.pi * s)
        return np.stack([radius * np.cos(2 * np.pi * s), radius * np.sin(2 * np.pi * s)], axis=-1)

    count = {1: 120, 2: 120, 3: 90, 4: 72, 8: 56, 16: 40}[order]
    return ob.solve(ob.curve(lobes), panels=count, order=order)._panels


def density(panels):
    """Two smooth strengths, vortex and source, whose far fields do not vanish."""
    turn = 2 * np.pi * panels.arcs / panels.end_arcs.max()
    return np.stack([1.0 + 0.1 * np.cos(turn) + 0.3j, 0.5 - 1j - 0.2j * np.sin(turn)])


PLACES = {
    "on panel ends": lambda p, h, m, n: p.ends.ravel(),
    "on nodes": lambda p, h, m, n: p.nodes,
    "on chords": lambda p, h, m, n: on_chords(p, h, m),
    "between chord and curve": lambda p, h, m, n: between_chord_and_curve(p, h, m),
    "on prolongations": lambda p, h, m, n: np.concatenate(
        [m + side * h * (1 + step) for side in (-1, 1) for step in (1e-12, 1e-6, 0.1, 1, 10)]
    ),
    "1e-9 panel lengths away": lambda p, h, m, n: p.nodes + 2e-9 * np.abs(h).min() * n,
    "1e9 panel lengths away": lambda p, h, m, n: 2e9 * np.abs(h).max() * n,
    # Not at the switch itself: there rounding decides between two forms that are equal only to
    # the accuracy of the order.
    "at the near/far switch": lambda p, h, m, n: np.concatenate(
        [m + p.geometry[9] * np.abs(h) * (1 + step) * turn
         for step in (-1e-9, 1e-9) for turn in np.exp(1j * np.arange(0.1, 6.3, 0.7))]
    ),
    "all about": lambda p, h, m, n: np.concatenate(
        [(p.nodes + distance * n)[::3] for distance in (1e-14, 1e-7, 1e-3, 0.03, 0.3, 3.0, 300.0)]
    ),
}
everywhere = pytest.mark.parametrize("place", PLACES)


def heights(panels, x):
    """(len(x), P) how far the curves stand above their chords, in half-chords."""
    order = panels.bulge.shape[1]
    return (1 - x * x)[:, None] * (legendre.legvander(x, order - 1) @ panels.bulge.T)


def on_chords(panels, h, m):
    """On those that are the wall, or that a hollow in it leaves outside, beyond rounding."""
    x = np.linspace(-0.9, 0.9, 7)
    clear = (heights(panels, x) > 1e-6) | (panels.bulge.shape[1] == 1)
    return (m + h * x[:, None])[clear]


def between_chord_and_curve(panels, h, m):
    x = np.array([-0.99, -0.5, 0.1, 0.7])
    height = heights(panels, x)
    return np.concatenate([(m + h * (x[:, None] + 1j * f * height)).ravel() for f in (0.2, 0.8)])


def targets(panels, place):
    """Those of the points at a named place that do not lie inside the body."""
    h = 0.5 * (panels.ends[:, 1] - panels.ends[:, 0])
    points = PLACES[place](panels, h, panels.ends.mean(axis=1), -1j * panels.tangents)
    return np.ascontiguousarray(points[holders(_kernels, panels, points) < 0])


def holders(kernels, panels, z):
    body = np.empty(len(z), np.intp)
    starts, boxes = panels.starts.astype(np.intp), np.ascontiguousarray(panels.boxes)
    kernels.enclosing_body(panels.geometry, starts, boxes, np.ascontiguousarray(z), body)
    return body


def contiguous_density(panels, strengths):
    return tuple(map(np.ascontiguousarray, flow._velocity_density(panels, strengths)))


def field(kernels, panels, strengths, z):
    out = np.zeros((len(strengths), len(z)), complex)
    kernels.field(panels.geometry, *contiguous_density(panels, strengths), z, out)
    return out


def influence(kernels, panels, z, turn, at_ends=False):
    """The influence of strengths at the nodes, or at the nodes and both ends of each panel."""
    modes, tangents = panels.modes, panels.tangents.reshape(-1, panels.order)
    if at_ends:
        modes, tangents = panels.place_modes, panels.place_tangents
    real, imag = np.empty((2, len(z), tangents.size))
    kernels.influence(panels.geometry, modes, tangents, z, turn, real, imag)
    return real + 1j * imag


# --- compiled against reference ---------------------------------------------------------------


@every_order
@everywhere
def test_the_compiled_field_equals_the_reference(order, place):
    panels = laid(order)
    z = targets(panels, place)
    expected = field(reference, panels, density(panels), z)
    assert len(z) >= 10, f"only {len(z)} points {place}"
    np.testing.assert_allclose(
        field(_kernels, panels, density(panels), z), expected, rtol=AGREEMENT, atol=0
    )


@every_order
@everywhere
def test_the_compiled_influence_on_resolved_strengths_equals_the_reference(order, place):
    panels = laid(order)
    z = targets(panels, place)[::3].copy()
    turn = np.exp(1j * np.arange(len(z)))
    compiled, expected = (influence(k, panels, z, turn) for k in (_kernels, reference))
    np.testing.assert_allclose(
        compiled @ density(panels).T, expected @ density(panels).T, rtol=AGREEMENT, atol=0
    )


@both
@every_order
@everywhere
def test_the_influence_matrix_applied_to_strengths_is_their_field(kernels, order, place):
    panels = laid(order)
    z = targets(panels, place)[::3].copy()
    matrix = influence(kernels, panels, z, np.ones(len(z), complex), at_ends=True)
    by_matrix = flow._at_places(panels, density(panels)).reshape(2, -1) @ matrix.T
    # Rounding in columns that cancel: ends and nodes weigh a few times what their sum does.
    np.testing.assert_allclose(
        by_matrix, field(kernels, panels, density(panels), z), rtol=1e-11, atol=0
    )


@pytest.mark.parametrize("order", [1, 2, 3])
@everywhere
def test_each_entry_of_the_compiled_influence_equals_the_reference(order, place):
    # Of higher orders an entry by itself is not known to 1e-12: see closed_form.h on the recursion.
    panels = laid(order)
    z = targets(panels, place)[::3].copy()
    turn = np.exp(1j * np.arange(len(z)))
    compiled, expected = (influence(k, panels, z, turn) for k in (_kernels, reference))
    largest = np.abs(expected).max(axis=1, keepdims=True)
    np.testing.assert_allclose(compiled / largest, expected / largest, rtol=0, atol=AGREEMENT)


@every_order
@everywhere
def test_compiled_and_reference_put_each_point_in_the_same_body(order, place):
    panels = laid(order)
    h = 0.5 * (panels.ends[:, 1] - panels.ends[:, 0])
    z = PLACES[place](panels, h, panels.ends.mean(axis=1), 1j * panels.tangents)
    np.testing.assert_array_equal(
        holders(_kernels, panels, z), holders(reference, panels, z), strict=True
    )


@every_order
def test_the_compiled_point_field_equals_the_reference(order):
    panels = laid(order)
    z = targets(panels, "all about")
    charges = density(panels) * panels.weights
    compiled, expected = np.zeros((2, 2, len(z)), complex)
    _kernels.point_field(panels.nodes, charges, z, compiled)
    reference.point_field(panels.nodes, charges, z, expected)
    np.testing.assert_allclose(compiled, expected, rtol=AGREEMENT, atol=0)


@both
@every_order
def test_no_target_is_no_work_and_one_target_equals_itself_among_many(kernels, order):
    panels = laid(order)
    z = targets(panels, "all about")
    assert field(kernels, panels, density(panels), z[:0]).shape == (2, 0)
    assert influence(kernels, panels, z[:0], z[:0]).shape == (0, len(panels.nodes))
    assert holders(kernels, panels, z[:0]).shape == (0,)
    many = field(kernels, panels, density(panels), z)
    one = np.concatenate([field(kernels, panels, density(panels), z[[k]]) for k in (0, 77)], 1)
    # Alone it may take another path through a block: the same sum, other roundings.
    np.testing.assert_allclose(one, many[:, [0, 77]], rtol=1e-13, atol=0)


@both
def test_a_sum_is_added_to_what_is_there_also_in_a_strided_array(kernels):
    panels = laid(8)
    z = targets(panels, "all about")
    coefficients, charges = contiguous_density(panels, density(panels))
    room = np.full((2, 2 * len(z)), 5.0 + 7.0j)
    kernels.field(panels.geometry, coefficients, charges, z, room[:, ::2])
    expected = 5.0 + 7.0j + field(kernels, panels, density(panels), z)
    np.testing.assert_allclose(room[:, ::2], expected, rtol=1e-14)  # one more rounding
    assert (room[:, 1::2] == 5.0 + 7.0j).all()


# --- arrays as users have them ----------------------------------------------------------------


def read_only(points):
    points = points.copy()
    points.setflags(write=False)
    return points


@pytest.mark.parametrize(
    "given",
    [
        lambda points: np.asfortranarray(points),
        lambda points: np.repeat(points, 2, axis=0)[::2],
        lambda points: np.hstack([points, points])[:, 1:3][:, ::-1],
        lambda points: points[::-1].copy()[::-1],
        read_only,
        lambda points: points.astype(int),
        lambda points: points.astype(np.int8),
        lambda points: points.astype(np.float32),
        lambda points: points.astype(">f8"),
        lambda points: points.tolist(),
    ],
    ids=["column-major", "strided", "swapped", "reversed", "read-only", "int", "int8", "float32",
         "big-endian", "lists"],
)
@pytest.mark.parametrize("order", [1, 16])
def test_a_model_takes_points_in_any_layout_and_type(order, given):
    model = ob.solve(ob.circle(2.0), panels={1: 60, 16: 12}[order], order=order)
    points = np.array([[2.0, 0.0], [-3.0, 4.0], [7.0, -9.0], [0.0, 2.0], [1.0, 1.0]])
    for ask in (model.velocity, model.velocity_gradient, model.stream_function,
                model.pressure_coefficient):
        np.testing.assert_array_equal(ask(given(points)), ask(points))


@pytest.mark.parametrize("order", [1, 16])
def test_a_model_gives_nothing_for_no_points_and_one_for_one(order):
    model = ob.solve(ob.circle(2.0), panels={1: 60, 16: 12}[order], order=order)
    assert model.velocity(np.empty((0, 2))).shape == (0, 2)
    assert model.velocity(np.empty((3, 0, 2)), direction=[0.0, 90.0]).shape == (2, 3, 0, 2)
    assert model.velocity((2.0, 0.0)).shape == (2,)
    assert model.velocity([[2.0, 0.0]]).shape == (1, 2)


# --- one panel against the integral ------------------------------------------------------------

STRAIGHT, BULGED, HOLLOW = 0.0, -0.25, 0.25  # height of the curve's middle, in half-chords


def one_panel(height, order, a=-0.4 + 0.3j, b=0.7 - 0.2j):
    """The kernels' geometry of one parabolic panel; the density is given by coefficients."""
    h, m = 0.5 * (b - a), 0.5 * (a + b)
    x, gauss = legendre.leggauss(order)
    slope = 1 - 2j * height * x
    normals = -1j * h * np.array([1 + 2j * height, 1 - 2j * height])
    normals /= np.abs(normals)
    bulge = np.zeros((1, order))
    bulge[0, 0] = height
    return (
        np.array([a]), np.array([b]), normals[:1], normals[1:],
        m + h * (x + 1j * height * (1 - x * x)), h * slope / np.abs(h * slope),
        np.abs(h * slope) * gauss, bulge, np.array([[0.0, 1e-10]]), 3.0, abs(b - a),
    )


def moments(kernels, geometry, t, terms):
    """p_0 ... p_(terms - 1) at the local coordinates t, near ones, by the kernels' field."""
    h, m = 0.5 * (geometry[1] - geometry[0]), 0.5 * (geometry[1] + geometry[0])
    out = np.zeros((terms, len(t)), complex)
    coefficients = np.eye(terms, dtype=complex)[:, None, :]
    charges = np.zeros((terms, geometry[7].shape[1]), complex)
    kernels.field(geometry, coefficients, charges, m + h * np.asarray(t), out)
    return out


@cache
def integral(k, t, height, aside=0.0):
    """The integral of P_k(s)/(s - t) ds by quadrature, along the curve or a path to its left.

    A path aside gives the outer limit on the curve: by Cauchy's theorem it is the same integral.
    """
    rise, polynomial = height + aside, legendre.leg2poly([0.0] * k + [1.0])[::-1]

    def integrand(x):
        s = complex(x, rise * (1 - x * x))
        return np.polyval(polynomial, s) / (s - t) * complex(1, -2 * rise * x)

    nearest = min(max(t.real, -0.999), 0.999)
    return quad(integrand, -1, 1, points=[nearest], complex_func=True, epsabs=1e-13, limit=400)[0]


@both
@pytest.mark.parametrize("height", [STRAIGHT, BULGED, HOLLOW])
def test_panel_moments_equal_the_integral_by_quadrature(kernels, height):
    # Outside is to the right; the last points lie between a hollow curve and its chord.
    t = [0.3 - 0.5j, -1.2 + 0.1j, 1.0 - 1e-3j, 0.2 - 0.26j, 2.5 + 0.5j, 0.1 - 2.9j, 1.5, -2.0]
    t += [0.1 + 0.1j, -0.6 + 0.05j] if height == HOLLOW else []
    found = moments(kernels, one_panel(height, 4), t, 5)
    expected = [[integral(k, point, height) for point in t] for k in range(5)]
    # Upward recursion multiplies rounding by up to 6^4 at three half-chords.
    np.testing.assert_allclose(found, expected, rtol=0, atol=2e-12)


@both
@pytest.mark.parametrize("height", [STRAIGHT, BULGED, HOLLOW])
def test_panel_moments_on_the_wall_are_the_outer_limit(kernels, height):
    x = np.array([-0.95, -0.3, 0.0, 0.45, 0.99])
    t = x + 1j * height * (1 - x * x)
    found = moments(kernels, one_panel(height, 8), t, 8)
    expected = [[integral(k, point, height, aside=0.3) for point in t] for k in range(8)]
    np.testing.assert_allclose(found, expected, rtol=0, atol=2e-12)  # the quadrature's


@both
def test_panel_moments_on_a_straight_wall_are_principal_value_and_half_jump(kernels):
    x = np.array([-0.9, -0.3, 0.1, 0.7])
    found = moments(kernels, one_panel(STRAIGHT, 8), x, 8)
    for k in range(8):
        polynomial = legendre.Legendre.basis(k)
        principal = [quad(polynomial, -1, 1, weight="cauchy", wvar=point)[0] for point in x]
        np.testing.assert_allclose(found[k].real, principal, rtol=0, atol=1e-12)
        np.testing.assert_allclose(found[k].imag, -np.pi * polynomial(x), rtol=0, atol=1e-13)


@both
@pytest.mark.parametrize("height", [STRAIGHT, BULGED, HOLLOW])
def test_panel_moments_are_legendre_functions_of_the_second_kind(kernels, height):
    t = np.array([1.2 + 0.4j, -0.3 - 0.6j, 0.5 + 0.8j, -1.7 + 0.1j, 2.0 - 1.5j])
    found = moments(kernels, one_panel(height, 4), t, 5)
    expected = [[-2 * complex(mpmath.legenq(k, 0, point, type=3)) for point in t] for k in range(5)]
    # Upward recursion multiplies rounding by up to 5^4 at two and a half half-chords.
    np.testing.assert_allclose(found, expected, rtol=0, atol=2e-12)


@both
def test_far_moments_of_a_straight_panel_keep_all_digits_at_any_distance(kernels):
    # p_1 as well: the potential of constant panels asks for it.
    distance, turn = 10.0 ** np.arange(0.2, 9.3, 0.1), np.exp(1j * np.arange(0.3, 6.3, 0.9))
    t = np.outer(distance, turn).ravel()
    found = moments(kernels, one_panel(STRAIGHT, 1), t, 2)
    with mpmath.workdps(60):
        logarithms = [mpmath.log((mpmath.mpc(p) - 1) / (mpmath.mpc(p) + 1)) for p in t]
        linear = [complex(2 + mpmath.mpc(p) * log) for p, log in zip(t, logarithms, strict=True)]
    constant = np.array([complex(log) for log in logarithms])
    np.testing.assert_allclose(found[0], constant, rtol=AGREEMENT, atol=0)
    np.testing.assert_allclose(found[1], linear, rtol=AGREEMENT, atol=0)


@both
def test_a_straight_source_panel_induces_the_textbook_velocity(kernels):
    geometry = one_panel(STRAIGHT, 1, -1.0 + 0j, 1.0 + 0j)
    x, y = np.array([[0.3, 0.7], [-2.0, -0.1], [0.9, -1e-6], [4.0, 5.0], [-1e4, 1e3], [1.5, 0.0]]).T
    real, imag = np.empty((2, len(x), 1))
    ones = np.ones((1, 1, 1), complex)
    kernels.influence(geometry, ones, ones[0], x + 1j * y, np.ones(len(x), complex), real, imag)
    # Of a vortex (real, imag) are u and -v; a source is i times it: u = -imag, v = -real.
    u = np.log(((x + 1) ** 2 + y**2) / ((x - 1) ** 2 + y**2)) / (4 * np.pi)
    v = (np.arctan2(y, x - 1) - np.arctan2(y, x + 1)) / (2 * np.pi)
    # The textbook's own differences lose 1e-16 of one, and far away that is 1e-12 of the result.
    np.testing.assert_allclose(-imag[:, 0], u, rtol=AGREEMENT, atol=1e-16)
    np.testing.assert_allclose(-real[:, 0], v, rtol=AGREEMENT, atol=1e-16)


@both
def test_a_straight_source_panel_blows_half_its_strength_outward_and_nothing_along(kernels):
    panels = laid(1)
    own = np.diagonal(influence(kernels, panels, panels.nodes, panels.tangents))
    normal, tangential = own.real, -own.imag  # of the source
    # The midpoint lies in the middle to the rounding of coordinates: 1e-16 over a panel of 0.03.
    np.testing.assert_allclose(normal, 0.5, rtol=0, atol=1e-14)
    np.testing.assert_allclose(tangential, 0.0, rtol=0, atol=1e-14)


@both
@every_order
def test_normal_and_tangential_influence_are_parts_of_one_evaluation(kernels, order):
    panels = laid(order)
    z = targets(panels, "all about")
    turn = np.exp(1j * np.arange(len(z)))
    turned = influence(kernels, panels, z, turn)
    plain = influence(kernels, panels, z, np.ones(len(z), complex))
    largest = np.abs(plain).max(axis=1, keepdims=True)
    np.testing.assert_allclose(
        turned / largest, turn[:, None] * plain / largest, rtol=0, atol=1e-14
    )


@both
@every_order
def test_crossing_a_panel_changes_the_velocity_by_the_strength(kernels, order):
    panels = laid(order)
    coefficients, charges = contiguous_density(panels, density(panels))
    outer = np.zeros((2, len(panels.nodes)), complex)
    inner = np.zeros_like(outer)
    kernels.field(panels.geometry, coefficients, charges, panels.nodes, outer)
    # Run the other way, a wall has its outside where its inside was.
    a, b, normal_a, normal_b, nodes, tangents, weights, bulge, slack, *rest = panels.geometry
    signs = (-1.0) ** np.arange(coefficients.shape[2])
    mirrored = -np.ascontiguousarray(bulge * (-1.0) ** np.arange(bulge.shape[1]))
    reverse = (b, a, -normal_b, -normal_a, nodes, tangents, weights, mirrored, slack, *rest)
    kernels.field(reverse, -coefficients * signs, charges, panels.nodes, inner)
    # Each limit is a sum of all panels, O(1) with O(1) terms.
    np.testing.assert_allclose(
        outer - inner, density(panels) * tangents.conj(), rtol=0, atol=1e-13
    )


# --- floating point -----------------------------------------------------------------------------


@both
def test_denormal_numbers_outlive_a_call(kernels):
    panels = laid(8)
    field(kernels, panels, density(panels), targets(panels, "all about"))
    influence(kernels, panels, panels.nodes, panels.tangents)
    assert np.float64(1e-310) * 1.0 == 1e-310
    assert np.float64(1e-300) * 1e-10 > 0.0
    assert (np.full(64, 1e-310) * 0.5 > 0.0).all()


@both
@every_order
@pytest.mark.parametrize("bad", [np.nan, np.inf, complex(0.0, -np.inf)])
def test_a_target_that_is_no_number_spoils_itself_and_no_other(kernels, order, bad):
    panels = laid(order)
    z = targets(panels, "all about")[:300]
    expected = field(kernels, panels, density(panels), z)
    z = z.copy()
    z[[5, 200]] = bad
    found = field(kernels, panels, density(panels), z)
    matrix = influence(kernels, panels, z, np.ones(len(z), complex))
    others = np.delete(np.arange(len(z)), [5, 200])
    for values in (found[:, [5, 200]], matrix[[5, 200]]):  # no velocity at infinity, or none known
        assert (np.isnan(values) | ((values == 0.0) & np.isinf(bad))).all(), values
    assert np.isfinite(matrix[others]).all()
    # In a block with such a target the others may take another path: other roundings.
    np.testing.assert_allclose(found[:, others], expected[:, others], rtol=1e-13, atol=0)


@both
@every_order
def test_a_strength_that_is_no_number_is_seen_everywhere(kernels, order):
    panels = laid(order)
    strengths = density(panels)
    strengths[0, 3] = np.nan
    found = field(kernels, panels, strengths, targets(panels, "all about"))
    assert np.isnan(found[0]).all()
    assert np.isfinite(found[1]).all()


# --- threads ------------------------------------------------------------------------------------


@pytest.fixture
def any_threads():
    before = ob.threads()
    yield
    ob.threads(before)


@pytest.mark.parametrize("order", [1, 16])
@pytest.mark.parametrize("direction", [20.0, np.arange(0.0, 360.0, 10.0)], ids=["one", "many"])
def test_fields_are_the_same_to_the_last_bit_on_any_number_of_threads(
    any_threads, order, direction
):
    model = ob.solve(ob.circle(2.0), panels={1: 100, 16: 12}[order], order=order)
    points = np.random.default_rng(1).uniform(-3.0, 3.0, (5500, 2))
    answers = []
    for count in (1, 2, 3):
        ob.threads(count)
        answers.append([model.velocity(points, direction), model.stream_function(points, 20.0),
                        ob.inside(model, points)])
    for other in answers[1:]:
        for found, expected in zip(other, answers[0], strict=True):
            np.testing.assert_array_equal(found, expected)


def test_a_call_leaves_the_number_of_threads_and_no_thread_behind(any_threads):
    ob.threads(2)
    alive = threading.active_count()
    ob.solve(ob.circle(2.0), panels=400, order=1).velocity(np.full((4000, 2), 2.0))
    assert ob.threads() == 2
    assert threading.active_count() == alive
