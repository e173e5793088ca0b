"""Velocity, gradient and potential of strengths on panels: arrays in, arrays out.

A strength g = gamma + i v at the nodes (vortex and source in one) is the complex velocity
W = g conj(T) on the wall. Three densities go through one Cauchy integral: W itself gives the
velocity, dW/dz its gradient, and the integral of W along the wall the complex potential.
"""

import numpy as np
from numpy.polynomial import legendre

from offbody import _kernels, fast_sum, images
from offbody.fast_sum import GridPlan, Plan, Points
from offbody.images import Copies
from offbody.panels import to_ends
from offbody.parallel import over_chunks
from offbody.surroundings import reflected

OVER_TWO_PI_I = 1.0 / (2j * np.pi)
MATRIX_ENTRIES = 4_000_000  # of an influence matrix at a time: two of 32 MB
INSIDE = 1e-3               # tolerance of a winding number, which is 0 or 1


def wall_influence(panels, surroundings):
    """(N, N) tangential velocity at the nodes, just outside, of unit vortex strengths there."""
    return images.matrix(
        panels, surroundings, lambda z, turn: _node_influence(panels, z, turn),
        panels.nodes, panels.tangents,
    )


def _node_influence(panels, z, turn):
    return _influence(panels, panels.modes, panels.tangents.reshape(-1, panels.order), z, turn)


def _influence(panels, modes, tangents, z, turn):
    """(len(z), columns) real and imaginary parts of turn (u - i v) of unit vortex strengths."""
    real = np.empty((len(z), tangents.size))
    imag = np.empty_like(real)

    def work(part):
        _kernels.influence(
            panels.geometry, modes, tangents, z[part], turn[part], real[part], imag[part]
        )

    over_chunks(work, len(z), len(panels.nodes))
    return real, imag


def velocity_by_matrix(panels, surroundings, strengths, z):
    """(R, len(z)) complex velocity of R strengths (R, N), through the influence matrix.

    The way for many strengths at few points: one evaluation of the panels serves them all.
    """
    charges = OVER_TWO_PI_I * panels.weights * strengths
    return images.fields(
        panels.copies, surroundings, lambda z: _by_matrix(panels, strengths, z), charges, z
    )


def _by_matrix(panels, strengths, z):
    at_once = max(1, MATRIX_ENTRIES // len(panels.nodes))
    parts = [z[first : first + at_once] for first in range(0, len(z), at_once)] or [z]
    return np.concatenate([_by_one_matrix(panels, strengths, part) for part in parts], axis=1)


def _by_one_matrix(panels, strengths, z):
    real, imag = _influence(
        panels, panels.place_modes, panels.place_tangents, z, np.ones(len(z), complex)
    )
    places = _at_places(panels, strengths).reshape(len(strengths), -1)
    vortex = np.ascontiguousarray(places.real)
    total = vortex @ real.T + 1j * (vortex @ imag.T)
    if np.iscomplexobj(strengths):
        source = np.ascontiguousarray(places.imag)
        total += 1j * (source @ real.T) - source @ imag.T
    return total


def velocity_on_grid(panels, surroundings, strengths, x, y):
    """(R, len(y), len(x)) complex velocity of strengths (R, N) on the tensor grid of x and y."""
    if panels.copies is not None or not _fast(panels, len(x) * len(y), len(strengths), grid=True):
        z = (x + 1j * y[:, None]).ravel()
        return velocity(panels, surroundings, strengths, z).reshape(-1, len(y), len(x))
    density, tolerance = _velocity_density(panels, strengths), panels.sums.tolerance
    total = GridPlan(panels, x, y, tolerance).apply(*density)
    if surroundings.mirror is not None:
        image = GridPlan(panels, x, 2.0 * surroundings.mirror - y, tolerance)
        total += image.apply(*density).conj()
    return total


def _fast(panels, targets, densities, grid=False):
    """Whether a sum is to be a fast one."""
    if panels.sums.fast is None:
        return fast_sum.worth_it(panels, targets, densities, grid)
    return panels.sums.fast and len(panels.nodes) > 0


def velocity(panels, surroundings, strengths, z):
    """(R, len(z)) complex velocity u - i v that R strengths (R, N) induce at complex z."""
    coefficients, charges = _velocity_density(panels, strengths)
    return _field(panels, surroundings, coefficients, charges, z)


def gradient(panels, surroundings, strengths, z):
    """(R, len(z)) derivative dW/dz of the complex velocity that R strengths induce at z."""
    if panels.order == 1:
        return _gradient_of_constant(panels, surroundings, strengths, z)
    coefficients, _ = _velocity_density(panels, strengths)
    half = 0.5 * (panels.ends[:, 1] - panels.ends[:, 0])
    slope = legendre.legder(np.moveaxis(coefficients, -1, 0), axis=0)
    slope = np.moveaxis(slope, 0, -1) / half[:, None]
    total = _field(panels, surroundings, *_from_coefficients(panels, slope), z)
    if panels.edged.any():
        total += _point_field(panels, surroundings, *_steps_at_edges(panels, strengths), z)
    return total


def _steps_at_edges(panels, strengths):
    """Points, and charges (R, points) that the density's steps are there: where it is not closed.

    At a sharp edge it starts and ends with values of their own; the true one falls to rest there,
    within less than a panel's length.
    """
    values = _at_places(panels, strengths) * panels.place_tangents.conj()
    first = panels.starts[:-1][panels.edged]
    last = panels.starts[1:][panels.edged] - 1
    points = np.concatenate([panels.ends[first, 0], panels.ends[last, 1]])
    steps = np.concatenate(
        [values[:, first, panels.order], -values[:, last, panels.order + 1]], axis=1
    )
    return points, OVER_TWO_PI_I * steps


def potential(panels, surroundings, strengths, cuts, downstream, z):
    """(R, len(z)) complex potential of R strengths at z.

    cuts (R, bodies): the panel at whose first end each body's integral along the wall starts; the
    cut that a net source makes there runs along ``downstream`` (R,), in radians.
    """
    coefficients, _ = _velocity_density(panels, strengths)
    half = 0.5 * (panels.ends[:, 1] - panels.ends[:, 0])
    rise = np.moveaxis(legendre.legint(np.moveaxis(coefficients, -1, 0), lbnd=-1, axis=0), 0, -1)
    rise = rise * half[:, None]
    steps = 2.0 * half * coefficients[..., 0]
    totals = np.empty((len(strengths), panels.bodies), complex)
    last = np.empty((len(strengths), panels.bodies), complex)
    for row in range(len(strengths)):
        for body in range(panels.bodies):
            part = panels.panel_slice(body)
            shift = cuts[row, body] - part.start
            turned = np.roll(steps[row, part], -shift)
            before = np.concatenate([[0.0], np.cumsum(turned)])
            rise[row, part, 0] += np.roll(before[:-1], shift)
            totals[row, body] = before[-1]
            # Where the integral ends: a closed wall's where it starts, an open one's elsewhere.
            last[row, body] = np.roll(panels.ends[part, 1], -shift)[-1]
    total = _field(panels, surroundings, *_from_coefficients(panels, rise), z)

    def logarithms(z, downstream):
        for row in range(len(strengths)):
            for body in range(panels.bodies):
                away = z - last[row, body]
                log = images.log_sinh(surroundings.period, away, downstream[row])
                yield row, totals[row, body] * log

    for row, part in logarithms(z, downstream):
        total[row] -= part
    if surroundings.mirror is not None:
        for row, part in logarithms(reflected(surroundings, z), -downstream):
            total[row] -= part.conj()
    return total


def _at_places(panels, strengths):
    """(R, P, places) strengths at the nodes and both ends of each panel.

    Panels that meet at an end share the mean of their two extrapolations, except at a sharp edge.
    Without it the logarithms of the two would not cancel there, and a target near an end would see
    their difference.
    """
    by_panel = strengths.reshape(len(strengths), len(panels.ends), panels.order)
    if panels.order == 1:
        return by_panel
    ends = by_panel @ to_ends(panels.order).T
    for body in range(panels.bodies):
        part = ends[:, panels.panel_slice(body)]
        shared = 0.5 * (part[..., 0] + np.roll(part[..., 1], 1, axis=1))
        if panels.edged[body]:
            edge = part[:, 0, 0].copy(), part[:, -1, 1].copy()
        part[..., 0] = shared
        part[..., 1] = np.roll(shared, -1, axis=1)
        if panels.edged[body]:
            part[:, 0, 0], part[:, -1, 1] = edge
    return np.concatenate([by_panel, ends], axis=2)


def _velocity_density(panels, strengths):
    """Coefficients and charges, as the kernel takes them, of the wall velocity of strengths."""
    strengths = np.ascontiguousarray(strengths)
    values = _at_places(panels, strengths) * panels.place_tangents.conj()
    charges = OVER_TWO_PI_I * panels.weights * strengths
    coefficients = -OVER_TWO_PI_I * (panels.place_modes @ values[..., None])[..., 0]
    return coefficients, charges


def _from_coefficients(panels, coefficients):
    """Coefficients (already times -1/(2 pi i)) and the charges that they make at the nodes."""
    middle = 0.5 * (panels.ends[:, 0] + panels.ends[:, 1])
    half = 0.5 * (panels.ends[:, 1] - panels.ends[:, 0])
    local = (panels.nodes.reshape(-1, panels.order) - middle[:, None]) / half[:, None]
    basis = legendre.legvander(local, coefficients.shape[-1] - 1)
    values = (basis @ coefficients[..., None]).reshape(len(coefficients), len(panels.nodes))
    return coefficients, -values * panels.tangents * panels.weights


def _gradient_of_constant(panels, surroundings, strengths, z):
    """Panels of constant strength: the jumps between them are point strengths at their ends."""
    wall = OVER_TWO_PI_I * strengths * panels.tangents.conj()
    jumps = wall.copy()
    for body in range(panels.bodies):
        part = panels.panel_slice(body)
        jumps[:, part] -= np.roll(wall[:, part], 1, axis=1)
    return _point_field(panels, surroundings, panels.ends[:, 0], jumps, z)


def _point_field(panels, surroundings, points, charges, z):
    """(R, len(z)) sum of charge/(z - point), charges (R, points), images included."""
    points, charges = np.ascontiguousarray(points), np.ascontiguousarray(charges)

    def free(z):
        given = Points(points)
        if fast_sum.worth_it(given, len(z), len(charges)) and panels.sums.fast is not False:
            return Plan(given, z, panels.sums.tolerance).apply(None, charges)
        out = np.zeros((len(charges), len(z)), complex)
        over_chunks(
            lambda part: _kernels.point_field(points, charges, z[part], out[:, part]),
            len(z), len(points) * len(charges),
        )
        return out

    copies = None if panels.copies is None else Copies.of(points, panels.copies.period)
    return images.fields(copies, surroundings, free, charges, z)


def _field(panels, surroundings, coefficients, charges, z):
    return images.fields(
        panels.copies, surroundings, lambda z: _sum(panels, coefficients, charges, z), charges, z
    )


def _sum(panels, coefficients, charges, z):
    coefficients = np.ascontiguousarray(coefficients, complex)
    charges = np.ascontiguousarray(charges, complex)
    if _fast(panels, len(z), len(charges)):
        return Plan(panels, z, panels.sums.tolerance).apply(coefficients, charges)
    out = np.zeros((len(charges), len(z)), complex)

    def work(part):
        _kernels.field(panels.geometry, coefficients, charges, z[part], out[:, part])

    over_chunks(work, len(z), len(panels.nodes) * len(charges))
    return out


def inside(panels, z):
    """(len(z),) whether each point is inside a body; a wall counts as outside."""
    if _fast(panels, len(z), 1):
        return Plan(panels, z, INSIDE).inside()
    return enclosing_body(panels, z) >= 0


def inside_on_grid(panels, x, y):
    """(len(y), len(x)) whether each place of a tensor grid is inside a body."""
    if panels.copies is None and _fast(panels, len(x) * len(y), 1, grid=True):
        return GridPlan(panels, x, y, INSIDE).inside()
    z = x + 1j * y[:, None]
    z = z if panels.copies is None else panels.copies.home(z)
    return inside(panels, z.ravel()).reshape(z.shape)


def enclosing_body(panels, z):
    """(len(z),) index of the body that holds each point, or -1; a wall counts as outside."""
    body = np.empty(len(z), np.intp)
    starts, boxes = panels.starts.astype(np.intp), panels.boxes

    def work(part):
        _kernels.enclosing_body(panels.geometry, starts, boxes, z[part], body[part])

    over_chunks(work, len(z), len(panels.ends))
    return body
