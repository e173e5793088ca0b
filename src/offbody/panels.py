"""Panels on outlines: where they end, their nodes, and what the kernels need to know of each.

The length of panels follows a field along the wall: the least of what curvature, a sharp edge, a
jump of curvature and the nearest other wall ask for, made to change slowly, so that neighbours
differ by less than a factor of about e. Panels share the integral of 1/length equally.
"""

from dataclasses import dataclass, field
from functools import cache

import numpy as np
from numpy.polynomial import legendre
from scipy.spatial import cKDTree

from offbody.arcs import Arcs
from offbody.errors import InputError
from offbody.images import Copies
from offbody.surroundings import copies_of

GROWTH = 1.0              # greatest slope of the length field: neighbours within a factor of e
PER_CURVATURE = 0.5       # panel length over the least radius of curvature on it
PER_PERIMETER = 1.0 / 6.0
EDGE_FLOOR = 1e-8         # least panel at a sharp edge, of the perimeter
JOIN_FLOOR = 1.0 / 8.0    # least panel at a jump of curvature, of what curvature asks for there
PER_GAP = 1.0             # panel length over the scale on which a gap changes along the wall
TOUCH = 1e-9              # bodies closer than this fraction of the smaller one touch

# Beyond this many half-chords from its middle a panel is far: its nodes, or for order 1 the odd
# series, are as good as the closed form there. bench/formulations.py prints the table behind it.
REACH = {1: 3.0, 2: 10.0, 3: 10.0, 4: 9.0, 5: 7.0, 6: 6.0, 7: 5.0, 8: 4.5}
REACH_OF_HIGH_ORDERS = 3.0


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
    slack: np.ndarray           # (P,)
    size: float
    edged: np.ndarray           # (bodies,) bool: the body's first panel starts at a sharp edge
    copies: Copies | None       # where the surroundings repeat them
    geometry: tuple = field(repr=False, default=())

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
            room = np.max(
                np.abs(z[:, 1] - z[:, 0]) * (np.abs(self.bulge[part]).sum(1) + self.slack[part])
            )
            rows.append(
                [z.real.min() - room, z.real.max() + room, z.imag.min() - room, z.imag.max() + room]
            )
        return np.array(rows)


def lay(outlines, surroundings, counts, order):
    """The panels of all outlines: ``counts`` per body, or None where the field is to decide."""
    walls = [Arcs(outline) for outline in outlines]
    gaps = _gaps(walls, surroundings)
    bodies = []
    for wall, gap, count in zip(walls, gaps, counts, strict=True):
        lengths = _length_field(wall, gap)
        bodies.append(_ends(wall, lengths, count))
    return _assemble(walls, bodies, order, surroundings), walls


def _gaps(walls, surroundings):
    """Per body, each sample's gap scale to the nearest other wall or image; overlaps are refused.

    Stretches longer than their distance to it are halved until the samples see the gap as it is.
    """
    sizes = [np.ptp(w.sample_points.real) + np.ptp(w.sample_points.imag) for w in walls]
    for body, wall in enumerate(walls):
        _refuse_beyond_walls(wall, body, surroundings, sizes[body])
    if len(walls) == 1 and not copies_of(surroundings, walls[0].sample_points[:1]):
        return [np.full(len(walls[0].sample_points), np.inf)]
    for _ in range(40):
        found = [_nearest(walls, body, surroundings, sizes) for body in range(len(walls))]
        coarse = [d < w.sample_stretch for (d, _), w in zip(found, walls, strict=True)]
        if not any(c.any() for c in coarse):
            break
        for wall, marked in zip(walls, coarse, strict=True):
            if marked.any():
                wall.refine(marked)
    for body, wall in enumerate(walls):
        for other, around in enumerate(walls):
            if other != body and _holds(around, wall.sample_points[:1]).any():
                _refuse_overlap(walls, body, other, wall.sample_points[0])
    return [_gap_scale(*facing) for facing in found]


def _nearest(walls, body, surroundings, sizes):
    """Distance from each sample of a body to the nearest other wall, and both curvatures in sum."""
    cloud, owner, bending = [], [], []
    for k, wall in enumerate(walls):
        seen = copies_of(surroundings, wall.sample_points)
        for points in seen if k == body else [wall.sample_points, *seen]:
            cloud.append(points)
            owner.append(np.full(len(points), k))
            bending.append(np.abs(wall.sample_curvature))
    here = walls[body].sample_points
    cloud = np.concatenate(cloud)
    tree = cKDTree(np.stack([cloud.real, cloud.imag], 1))
    distance, which = tree.query(np.stack([here.real, here.imag], 1))
    nearest = int(np.argmin(distance))
    other = int(np.concatenate(owner)[which[nearest]])
    if distance[nearest] < TOUCH * min(sizes[body], sizes[other]):
        _refuse_overlap(walls, body, other, here[nearest])
    return distance, np.abs(walls[body].sample_curvature) + np.concatenate(bending)[which]


def _gap_scale(distance, curvature):
    """How far along the wall a gap stays about as wide, from the two walls' curvatures in sum.

    A gap d between radii that combine to R widens as d + x^2/(2 R): within x = sqrt(d R). Where
    the walls are farther apart than R, it is the distance that counts; parallel walls, never.
    """
    with np.errstate(divide="ignore"):
        return np.sqrt(distance * (distance + 1.0 / curvature))


def _refuse_beyond_walls(wall, body, surroundings, size):
    for k, height in enumerate(surroundings.walls):
        sign = 1.0 if k == 0 else -1.0
        clear = np.min(sign * (wall.sample_points.imag - height))
        if clear < TOUCH * size:
            side, way = (("below", "up") if k == 0 else ("above", "down"))
            raise InputError(
                f"body {body} ({wall.outline.name}) touches the wall y = {height:g} or reaches "
                f"{max(0.0, -clear):.3g} {side} it; move it {way}"
            )


def _refuse_overlap(walls, body, other, place):
    where = f"near ({place.real:.6g}, {place.imag:.6g})"
    if body == other:
        raise InputError(
            f"body {body} ({walls[body].outline.name}) overlaps or touches its own copy {where}; "
            "make the pitch larger"
        )
    first, second = sorted((body, other))
    raise InputError(
        f"bodies {first} ({walls[first].outline.name}) and {second} "
        f"({walls[second].outline.name}) overlap or touch {where}; move them apart or join them "
        "to one outline"
    )


def _holds(wall, z):
    """Whether the polygon through the samples of a wall holds the points."""
    angles = np.angle(
        (np.roll(wall.sample_points, -1)[None, :] - z[:, None])
        / (wall.sample_points[None, :] - z[:, None])
    )
    return np.abs(angles.sum(axis=1)) > np.pi


def _length_field(wall, gap):
    """The panel length wanted at each sample of a wall."""
    arcs, total = wall.sample_arcs, wall.length
    curvature = np.abs(wall.sample_curvature)
    if wall.edge is not None:  # on the last stretch a singular parameter makes noise of it
        curvature[np.minimum(arcs, total - arcs) < EDGE_FLOOR * total] = 0.0
    wanted = PER_PERIMETER * total / np.maximum(1.0, PER_PERIMETER * total / PER_CURVATURE * curvature)
    wanted = np.minimum(wanted, PER_GAP * gap)
    wanted = _slowly(arcs, wanted, total)
    for place in wall.breaks:
        if place == wall.edge:
            floor = EDGE_FLOOR * total
        elif wall.outline.joins:
            floor = JOIN_FLOOR * np.interp(place, arcs, wanted)
        else:
            continue
        away = np.abs((arcs - place + 0.5 * total) % total - 0.5 * total)
        wanted = np.minimum(wanted, floor + GROWTH * away)
    return wanted


def _slowly(arcs, wanted, total):
    """The greatest field below ``wanted`` on a closed curve whose slope stays below GROWTH."""
    around = np.concatenate([arcs - total, arcs, arcs + total])
    field_ = np.tile(wanted, 3)
    rising = np.minimum.accumulate(field_ - GROWTH * around) + GROWTH * around
    falling = np.minimum.accumulate((field_ + GROWTH * around)[::-1])[::-1] - GROWTH * around
    return np.minimum(rising, falling)[len(arcs) : 2 * len(arcs)]


def _ends(wall, lengths, count):
    """Arc positions of the panel ends of one body, from its first break to its return there."""
    arcs = np.concatenate([[0.0], wall.sample_arcs, [wall.length]])
    density = 1.0 / np.concatenate([lengths[:1], lengths, lengths[-1:]])
    shares = np.concatenate(
        [[0.0], np.cumsum(0.5 * (density[1:] + density[:-1]) * np.diff(arcs))]
    )
    breaks = np.append(wall.breaks, wall.length)
    at_breaks = np.interp(breaks, arcs, shares)
    needs = np.diff(at_breaks)
    if count is None:
        numbers = np.maximum(1, np.ceil(needs - 1e-9)).astype(int)
    else:
        numbers = _apportion(needs, count, wall.outline.name)
    pieces = []
    for k, number in enumerate(numbers):
        steps = np.linspace(at_breaks[k], at_breaks[k + 1], number + 1)[1:-1]
        pieces += [[breaks[k]], np.interp(steps, shares, arcs)]
    return np.concatenate([*pieces, [wall.length]])


def _apportion(needs, count, name):
    """``count`` panels shared out to the pieces between breaks, each at least one."""
    least = max(len(needs), 2)
    if count < least:
        raise InputError(
            f"panels = {count}: {name} has {len(needs)} smooth pieces and needs at least "
            f"{least} panels"
        )
    numbers = np.ones(len(needs), int)
    for _ in range(count - len(needs)):
        numbers[np.argmax(needs / numbers)] += 1
    return numbers


def _assemble(walls, bodies, order, surroundings):
    """Nodes, tangents, weights and local shapes of the panels between the given arc positions."""
    x, shares = gauss(order)
    starts = np.concatenate([[0], np.cumsum([len(ends) - 1 for ends in bodies])])
    parts = []
    for wall, ends in zip(walls, bodies, strict=True):
        corners = wall.outline.position(wall.parameter(ends))
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
    a, b, nodes, tangents, weights, arcs = (np.concatenate(p) for p in list(zip(*parts))[:6])
    end_arcs = np.concatenate([np.stack([e[:-1], e[1:]], 1) for *_, e in parts])
    size = float(np.ptp(nodes.real) + np.ptp(nodes.imag))
    modes, place_modes, bulge, slack = _local_shapes(a, b, nodes, order)
    normals = _end_normals(starts, tangents, order)
    geometry = (a, b, np.ascontiguousarray(normals[:, 0]), np.ascontiguousarray(normals[:, 1]),
                nodes, tangents, weights, bulge, slack, REACH.get(order, REACH_OF_HIGH_ORDERS), size)
    place_tangents = tangents.reshape(-1, order)
    if order > 1:
        at_ends = np.stack([1j * normals[:, 0], 1j * normals[:, 1]], axis=1)
        _keep_apart_at_edges(at_ends, walls, starts, place_tangents)
        place_tangents = np.concatenate([place_tangents, at_ends], axis=1)
    return Panels(
        order, starts, np.stack([a, b], 1), normals, nodes, tangents, weights, arcs, end_arcs,
        modes, place_modes, np.ascontiguousarray(place_tangents), bulge, slack, size,
        np.array([wall.edge is not None for wall in walls]),
        Copies.of(nodes, surroundings.period), geometry,
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


def _keep_apart_at_edges(at_ends, walls, starts, tangents):
    """Give the two panels that meet at a sharp edge each its own tangent there."""
    extrapolate = to_ends(tangents.shape[1])
    for wall, first, last in zip(walls, starts, starts[1:] - 1, strict=False):
        if wall.edge is not None:
            at_ends[first, 0] = extrapolate[0] @ tangents[first]
            at_ends[last, 1] = extrapolate[1] @ tangents[last]


def _local_shapes(a, b, nodes, order):
    """Per panel: values to Legendre coefficients, and the curve's height over the chord."""
    local = (nodes.reshape(-1, order) - 0.5 * (a + b)[:, None]) / (0.5 * (b - a))[:, None]
    modes = np.linalg.inv(legendre.legvander(local, order - 1))
    if order == 1:
        modes = modes.astype(complex)
        return modes, modes, np.zeros((len(a), 1)), np.full(len(a), 1e-10)
    places = np.concatenate([local, np.tile([-1.0 + 0j, 1.0], (len(a), 1))], axis=1)
    place_modes = np.linalg.inv(legendre.legvander(places, order + 1))
    x, height = local.real, local.imag
    shape = np.linalg.solve(
        legendre.legvander(x, order - 1), (height / (1.0 - x * x))[..., None]
    )[..., 0]
    # A height is known to about the size of its last coefficients, and to the rounding of nodes.
    tail = np.abs(shape[:, -2:]).sum(axis=1)
    rounding = 8e-16 * np.abs(nodes).max() / np.abs(0.5 * (b - a))
    return modes, place_modes, np.ascontiguousarray(shape), 10.0 * tail + 1e-10 + rounding


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
