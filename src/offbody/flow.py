"""Velocity, gradient and potential of strengths on panels: arrays in, arrays out.

A strength g = gamma + i v at the nodes (vortex and source in one) is the complex velocity
W = g conj(T) on the wall. Three densities go through one Cauchy integral: W itself gives the
velocity, dW/dz its gradient, and the integral of W along the wall the complex potential.
"""

import numpy as np
from numpy.polynomial import legendre

from offbody import _kernels, images
from offbody.images import Copies
from offbody.panels import to_ends
from offbody.parallel import over_chunks
from offbody.surroundings import reflected

OVER_TWO_PI_I = 1.0 / (2j * np.pi)


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
    return _field(panels, surroundings, *_from_coefficients(panels, slope), z)


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
    corners = np.ascontiguousarray(panels.ends[:, 0])

    def free(z):
        out = np.zeros((len(strengths), len(z)), complex)
        over_chunks(
            lambda part: _kernels.point_field(corners, jumps, z[part], out[:, part]),
            len(z), len(corners) * len(strengths),
        )
        return out

    copies = Copies.of(corners, surroundings.period)
    return images.fields(copies, surroundings, free, jumps, z)


def _field(panels, surroundings, coefficients, charges, z):
    return images.fields(
        panels.copies, surroundings, lambda z: _sum(panels, coefficients, charges, z), charges, z
    )


def _sum(panels, coefficients, charges, z):
    coefficients = np.ascontiguousarray(coefficients, complex)
    charges = np.ascontiguousarray(charges, complex)
    out = np.zeros((len(charges), len(z)), complex)

    def work(part):
        _kernels.field(panels.geometry, coefficients, charges, z[part], out[:, part])

    over_chunks(work, len(z), len(panels.nodes) * len(charges))
    return out


def enclosing_body(panels, z):
    """(len(z),) index of the body that holds each point, or -1; a wall counts as outside."""
    body = np.empty(len(z), np.intp)
    starts, boxes = panels.starts.astype(np.intp), panels.boxes

    def work(part):
        _kernels.enclosing_body(panels.geometry, starts, boxes, z[part], body[part])

    over_chunks(work, len(z), len(panels.ends))
    return body
