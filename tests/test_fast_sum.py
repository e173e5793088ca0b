"""The fast sum gives what the plain sum gives, to the tolerance that its caller states."""

import numpy as np
import pytest

import offbody as ob
from offbody import _kernels, fast_sum, flow
from offbody.fast_sum import GridPlan, Plan, Points
from offbody.laying import lay, measure
from offbody.panels import assemble

TOLERANCES = (1e-3, 1e-6, 1e-9, 1e-12)
ORDERS = (1, 8, 16)


def laid(outlines, panels=None, order=16):
    """The panels of a list of outlines, ``panels`` on each."""
    walls, gaps = measure(outlines, ob.OpenStream())
    return assemble(walls, lay(walls, gaps, [panels] * len(walls)), order, ob.OpenStream())


def tube_and_rod(order):
    """An ellipse and a circle in its lee, fine enough for the tree to have several levels."""
    bodies = [ob.ellipse(2.0, 1.0), ob.circle(0.5, centre=(1.5, 0.5))]
    return laid(bodies, 400 if order == 1 else 48, order)


def density(panels, rows=1):
    """Coefficients and charges of ``rows`` smooth wall strengths."""
    turn = np.empty(len(panels.nodes))
    for body in range(panels.bodies):
        part = panels.node_slice(body)
        turn[part] = 2 * np.pi * panels.arcs[part] / panels.weights[part].sum()
    strengths = [np.cos((k + 1) * turn) + 0.3 * np.sin(3 * turn) + 0.2 for k in range(rows)]
    return flow._velocity_density(panels, np.array(strengths))


def plain(panels, coefficients, charges, z):
    """The plain sum over all panels."""
    out = np.zeros((len(charges), len(z)), complex)
    _kernels.field(panels.geometry, coefficients, charges, z, out)
    return out


def scattered(count, half_width=2.0):
    random = np.random.default_rng(3)
    return half_width * (random.uniform(-1, 1, count) + 1j * random.uniform(-1, 1, count))


def beside_walls(panels):
    """Places from 1e-12 of the bodies' size to all of it off the walls, and on them."""
    outward = -1j * panels.tangents * panels.size
    offsets = 10.0 ** -np.array([0, 1, 2, 3, 4, 6, 9, 12])
    near = panels.nodes + offsets[:, None] * outward
    return np.concatenate([near.ravel(), panels.nodes, panels.ends[:, 0]])


def error(found, expected):
    """The largest difference over the largest value."""
    return np.abs(found - expected).max() / np.abs(expected).max()


def assert_as_plain(panels, z, tolerance, rows=1):
    """The fast sum differs from the plain one by less than the tolerance."""
    given = density(panels, rows)
    found, expected = Plan(panels, z, tolerance).apply(*given), plain(panels, *given, z)
    assert found.shape == expected.shape
    # Rounding alone makes either sum differ by 1e-14 or so of the largest value from the exact one.
    np.testing.assert_array_less(error(found, expected), max(tolerance, 1e-13))


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("tolerance", TOLERANCES)
def test_scattered_points_get_the_plain_sum_to_the_tolerance(order, tolerance):
    assert_as_plain(tube_and_rod(order), scattered(3000), tolerance, rows=2)


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("tolerance", TOLERANCES)
def test_points_beside_and_on_the_walls_get_the_plain_sum_to_the_tolerance(order, tolerance):
    panels = tube_and_rod(order)
    assert_as_plain(panels, beside_walls(panels), tolerance)


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("tolerance", TOLERANCES)
def test_a_grid_gets_the_plain_sum_to_the_tolerance(order, tolerance):
    panels, x, y = tube_and_rod(order), np.linspace(-2, 7, 83), np.linspace(-9, 2, 61)
    given = density(panels, 2)
    found = GridPlan(panels, x, y, tolerance).apply(*given)
    expected = plain(panels, *given, (x + 1j * y[:, None]).ravel()).reshape(found.shape)
    np.testing.assert_array_less(error(found, expected), max(tolerance, 1e-13))


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("place", [(0.0, 0.0), (37.0, -12.0)])
def test_panels_graded_to_a_sharp_edge_keep_the_tolerance(order, place):
    panels = laid([ob.four_digit("2412").moved(*place)], order=order)
    z = np.concatenate([beside_walls(panels), complex(*place) + scattered(2000)])
    # The least panels are 1e-8 chords long: rounding of places at 37 chords moves them by 1e-6 of
    # their length, so that an order-1 sum by other nodes cannot agree to better than 1e-10.
    assert_as_plain(panels, z, 1e-9 if order == 1 else 1e-10)


def test_a_panel_much_larger_than_the_boxes_about_it_is_near_where_it_should_be():
    # One body of a few long panels that lies among many short ones.
    few = laid([ob.ellipse(8.0, 1.0)], 8)
    many = laid([ob.circle(0.01, centre=(0.3 * k - 1.0, 0.51)) for k in range(6)], 40)
    merged = assemble_together(few, many)
    assert_as_plain(merged, np.concatenate([beside_walls(merged), scattered(3000, 5.0)]), 1e-9)


def assemble_together(*parts):
    """The panels of several lots as one."""
    joined = {
        name: np.concatenate([getattr(part, name) for part in parts])
        for name in ("ends", "normals", "nodes", "tangents", "weights", "arcs", "end_arcs", "modes",
                     "place_modes", "place_tangents", "bulge", "slack", "edged")
    }
    counts = np.concatenate([np.diff(part.starts) for part in parts])
    size = max(part.size for part in parts)
    first = parts[0].geometry
    geometry = tuple(
        size if k == 10 else first[k] if k == 9
        else np.concatenate([part.geometry[k] for part in parts])
        for k in range(11)
    )
    return type(parts[0])(
        order=parts[0].order, starts=np.concatenate([[0], np.cumsum(counts)]), size=size,
        copies=None, geometry=geometry, **joined,
    )


def test_a_narrow_gap_keeps_the_tolerance():
    panels = laid([ob.circle(1.0), ob.circle(1.0, centre=(1.001, 0.0))])
    assert_as_plain(panels, beside_walls(panels), 1e-12)


@pytest.mark.parametrize("order", ORDERS)
def test_no_target_one_target_and_many_at_one_place_are_served(order):
    panels = tube_and_rod(order)
    assert_as_plain_or_empty(panels, np.zeros(0, complex))
    assert_as_plain_or_empty(panels, np.array([1.3 + 0.2j]))
    assert_as_plain_or_empty(panels, np.full(3000, panels.nodes[5] + 1e-4j))


def assert_as_plain_or_empty(panels, z):
    given = density(panels, 2)
    found, expected = Plan(panels, z).apply(*given), plain(panels, *given, z)
    scale = np.abs(expected).max(initial=1.0)
    np.testing.assert_allclose(found, expected, rtol=0, atol=1e-9 * scale)


def test_targets_a_thousand_million_sizes_away_keep_their_own_digits():
    panels = tube_and_rod(16)
    z = 1e9 * np.exp(1j * np.linspace(0, 6, 50))
    given = density(panels)
    expected = plain(panels, *given, z)
    # The strengths of both signs sum up with a rounding of about 1e-15.
    np.testing.assert_allclose(Plan(panels, z).apply(*given), expected, rtol=1e-13)


def test_far_targets_do_not_spoil_near_ones():
    panels, z = tube_and_rod(16), scattered(500)
    given = density(panels)
    alone = Plan(panels, z).apply(*given)
    together = Plan(panels, np.append(z, [1e9, 1e300j])).apply(*given)[:, :500]
    # The lists may differ, so that only the tolerance is promised; both are far better than it.
    np.testing.assert_array_less(error(together, alone), 1e-9)


def test_a_target_that_is_not_finite_gets_nan_and_harms_no_other():
    panels, z = tube_and_rod(16), scattered(500)
    given = density(panels)
    z[[3, 77]] = complex(np.nan, 0.0), complex(1.0, np.inf)
    found = Plan(panels, z).apply(*given)[0]
    assert np.flatnonzero(np.isnan(found)).tolist() == [3, 77]
    finite = np.isfinite(z)
    np.testing.assert_array_less(error(found[finite], plain(panels, *given, z[finite])[0]), 1e-9)


def test_grid_lines_may_come_in_any_order_and_hold_nan():
    panels, given = tube_and_rod(16), density(tube_and_rod(16))
    x, y = np.array([1.4, -2.0, np.nan, 0.1, 1.4]), np.array([3.0, -0.7, 2.2])
    found = GridPlan(panels, x, y).apply(*given)[0]
    expected = plain(panels, *given, (x + 1j * y[:, None]).ravel()).reshape(3, 5)
    np.testing.assert_array_equal(np.isnan(found), np.isnan(expected))
    np.testing.assert_allclose(found[:, [0, 1, 3, 4]], expected[:, [0, 1, 3, 4]], atol=1e-9)


@pytest.mark.parametrize("rows", [1, 3, 11])
def test_each_of_several_densities_gets_its_own_sum(rows):
    panels = tube_and_rod(16)
    assert_as_plain(panels, np.concatenate([scattered(500), beside_walls(panels)]), 1e-9, rows)


def test_the_result_does_not_depend_on_the_number_of_threads():
    panels = tube_and_rod(16)
    given, z = density(panels, 2), scattered(4000)
    before = ob.threads()
    try:
        results = []
        for count in (1, 2, 5):
            ob.threads(count)
            results.append(Plan(panels, z).apply(*given))
    finally:
        ob.threads(before)
    np.testing.assert_array_equal(results[0], results[1])
    np.testing.assert_array_equal(results[0], results[2])


def test_without_near_panels_the_closed_forms_alone_are_left_out():
    panels, z = tube_and_rod(16), scattered(2000)
    coefficients, charges = density(panels)
    plan = Plan(panels, z, 1e-12)
    near = plan.apply(coefficients, np.zeros_like(charges))
    far = plan.apply(coefficients, charges, near=False)
    assert np.abs(near).max() > 0.1
    np.testing.assert_allclose(near + far, plan.apply(coefficients, charges), atol=1e-13)


@pytest.mark.parametrize("tolerance", TOLERANCES)
def test_point_strengths_get_the_plain_sum_to_the_tolerance(tolerance):
    places, z = scattered(1500, 1.0), scattered(2000, 1.5)
    charges = np.random.default_rng(4).normal(size=(2, 1500)) + 0j
    expected = np.zeros((2, len(z)), complex)
    _kernels.point_field(places, charges, z, expected)
    found = Plan(Points(places), z, tolerance).apply(None, charges)
    np.testing.assert_array_less(error(found, expected), max(tolerance, 1e-13))


def test_points_at_one_place_act_as_one_point():
    places = np.full(400, 0.3 + 0.1j)
    z = np.array([0.30001 + 0.1j, 5.0, 1e4j])
    found = Plan(Points(places), z).apply(None, np.full((1, 400), 0.25 + 0j))
    np.testing.assert_allclose(found[0], 100.0 / (z - places[0]), rtol=1e-12)


@pytest.mark.parametrize("order", ORDERS)
def test_inside_is_what_the_test_by_bodies_says(order):
    bodies = [ob.four_digit("2412"), ob.circle(0.3, centre=(0.5, 0.4))]
    bodies.append(ob.polygon([(0, -1), (1, -1), (1, -0.5), (0, -0.5)], corner_radius=0.1))
    panels = laid(bodies, order=order)
    inward = panels.nodes + 1j * panels.tangents * panels.size * 1e-6
    z = np.concatenate([scattered(4000, 1.5), beside_walls(panels), inward])
    np.testing.assert_array_equal(
        Plan(panels, z, 1e-3).inside(), flow.enclosing_body(panels, z) >= 0
    )


def test_inside_knows_a_grid():
    panels = tube_and_rod(16)
    x, y = np.linspace(-1.2, 2.0, 90), np.linspace(-0.8, 0.9, 70)
    expected = flow.enclosing_body(panels, (x + 1j * y[:, None]).ravel()) >= 0
    np.testing.assert_array_equal(GridPlan(panels, x, y).inside().ravel(), expected)


def test_it_is_worth_while_for_many_pairs_and_not_for_few():
    panels = tube_and_rod(16)
    assert not fast_sum.worth_it(panels, 10)
    assert not fast_sum.worth_it(Points(panels.nodes[:50]), 10_000)
    assert fast_sum.worth_it(panels, 100_000)
    assert fast_sum.worth_it(tube_and_rod(1), 1000 * 1000, grid=True)


@pytest.mark.parametrize("tolerance", [0.0, 1.0, 1e-16, np.nan, "fine"])
def test_a_tolerance_out_of_range_is_refused_by_name(tolerance):
    with pytest.raises(ob.InputError, match="tolerance"):
        Plan(tube_and_rod(16), scattered(3), tolerance)
