"""Boundary layers marched along walls: laminar (Thwaites), transition (Michel), turbulent (Head).

All lanes at once: a lane is one side of one wall in one direction, from its front stagnation point
downstream. Speeds are over the onset speed, so that ``viscosity`` is the kinematic viscosity over
the onset speed, a length.

Laminar, B. Thwaites, Aeronaut. Quart. 1 (1949) 245-280: with U the speed at the layer's edge,

    theta^2 = 0.45 viscosity / U^6 (integral of U^5 ds),  lambda = theta^2 U' / viscosity,

separating at lambda = -0.09. Shape factor H(lambda): T. Cebeci and P. Bradshaw, Momentum Transfer
in Boundary Layers, 1977 (from memory). Transition, R. Michel, ONERA Rapport 1/1578A (1951), in the
form of T. Cebeci and A. M. O. Smith, Analysis of Turbulent Boundary Layers, 1974 (from memory):

    R_theta = 1.174 (1 + 22400 / R_s) R_s^0.46.

Turbulent, M. R. Head, ARC R&M 3152 (1958), the mass inside the layer growing by entrainment, with
H1 = (thickness - displacement) / theta a function of H; friction, H. Ludwieg and W. Tillmann, NACA
TM 1285 (1950). Separation at H = 2.4, the upper end of the 1.8 to 2.4 of Cebeci and Bradshaw.
"""

from dataclasses import dataclass

import numpy as np

LAMINAR_LIMIT = -0.09    # Thwaites' lambda at separation
TURBULENT_LIMIT = 2.4    # shape factor at separation
AFTER_TRANSITION = 1.4   # shape factor with which a turbulent layer starts (common practice)
LEAST_TRANSITION = 1e-9  # a length Reynolds number below which Michel's curve is not evaluated
STEPS = 2                # Runge-Kutta steps between stations
DIP = 30.0               # displacement thicknesses over which a dip of the speed is passed over

LAMINAR, TURBULENT, ATTACHED = 0, 1, 2  # how a lane ends


@dataclass(frozen=True)
class Layers:
    """What a march found on each of the lanes, lengths as those of the stations.

    Attributes
    ----------
    separation : (lanes,) array
        Distance from the front stagnation point; of an attached layer, the end of its lane.
    state : (lanes,) int array
        LAMINAR or TURBULENT separation, or ATTACHED to the end.
    transition : (lanes,) array
        Where the layer turns turbulent; NaN where it does not.
    bubble : (lanes,) bool array
        Whether the transition is that of a laminar separation which closes again.
    momentum, displacement : (lanes, stations) array
        Thicknesses; NaN from separation on.
    """

    separation: np.ndarray
    state: np.ndarray
    transition: np.ndarray
    bubble: np.ndarray
    momentum: np.ndarray
    displacement: np.ndarray


def march(arc, speed, slope, viscosity, closing=np.inf):
    """Layers on lanes of stations, each of which starts at its front stagnation point.

    Parameters
    ----------
    arc, speed, slope : (lanes, stations) arrays
        Distance from the stagnation point, rising; speed at the layer's edge, which ends a lane
        where it is no longer positive; and its derivative along the wall. A lane whose first speed
        is not zero starts at a leading edge, without thickness.
    viscosity : (lanes,) array or float
        Kinematic viscosity over the onset speed.
    closing : (lanes,) array or float
        Reynolds number of displacement thickness and edge speed above which a laminar separation
        closes to a short bubble, behind which the layer is turbulent.

    Returns
    -------
    Layers
    """
    lanes = len(arc)
    viscosity = np.broadcast_to(np.asarray(viscosity, float), lanes)[:, None]
    running = np.logical_and.accumulate(speed[:, 1:] > 0.0, axis=1)
    running = np.concatenate([np.ones((lanes, 1), bool), running], axis=1)
    count = arc.shape[1]
    used = slice(running.sum(axis=1).max())
    arc, speed, slope, running = (a[:, used] for a in (arc, speed, slope, running))
    end = np.take_along_axis(arc, running.sum(axis=1)[:, None] - 1, axis=1)[:, 0]
    speed = np.where(running, speed, 1.0)
    slope = np.where(running, slope, 0.0)

    momentum, gradient = thwaites(arc, speed, slope, viscosity)
    displacement = momentum * laminar_shape(gradient)
    laminar_end = _laminar_end(arc, speed, gradient, displacement, running)
    transition = _first(arc, _michel(arc, speed, momentum, viscosity), running)
    thick = _at(arc, speed * displacement, np.minimum(laminar_end, end)) / viscosity[:, 0]
    bubble = (laminar_end <= transition) & (laminar_end < end) & (thick > closing)
    turns = np.where(bubble, laminar_end, transition)
    turbulent = bubble | (transition < laminar_end)
    separation = np.where(turbulent, np.inf, laminar_end)
    state = np.full(lanes, LAMINAR)

    if turbulent.any():
        rows = np.flatnonzero(turbulent)
        start = _at(arc[rows], momentum[rows], turns[rows])
        theta, shape, stop = _head(
            arc[rows], speed[rows], slope[rows], viscosity[rows, 0], turns[rows], start,
            end[rows],
        )
        behind = arc[rows] >= turns[rows, None]
        momentum[rows] = np.where(behind, theta, momentum[rows])
        displacement[rows] = np.where(behind, theta * shape, displacement[rows])
        separation[rows], state[rows] = stop, TURBULENT
    attached = np.isinf(separation)
    separation = np.where(attached, end, separation)
    state[attached] = ATTACHED
    gone = (arc > separation[:, None]) | ~running
    momentum[gone] = displacement[gone] = np.nan
    room = [(0, 0), (0, count - arc.shape[1])]
    momentum, displacement = (
        np.pad(a, room, constant_values=np.nan) for a in (momentum, displacement)
    )
    return Layers(
        separation, state, np.where(turbulent, turns, np.nan), bubble, momentum, displacement
    )


def thwaites(arc, speed, slope, viscosity):
    """Momentum thickness and lambda of laminar layers, (lanes, stations) each.

    Between stations U is the cubic of their speeds and slopes, and five Gauss points integrate its
    fifth power: exactly where U is linear, as at the stagnation point.
    """
    steps = np.diff(arc, axis=1)
    x, shares = np.polynomial.legendre.leggauss(5)
    total = np.zeros(steps.shape)
    for t, share in zip(0.5 * (x + 1.0), 0.5 * shares, strict=True):
        total += share * np.maximum(_cubic(speed, slope, steps, t), 0.0) ** 5
    total = np.cumsum(total * steps, axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        square = 0.45 * viscosity * total / speed[:, 1:] ** 6
        first = np.where(speed[:, :1] > 0.0, 0.0, 0.075 * viscosity / slope[:, :1])
    square = np.concatenate([first, square], axis=1)
    return np.sqrt(square), square * slope / viscosity


def laminar_shape(gradient):
    """Shape factor H of a laminar layer by Thwaites' lambda (Cebeci and Bradshaw)."""
    favourable = np.clip(gradient, 0.0, 0.1)
    adverse = np.clip(gradient, -0.1, 0.0)
    return np.where(
        gradient >= 0.0,
        2.61 - 3.75 * favourable + 5.24 * favourable**2,
        2.088 + 0.0731 / (0.14 + adverse),
    )


def friction(momentum_reynolds, shape):
    """Friction coefficient of a turbulent layer: Ludwieg and Tillmann."""
    return 0.246 * 10.0 ** (-0.678 * shape) * momentum_reynolds**-0.268


def _laminar_end(arc, speed, gradient, displacement, running):
    """(lanes,) where laminar layers separate for good, or infinity.

    At a jump of curvature the slope of the speed is infinite over no length at all; a layer passes
    over it, as over any dip of the speed that is made good within a few of its thicknesses.
    """
    excess = LAMINAR_LIMIT - gradient
    while True:
        place = _first(arc, excess, running)
        at = np.minimum(place, arc[:, -1])
        window = place + DIP * _at(arc, displacement, at)
        ahead = (arc > place[:, None]) & (arc < window[:, None]) & running
        regained = ahead & (speed >= _at(arc, speed, at)[:, None])
        passed = np.where(regained.any(axis=1), np.argmax(regained, axis=1), 0)
        if not passed.any():
            return place
        excess[np.arange(arc.shape[1]) <= passed[:, None]] = -1.0


def _michel(arc, speed, momentum, viscosity):
    """Positive where the layer has turned turbulent: log of R_theta over that of transition."""
    length = np.maximum(speed * arc / viscosity, LEAST_TRANSITION)
    limit = 1.174 * (1.0 + 22400.0 / length) * length**0.46
    with np.errstate(divide="ignore"):
        return np.log(momentum * speed / viscosity / limit)


def _cubic(values, slopes, steps, t):
    """Hermite's cubic between stations, at the share t of each step."""
    rest = 1.0 - t
    return (
        (1.0 + 2.0 * t) * rest**2 * values[:, :-1] + t**2 * (3.0 - 2.0 * t) * values[:, 1:]
        + steps * t * rest * (rest * slopes[:, :-1] - t * slopes[:, 1:])
    )


def _first(arc, excess, running):
    """(lanes,) where ``excess`` first turns positive, beyond the first station; else infinity.

    Between stations by the inverse cubic through the two on either side.
    """
    over = (excess > 0.0) & running
    over[:, 0] = False
    found, k = over.any(axis=1), np.argmax(over, axis=1)
    picked = np.clip(k[:, None] + np.arange(-2, 2), 1, arc.shape[1] - 1)
    s, e = (np.take_along_axis(a, picked, axis=1) for a in (arc, excess))
    smooth = (np.diff(e, axis=1) > 0.0).all(axis=1) & np.take_along_axis(running, picked, 1).all(1)
    before, after = (np.take_along_axis(a, np.stack([k - 1, k], 1), 1) for a in (arc, excess))
    with np.errstate(divide="ignore", invalid="ignore"):
        share = np.nan_to_num(-after[:, 0] / (after[:, 1] - after[:, 0]), nan=1.0)
        place = before[:, 0] + share * (before[:, 1] - before[:, 0])
        cubic = sum(
            s[:, i] * np.prod([e[:, j] / (e[:, j] - e[:, i]) for j in range(4) if j != i], axis=0)
            for i in range(4)
        )
    place = np.where(smooth, np.clip(cubic, before[:, 0], before[:, 1]), place)
    return np.where(found, place, np.inf)


def _at(arc, values, place):
    """(lanes,) values between stations, linear."""
    k = np.clip((arc <= place[:, None]).sum(axis=1), 1, arc.shape[1] - 1)[:, None]
    pair = np.concatenate([k - 1, k], axis=1)
    (s0, s1), (v0, v1) = (np.take_along_axis(a, pair, axis=1).T for a in (arc, values))
    return v0 + (place - s0) / (s1 - s0) * (v1 - v0)


def entrainment_shape(shape):
    """H1 of Head's method by the shape factor H (Cebeci and Bradshaw's fit)."""
    low, high = np.minimum(shape, 1.6), np.maximum(shape, 1.6)
    return 3.3 + np.where(
        shape <= 1.6,
        0.8234 * np.maximum(low - 1.1, 1e-3) ** -1.287,
        1.5501 * (high - 0.6778) ** -3.064,
    )


def _shape(entrained):
    """The inverse of ``entrainment_shape``; its fit leaves H infinite at H1 = 3.3."""
    over = np.maximum(entrained - 3.3, 1e-6)
    return np.where(
        over >= 0.8234 * 0.5**-1.287,
        1.1 + (over / 0.8234) ** (-1.0 / 1.287),
        0.6778 + (over / 1.5501) ** (-1.0 / 3.064),
    )


def _head(arc, speed, slope, viscosity, turns, start, end):
    """Turbulent layers from ``turns`` on: theta and H at the stations, and where they separate.

    theta, H : (lanes, stations), NaN ahead of ``turns``; the last is infinite for those that stay.
    """
    theta, shape = np.full(arc.shape, np.nan), np.full(arc.shape, np.nan)
    stop = np.full(len(arc), np.inf)
    least = 1e-3 * start  # keeps a layer that a steep rise of the speed squeezes from vanishing
    state = np.stack([start, start * entrainment_shape(np.full(len(arc), AFTER_TRANSITION))])
    for k in range(int((arc <= turns[:, None]).sum(axis=1).min()) - 1, arc.shape[1] - 1):
        here, there = np.maximum(arc[:, k], turns), arc[:, k + 1]
        marching = np.isinf(stop) & (there > here) & (there <= end)
        step = np.where(marching, (there - here) / STEPS, 0.0)
        pair = slice(k, k + 2)
        for j in range(STEPS):
            low = here + j * step
            before = _shape(state[1] / state[0])

            def rate(state, along, low=low, pair=pair):
                return _growth(state, arc[:, pair], speed[:, pair], slope[:, pair], viscosity,
                               low + along)

            a = rate(state, 0.0)
            b = rate(np.maximum(state + 0.5 * step * a, least), 0.5 * step)
            c = rate(np.maximum(state + 0.5 * step * b, least), 0.5 * step)
            d = rate(np.maximum(state + step * c, least), step)
            state = state + step * (a + 2.0 * b + 2.0 * c + d) / 6.0
            state = np.maximum(state, least)
            after = _shape(state[1] / state[0])
            left = marching & np.isinf(stop) & (after > TURBULENT_LIMIT)
            share = (TURBULENT_LIMIT - before) / np.where(left, after - before, 1.0)
            stop = np.where(left, low + np.clip(share, 0.0, 1.0) * step, stop)
        reached = marching & np.isinf(stop)
        theta[reached, k + 1], shape[reached, k + 1] = state[0, reached], after[reached]
    return theta, shape, stop


def _growth(state, arc, speed, slope, viscosity, place):
    """d/ds of theta and of theta H1, between two stations."""
    steps = np.diff(arc, axis=1)
    t = (place[:, None] - arc[:, :1]) / steps
    edge = np.maximum(_cubic(speed, slope, steps, t), 1e-12)[:, 0]
    relative = ((1.0 - t) * slope[:, :1] + t * slope[:, 1:])[:, 0] / edge
    theta = state[0]
    entrained = np.maximum(state[1] / theta, 3.3 + 1e-6)
    shape = _shape(entrained)
    thickening = 0.5 * friction(edge * theta / viscosity, shape) - (shape + 2.0) * theta * relative
    entraining = 0.0306 * (entrained - 3.0) ** -0.6169
    return np.stack([thickening, entraining - theta * entrained * relative])
