"""Panels: their nodes, and what the kernels need to know of each."""

from dataclasses import dataclass, field
from functools import cache

import numpy as np
from numpy.polynomial import legendre

from offbody.accuracy import Sums
from offbody.images import Copies

AS_PLAIN = Sums(1e-12)  # fast sums as good as the plain ones

# Half-chords from a panel's middle beyond which its nodes are as good as the closed form. Farther
# on the recursion would lose digits; nearer, low orders would leap where the one gives way to the
# other. For order 1, where the odd series takes over. bench/formulations.py prints the table.
_REACH = {
    1: 3.0, 2: 20.0, 3: 10.0, 4: 8.0, 5: 6.0, 6: 5.0, 7: 5.0, 8: 4.0, 9: 3.5, 10: 3.0, 11: 2.5,
}
_REACH_OF_HIGH_ORDERS = 2.0


def reach(order):
    """How far panels of an order are near, in half-chords from their middle."""
    return _REACH.get(order, _REACH_OF_HIGH_ORDERS)


@dataclass(frozen=True, eq=False)
class Panels:
    """All panels of a model, body after body, as the arrays that the kernels take."""

    order: int
    starts: np.ndarray          # (bodies + 1,) first panel of each body
    ends: np.ndarray            # (P, 2) complex, a and b
    normals: np.ndarray         # (P, 2) complex outward normals at a and b
    nodes: np.ndarray           # (N,) complex
    tangents: np.ndarray        # (N,) complex
    weights: np.ndarray         # (N,)
    arcs: np.ndarray            # (N,) arc position on the body, from its outline's break
    end_arcs: np.ndarray        # (P, 2)
    modes: np.ndarray           # (P, order, order) node values to Legendre coefficients
    place_modes: np.ndarray     # (P, places, places) the same from nodes and both ends
    place_tangents: np.ndarray  # (P, places)
    bulge: np.ndarray           # (P, order)
    slack: np.ndarray           # (P, 2)
    size: float
    edged: np.ndarray           # (bodies,) bool: the body's first panel starts at a sharp edge
    copies: Copies | None       # where the surroundings repeat them
    geometry: tuple = field(repr=False, default=())
    sums: Sums = AS_PLAIN       # how fields of them are summed

    @property
    def bodies(self):
        """The number of bodies."""
        return len(self.starts) - 1

    def panel_slice(self, body):
        """The panels of one body."""
        return slice(self.starts[body], self.starts[body + 1])

    def node_slice(self, body):
        """The nodes of one body."""
        return slice(self.starts[body] * self.order, self.starts[body + 1] * self.order)

    @property
    def boxes(self):
        """(bodies, 4) xmin, xmax, ymin, ymax, with room for the curves over their chords."""
        rows = []
        for body in range(self.bodies):
            part = self.panel_slice(body)
            z = self.ends[part]
            height = np.abs(self.bulge[part]).sum(1) + self.slack[part].sum(1)
            room = np.max(np.abs(z[:, 1] - z[:, 0]) * height)
            rows.append(
                [z.real.min() - room, z.real.max() + room, z.imag.min() - room, z.imag.max() + room]
            )
        return np.array(rows)


def assemble(walls, bodies, order, surroundings, closed=True, sums=AS_PLAIN):
    """The panels of all walls between given arc positions, one array of them for each body."""
    x, shares = gauss(order)
    starts = np.concatenate([[0], np.cumsum([len(ends) - 1 for ends in bodies])])
    parts = []
    for wall, ends in zip(walls, bodies, strict=True):
        corners = wall.outline.position(wall.parameter(ends))
        if closed:
            corners[-1] = corners[0]  # one point, so that what meets there cancels exactly
        middle, half = 0.5 * (ends[1:] + ends[:-1]), 0.5 * np.diff(ends)
        arcs = middle[:, None] + half[:, None] * x
        parameter = wall.parameter(arcs.ravel())
        nodes = wall.outline.position(parameter)
        tangents = wall.outline.derivative(parameter)
        tangents /= np.abs(tangents)
        weights = (half[:, None] * shares).ravel()
        a, b = corners[:-1], corners[1:]
        if order == 1:  # straight: the body is the polygon of its panel ends
            nodes, weights = 0.5 * (a + b), np.abs(b - a)
            tangents = (b - a) / weights
        parts.append((a, b, nodes, tangents, weights, arcs.ravel(), ends))
    columns = [list(column) for column in zip(*parts, strict=True)]
    a, b, nodes, tangents, weights, arcs = (np.concatenate(column) for column in columns[:6])
    end_arcs = np.concatenate([np.stack([e[:-1], e[1:]], 1) for e in columns[6]])
    size = float(np.ptp(nodes.real) + np.ptp(nodes.imag))
    modes, place_modes, bulge, slack = _local_shapes(a, b, nodes, order)
    normals = _end_normals(starts, tangents, order)
    geometry = (a, b, np.ascontiguousarray(normals[:, 0]), np.ascontiguousarray(normals[:, 1]),
                nodes, tangents, weights, bulge, slack, reach(order), size)
    place_tangents = tangents.reshape(-1, order)
    if order > 1:
        at_ends = np.stack([1j * normals[:, 0], 1j * normals[:, 1]], axis=1)
        _keep_apart_at_edges(at_ends, walls, starts, place_tangents)
        place_tangents = np.concatenate([place_tangents, at_ends], axis=1)
    return Panels(
        order, starts, np.stack([a, b], 1), normals, nodes, tangents, weights, arcs, end_arcs,
        modes, place_modes, np.ascontiguousarray(place_tangents), bulge, slack, size,
        np.array([wall.edge is not None for wall in walls]),
        Copies.of(nodes, surroundings.period), geometry, sums,
    )


@cache
def gauss(order):
    """Gauss-Legendre points and weights on [-1, 1]."""
    return legendre.leggauss(order)


@cache
def to_modes(order):
    """(order, order): values at the Gauss points of a panel to Legendre coefficients."""
    return np.linalg.inv(legendre.legvander(gauss(order)[0], order - 1))


@cache
def to_ends(order):
    """(2, order): values at the Gauss points of a panel to those at its two ends."""
    return legendre.legvander(np.array([-1.0, 1.0]), order - 1) @ to_modes(order)


@cache
def from_finer(order):
    """(order, 2 order): values at twice as many Gauss points of a panel to those at its own.

    Of the polynomial that is nearest to them in the mean square: what it does far off is theirs.
    """
    x, shares = gauss(2 * order)
    modes = legendre.legvander(x, order - 1).T * shares * (np.arange(order)[:, None] + 0.5)
    return legendre.legvander(gauss(order)[0], order - 1) @ modes


def finer_places(walls, panels):
    """Complex points and unit tangents at twice as many Gauss points of each panel as nodes."""
    x = gauss(2 * panels.order)[0]
    if panels.order == 1:
        a, b = panels.ends.T[..., None]
        return (0.5 * (a + b) + 0.5 * (b - a) * x).ravel(), np.repeat(panels.tangents, 2)
    points, tangents = [], []
    for body, wall in enumerate(walls):
        low, high = panels.end_arcs[panels.panel_slice(body)].T[..., None]
        parameter = wall.parameter((0.5 * (low + high) + 0.5 * (high - low) * x).ravel())
        points.append(wall.outline.position(parameter))
        along = wall.outline.derivative(parameter)
        tangents.append(along / np.abs(along))
    return np.concatenate(points), np.concatenate(tangents)


def _keep_apart_at_edges(at_ends, walls, starts, tangents):
    """Give the two panels that meet at a sharp edge each its own tangent there."""
    extrapolate = to_ends(tangents.shape[1])
    for wall, first, last in zip(walls, starts, starts[1:] - 1, strict=False):
        if wall.edge is not None:
            at_ends[first, 0] = extrapolate[0] @ tangents[first]
            at_ends[last, 1] = extrapolate[1] @ tangents[last]


def _local_shapes(a, b, nodes, order):
    """Per panel: values to Legendre coefficients, and the curve's height over the chord."""
    by_panel = nodes.reshape(-1, order)  # differences of near places are exact, a middle is not
    local = ((by_panel - a[:, None]) - (b[:, None] - by_panel)) / (b - a)[:, None]
    modes = np.linalg.inv(legendre.legvander(local, order - 1))
    # A curve's height is known to about the size of its last coefficients, and to rounding.
    rounding = 1e-12 + 8e-16 * np.abs(nodes).max() / np.abs(0.5 * (b - a))
    if order == 1:
        modes = modes.astype(complex)
        slack = np.stack([np.zeros(len(a)), rounding], axis=1)
        return modes, modes, np.zeros((len(a), 1)), slack
    places = np.concatenate([local, np.tile([-1.0 + 0j, 1.0], (len(a), 1))], axis=1)
    place_modes = np.linalg.inv(legendre.legvander(places, order + 1))
    x, height = local.real, local.imag
    shape = np.linalg.solve(
        legendre.legvander(x, order - 1), (height / (1.0 - x * x))[..., None]
    )[..., 0]
    tail = 10.0 * np.abs(shape[:, -2:]).sum(axis=1)
    return modes, place_modes, np.ascontiguousarray(shape), np.stack([tail, rounding], axis=1)


def _end_normals(starts, tangents, order):
    """(P, 2) outward unit normals at the ends: the mean of the two panels that meet there."""
    by_panel = tangents.reshape(-1, order)
    ends = by_panel @ to_ends(order).T
    normals = np.empty((len(by_panel), 2), complex)
    for lo, hi in zip(starts, starts[1:], strict=False):
        arriving = np.roll(ends[lo:hi, 1], 1)
        mean = -1j * (ends[lo:hi, 0] + arriving)
        # At a cusp the two tangents cancel: outward is then on along the arriving wall.
        mean = np.where(np.abs(mean) > 1e-6, mean, arriving)
        normals[lo:hi, 0] = mean / np.abs(mean)
        normals[lo:hi, 1] = np.roll(normals[lo:hi, 0], -1)
    return normals
