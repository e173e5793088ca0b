"""Lanes: each side of a wall from its front stagnation point downstream, and where flow leaves it.

One lane for each direction and side. Its stations are the panels' nodes, counter-clockwise on the
right of the stream, clockwise on its left; sides come in this order: left, right.
"""

from dataclasses import dataclass

import numpy as np
from numpy.polynomial import legendre

from offbody.errors import InputError
from offbody.layers import march
from offbody.panels import gauss, to_modes

MEASURED = 3  # beside the states of a march
MEASURED_TURN = 80.0   # degrees; laminar separation measured on a circle (Schlichting; from memory)
# The Reynolds number by breadth at which the drag of a smooth circle falls: common practice, 2e5 to
# 5e5 by turbulence and roughness (Schlichting, Boundary-Layer Theory; from memory).
DRAG_CRISIS = 3e5
# A rule of this project: a body no longer along the stream than this many breadths is bluff, so
# that its wake moves the pressure of its front, and the figure measured on a circle speaks for it.
BLUFF_LENGTH = 1.5
# P. R. Owen and L. Klanfer, ARC CP 220 (1953; 400 to 500, from memory): a laminar separation closes
# to a short bubble beyond this Reynolds number of displacement thickness.
SHORT_BUBBLE = 450.0
NEAREST = 1e-6         # of the perimeter, by which the first station keeps off the stagnation point

LEFT, RIGHT = 0, 1


@dataclass(frozen=True)
class Leaving:
    """Where the flow leaves one body, (directions, 2) each: left and right of the stream.

    ``arcs``, by the march alone ``march_arcs``, and ``transition`` are arc positions on the body,
    ``front`` (directions,) that of the stagnation point. The stations' ``distance`` and
    ``displacement`` are (directions, 2, stations).
    """

    arcs: np.ndarray
    state: np.ndarray
    march_arcs: np.ndarray
    transition: np.ndarray
    bubble: np.ndarray
    front: np.ndarray
    distance: np.ndarray
    displacement: np.ndarray


def leave(model, body, directions, speeds, reynolds, breadths, lee=None):
    """Where the flow leaves a body, by the march and by the figure measured on a circle.

    Parameters
    ----------
    speeds : (directions, n) array
        Along the wall, counter-clockwise positive, at the body's nodes.
    reynolds : float
        By the breadth across the stream and the onset speed.
    breadths : (directions,) array
        Of the body across the stream.
    lee : (directions, 2) array, optional
        Arc positions left and right between which the wall is blown through: no front is there.
    """
    total = model._arcs[body].length
    arcs = model._panels.arcs[model._panels.node_slice(body)]
    slopes = _slopes(model, body, speeds)
    after, front, slope = _front(model, body, directions, speeds, slopes, lee)
    edge = front == 0.0 if model._panels.edged[body] else np.zeros(len(front), bool)
    angles = facing(model, body, directions)
    count, steps = len(arcs), np.arange(len(arcs))
    lanes = []
    for first, sign in (((after - 1) % count, -1), (after, 1)):
        index = (first[:, None] + sign * steps) % count
        distance = sign * (arcs[index] - front[:, None]) % total
        distance[:, 0] = np.where(distance[:, 0] > 0.5 * total, 0.0, distance[:, 0])
        speed, rate, angle = (
            np.take_along_axis(a, index, axis=1) for a in (sign * speeds, slopes, angles)
        )
        near = distance[:, 0] < NEAREST * total
        distance[near, 0] = NEAREST * total
        speed[near, 0] = np.abs(slope[near]) * NEAREST * total
        start = np.stack([np.zeros(len(front)), np.where(edge, speed[:, 0], 0.0),
                          np.where(edge, rate[:, 0], slope), angle[:, 0]])
        lanes.append([
            np.concatenate([s[:, None], a], axis=1)
            for s, a in zip(start, (distance, speed, rate, angle), strict=True)
        ])
    distance, speed, rate, angle = (np.concatenate(pair) for pair in zip(*lanes, strict=True))
    viscosity = np.tile(breadths / reynolds, 2)
    final = laminar_is_final(model, body, reynolds)
    smooth = model.outlines[body].edge is None
    closing = np.inf if final else (0.0 if smooth else SHORT_BUBBLE)
    layers = march(distance, speed, rate, viscosity, closing)

    separation, state = layers.separation, layers.state
    if final:
        bluff = is_bluff(model, body, directions, breadths)
        measured = np.where(np.tile(bluff, 2), _turned(distance, angle, MEASURED_TURN), np.inf)
        state = np.where(measured < separation, MEASURED, state)
        separation = np.minimum(separation, measured)

    def by_side(lane):
        return np.stack(np.split(lane, 2), axis=1)

    def place(distance):
        return (front[:, None] + np.array([-1.0, 1.0]) * by_side(distance)) % total

    return Leaving(
        place(separation), by_side(state), place(layers.separation), place(layers.transition),
        by_side(layers.bubble), front, by_side(distance), by_side(layers.displacement),
    )


def is_bluff(model, body, directions, breadths):
    """(directions,) whether a body is no longer along the stream than a few breadths."""
    return np.ptp(_along(model, body, directions), axis=1) <= BLUFF_LENGTH * breadths


def laminar_is_final(model, body, reynolds):
    """Whether a laminar separation stays open: without an edge, below the drag crisis."""
    return model.outlines[body].edge is None and reynolds < DRAG_CRISIS


def turned(model, body, directions, degrees):
    """(directions, 2) arc positions, left and right, where the wall has turned by an angle.

    From facing the stream (0) through running along it (90): counted from the foremost node.
    """
    total = model._arcs[body].length
    arcs = model._panels.arcs[model._panels.node_slice(body)]
    angles = facing(model, body, directions)
    first = np.argmin(_along(model, body, directions), axis=1)
    result = np.empty((len(directions), 2))
    refusal = (
        f"separation = {degrees:g}: the wall of body {body} ({model.outlines[body].name}) does not "
        "turn through it, from facing the stream; give another angle"
    )
    for side, sign in ((LEFT, -1), (RIGHT, 1)):
        index = (first[:, None] + sign * np.arange(len(arcs))) % len(arcs)
        distance = sign * (arcs[index] - arcs[first][:, None]) % total
        found = _turned(distance, np.take_along_axis(angles, index, axis=1), degrees)
        if not np.isfinite(found).all():
            raise InputError(refusal)
        result[:, side] = (arcs[first] + sign * found) % total
    return result


def facing(model, body, directions):
    """(directions, n) degrees between a body's outward normals and where the stream comes from."""
    normals = -1j * model._panels.tangents[model._panels.node_slice(body)]
    against = -np.exp(-1j * np.radians(directions))
    return np.degrees(np.arccos(np.clip((against[:, None] * normals).real, -1.0, 1.0)))


def wall_speed(model, body, speeds, arcs):
    """(directions, m) values of node values (directions, n) at arc positions (directions, m)."""
    order = model.order
    panel, x = model._panel_at(body, arcs)
    columns = (panel - model._panels.starts[body])[..., None] * order + np.arange(order)
    values = np.take_along_axis(speeds[:, None, :], columns, axis=2)
    return np.sum(values * (legendre.legvander(x, order - 1) @ to_modes(order)), axis=2)


def _slopes(model, body, speeds):
    """(directions, n) derivative of node values along the wall."""
    panels, order = model._panels, model.order
    arcs = panels.arcs[panels.node_slice(body)]
    if order == 1:  # no slope on a panel: from its neighbours
        return np.gradient(speeds, arcs, axis=1)
    modes = speeds.reshape(len(speeds), -1, order) @ to_modes(order).T
    slopes = legendre.legder(np.moveaxis(modes, -1, 0), axis=0)
    slopes = np.moveaxis(slopes, 0, -1) @ legendre.legvander(gauss(order)[0], order - 2).T
    half = 0.5 * np.diff(panels.end_arcs[panels.panel_slice(body)], axis=1)
    return (slopes / half).reshape(speeds.shape)


def _along(model, body, directions):
    """(directions, n) distance of a body's nodes along the stream."""
    nodes = model._panels.nodes[model._panels.node_slice(body)]
    return (np.exp(-1j * np.radians(directions))[:, None] * nodes).real


def _front(model, body, directions, speeds, slopes, lee):
    """Index of the node behind the front stagnation point, its arc position and the slope there.

    Where the speed rises through zero, the wall's flow parts: the foremost such place.
    """
    total = model._arcs[body].length
    arcs = model._panels.arcs[model._panels.node_slice(body)]
    parts = (speeds < 0.0) & (np.roll(speeds, -1, axis=1) >= 0.0)
    if lee is not None:
        parts &= (arcs - lee[:, RIGHT:]) % total > ((lee[:, LEFT] - lee[:, RIGHT]) % total)[:, None]
    if not parts.any(axis=1).all():
        row = np.flatnonzero(~parts.any(axis=1))[0]
        raise InputError(
            f"direction = {directions[row]:g}: the flow parts nowhere on body {body} "
            f"({model.outlines[body].name}), so that no boundary layer starts; is its circulation "
            "meant to be so strong?"
        )
    before = np.argmin(np.where(parts, _along(model, body, directions), np.inf), axis=1)
    after = (before + 1) % len(arcs)
    rows = np.arange(len(directions))
    low, high = speeds[rows, before], speeds[rows, after]
    step = (arcs[after] - arcs[before]) % total
    left, right = slopes[rows, before] * step, slopes[rows, after] * step
    t = -low / (high - low)
    for _ in range(20):  # the zero of Hermite's cubic, by steps of the secant's slope
        rest = 1.0 - t
        value = ((1.0 + 2.0 * t) * rest**2 * low + t**2 * (3.0 - 2.0 * t) * high
                 + t * rest * (rest * left - t * right))
        t = np.clip(t - value / (high - low), 0.0, 1.0)
    front = (arcs[before] + t * step) % total
    slope = np.maximum(((1.0 - t) * left + t * right) / step, 1e-3 * (high - low) / step)
    if model._panels.edged[body]:
        across = after == 0
        front = np.where(across, 0.0, front)
        slope = np.where(across, 1.0, slope)
    return after, front, slope


def _turned(distance, angle, limit):
    """(lanes,) distance at which the wall has first turned by an angle, or infinity."""
    over = angle >= limit
    k = np.argmax(over, axis=1)
    rows = np.arange(len(k))
    before = np.maximum(k - 1, 0)
    low, high = angle[rows, before], angle[rows, k]
    share = np.where(high > low, (limit - low) / np.where(high > low, high - low, 1.0), 0.0)
    place = distance[rows, before] + share * (distance[rows, k] - distance[rows, before])
    return np.where(over.any(axis=1) & (k > 0), place, np.inf)
