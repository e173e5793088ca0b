"""The solved flow about a set of bodies, and everything that can be asked of it.

One factorisation of the equation on the walls serves the two unit onset directions, unit
circulation of each body that has any, and the wake of every direction; the flow for a direction is
a linear combination of them.
"""

import warnings
from collections.abc import Sequence
from copy import copy
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.polynomial import legendre
from scipy.optimize import brentq

from offbody import flow
from offbody.accuracy import (
    ATTEMPTS,
    LEAST_FLOOR,
    MARGIN,
    MOST_NODES,
    NEAR_EDGE,
    SHRINKING,
    Sums,
    Tolerance,
)
from offbody.bracings import Bracing, Screens
from offbody.checks import (
    as_body,
    as_count,
    as_directions,
    as_number,
    as_point,
    as_points,
    as_reals,
)
from offbody.equation import Equation
from offbody.errors import AccuracyWarning, InputError
from offbody.laying import lay, measure
from offbody.outlines import Outline
from offbody.panels import AS_PLAIN, assemble, finer_places, from_finer, to_modes
from offbody.surroundings import KINDS, OpenStream, holds
from offbody.tracing import trace
from offbody.wakes import Lee, Wake, blown_speeds, settle

DEFAULT_ORDER = 16
ALONG_ROW = 1e-11  # the cosine of an angle that is 90 degrees


def solve(
    outlines, surroundings=None, panels=None, order=None, circulation=None, wakes=None,
    bracings=None, sums=None, iterate=None,
):
    """The potential flow about one or several bodies, ready for any direction.

    Parameters
    ----------
    outlines : Outline or sequence of Outline
        The bodies, clear of one another.
    surroundings : OpenStream, Ground, Duct or Row, optional
        What stands round them; an open stream unless given.
    panels : int, sequence or Tolerance, optional
        Panels per body (one number for each, or one for all; None within a sequence lets the
        program choose), or an ``ob.Tolerance`` that they are to be split to. None: laid by
        curvature, edges, and distance to other walls.
    order : int, optional
        Nodes and terms per panel, 1 (straight, constant strength) to 16. None: 16, which
        ``bench/formulations.py`` finds the quickest to an error of 1e-9, level with 12 at 1e-6, and
        within a third of the quickest at 1e-3.
    circulation : float or sequence, optional
        Per body, counter-clockwise positive, for unit onset speed. None: the Kutta condition where
        the body has a sharp edge, else zero.
    wakes : Wake or sequence, optional
        Per body, None or the wake whose displacement is to be included.
    bracings : Bracing or sequence, optional
        Faces of lattice members between the bodies, which the flow passes through.
    sums : Sums, optional
        The tolerance of fast sums and whether they are used. None: used where they take less time,
        as good as the plain ones.
    iterate : bool, optional
        Whether the equation is solved by iteration, in memory like the number of nodes, or by
        factorisation. None: whichever takes less time.

    Returns
    -------
    Model

    Raises
    ------
    InputError
        If bodies overlap, touch or reach beyond a wall, or an argument does not fit.

    Warns
    -----
    AccuracyWarning
        If a tolerance could not be met; the message says what was reached.

    References
    ----------
    J. Helsing and R. Ojala, J. Comput. Phys. 227 (2008) 2899-2921, for closed forms on curved
    panels; J. Bremer, J. Comput. Phys. 231 (2012) 1879-1899, for the square-root weights.

    Examples
    --------
    >>> import offbody as ob
    >>> model = ob.solve(ob.circle(diameter=0.3))
    >>> round(float(model.velocity((-1.5, 0.0))[0]), 4)       # five diameters upstream
    0.99
    """
    bodies = _as_outlines(outlines)
    surroundings = OpenStream() if surroundings is None else surroundings
    if not isinstance(surroundings, KINDS):
        raise InputError(
            f"surroundings = {surroundings!r}: give ob.OpenStream(), ob.Ground(y), "
            "ob.Duct(lower, upper) or ob.Row(pitch)"
        )
    order = DEFAULT_ORDER if order is None else as_count("order", order, least=1, greatest=16)
    tolerance = panels if isinstance(panels, Tolerance) else None
    counts = [
        None if count is None else as_count("panels", count, least=2)
        for count in _per_body("panels", None if tolerance else panels, len(bodies))
    ]
    circulations = [
        None if given is None else as_number("circulation", given)
        for given in _per_body("circulation", circulation, len(bodies))
    ]
    wakes = _as_wakes(wakes, len(bodies))
    walls, gaps = measure(bodies, surroundings)
    sums = AS_PLAIN if sums is None else sums
    if not isinstance(sums, Sums):
        raise InputError(f"sums must be ob.Sums(...), got {sums!r}")
    if iterate not in (True, False, None):
        raise InputError(f"iterate must be True, False or None, got {iterate!r}")
    given = (surroundings, order, circulations, wakes, _as_bracings(bracings), sums, iterate)
    if tolerance is None:
        return Model(walls, lay(walls, gaps, counts), *given)
    return _refined(walls, gaps, tolerance.surface_speed, given)


def _refined(walls, gaps, tolerance, given):
    """A model whose estimated error of surface speed is below the tolerance.

    Near a break the error falls as the least panel does, elsewhere with a high power of the panels'
    length.
    """
    coarseness, floor = 1.0 + 0.2 * max(0.0, np.log10(tolerance) + 9.0), 1.0
    goal, best, stalls, shrinking = MARGIN * tolerance, None, 0, True
    for attempt in range(1, ATTEMPTS + 1):
        ends = lay(walls, gaps, [None] * len(walls), coarseness, floor)
        if best is not None and given[1] * sum(map(len, ends)) > MOST_NODES:
            break
        model = Model(walls, ends, *given)
        model.solves, error = attempt, model.estimated_error
        stalls = 0 if shrinking or error < 0.5 * best.estimated_error else stalls + 1
        best = model if best is None or error < best.estimated_error else best
        if error <= goal or stalls == 2:
            break  # there, or rounding has taken over
        at_breaks, elsewhere = model._let_through()
        shrinking = at_breaks > goal and floor > LEAST_FLOOR
        if shrinking:
            floor = max(LEAST_FLOOR, floor * np.clip(0.5 * goal / at_breaks, 1e-4, 0.5))
        else:
            elsewhere = max(elsewhere, at_breaks)
        if elsewhere > goal or at_breaks <= goal:
            power = 1.0 / (0.75 * model.order)
            coarseness *= np.clip((0.5 * goal / elsewhere) ** power, 0.5, 0.9)
    if best.estimated_error > tolerance:
        warnings.warn(
            f"Tolerance({tolerance:g}) was not met: the estimated error of surface speed is "
            f"{best.estimated_error:.2g} with {best.node_count} nodes; ask for a larger "
            "tolerance, or smooth the outline where it is rough",
            AccuracyWarning, stacklevel=3,
        )
    return best


def inside(bodies, points):
    """Which points lie inside a body; a point on a wall does not.

    Parameters
    ----------
    bodies : Model, Outline or sequence of Outline
    points : (..., 2) array
        In the caller's unit of length.

    Returns
    -------
    (...,) bool array, or bool for one point

    Raises
    ------
    InputError
        If points do not have shape (..., 2) or are not finite.

    Examples
    --------
    >>> import offbody as ob
    >>> ob.inside(ob.circle(2.0), [(0.5, 0.0), (1.5, 0.0)])
    array([ True, False])
    """
    points = as_points("points", points)
    if isinstance(bodies, Model):
        laid = bodies._panels
    else:
        outlines = _as_outlines(bodies)
        walls, gaps = measure(outlines, OpenStream())
        ends = lay(walls, gaps, [None] * len(walls))
        laid = assemble(walls, ends, DEFAULT_ORDER, OpenStream())
    found = flow.inside(laid, _complex(points).ravel())
    return found.reshape(points.shape[:-1]) if points.ndim > 1 else bool(found[0])


@dataclass(frozen=True)
class SurfaceFlow:
    """The flow along one wall, at the panels' nodes, counter-clockwise.

    Attributes
    ----------
    points : (n, 2) array
    arc : (n,) array
        Arc length from the outline's first point, counter-clockwise, in the caller's unit.
    speed : (n,) or (directions, n) array
        Along the outline, positive counter-clockwise, over the onset speed.
    pressure_coefficient : same shape
        1 - speed^2; in the lee of a body with a wake the base pressure, NaN where it has none.
    numerical_error : same shape
        Estimated error of the speed.
    """

    points: np.ndarray
    arc: np.ndarray
    speed: np.ndarray
    pressure_coefficient: np.ndarray
    numerical_error: np.ndarray


@dataclass(frozen=True)
class WakeFlow:
    """The wake of one body as the flow has it, with a leading axis for a vector of directions.

    Attributes
    ----------
    drag_coefficient : float or (directions,) array
        By the wake's reference length, or the breadth across the stream: given, or found from the
        base pressure.
    base_pressure : float or (directions,) array
        Pressure coefficient of the lee: given, or found from the drag; NaN for a wake which only
        displaces the stream.
    points : (2, 2) or (directions, 2, 2) array
        Where the flow leaves the wall, left and right of the stream.
    arc_fractions : (2,) or (directions, 2) array
        The same as fractions of the wall, as ``ob.WallPort`` counts them.
    """

    drag_coefficient: object
    base_pressure: object
    points: np.ndarray
    arc_fractions: np.ndarray


class Model:
    """A solved flow; ``offbody.solve`` makes it. All lengths in the caller's unit, speeds over the
    onset speed, ``direction`` in degrees, where the stream goes to, counter-clockwise from +x: one
    number, or a vector that adds a leading axis to every result.

    Attributes
    ----------
    outlines : tuple of Outline
    surroundings : OpenStream, Ground, Duct or Row
    wakes : tuple of Wake or None
    bracings : tuple of Bracing
    order, node_count : int
    panel_counts : tuple of int, per body
    solves : int
        How many times a tolerance made it refine its panels, and the first.
    """

    def __init__(
        self, walls, ends, surroundings, order, circulations, wakes, bracings, sums=AS_PLAIN,
        iterate=None,
    ):
        self.outlines = tuple(wall.outline for wall in walls)
        self.surroundings, self.order, self.wakes = surroundings, order, tuple(wakes)
        self.bracings = bracings
        self.solves = 1
        self._arcs = walls
        self._panels = assemble(walls, ends, order, surroundings, sums=sums)
        self._screens = Screens(bracings, surroundings)
        self._screens.refuse_unfit(self._panels)
        self._prescribed, self._settled = tuple(circulations), {}
        self._solve(iterate)

    @property
    def node_count(self):
        """The number of nodes of all bodies."""
        return len(self._panels.nodes)

    @property
    def panel_counts(self):
        """The number of panels of each body."""
        return tuple(int(n) for n in np.diff(self._panels.starts))

    @property
    def walls(self):
        """(n, 2) wall points of each body, counter-clockwise."""
        panels = self._panels
        return [_pairs(panels.nodes[panels.node_slice(b)]) for b in range(panels.bodies)]

    @property
    def _middles(self):
        """(bodies,) complex mean of each wall, by arc length."""
        panels, first = self._panels, self._panels.starts[:-1] * self.order
        moments = np.add.reduceat(panels.weights * panels.nodes, first)
        return moments / np.add.reduceat(panels.weights, first)

    @property
    def extent(self):
        """(xmin, xmax, ymin, ymax) of all bodies."""
        boxes = self._panels.boxes
        return (boxes[:, 0].min(), boxes[:, 1].max(), boxes[:, 2].min(), boxes[:, 3].max())

    # --- the equation -----------------------------------------------------------------------

    def _solve(self, iterate):
        panels = self._panels
        self._equation = Equation(panels, self.surroundings, any(self.wakes), iterate)
        self._unit = self._equation.vortices(_pairs(panels.tangents).T)
        self._turning = [
            body for body, given in enumerate(self._prescribed)
            if given not in (None, 0.0) or (given is None and self._has_edge(body))
        ]
        circulation = np.eye(panels.bodies)[self._turning]
        still = np.zeros((len(circulation), self.node_count))
        self._spin = self._equation.vortices(still, circulation) if self._turning else still
        screened = panels.tangents * self._screens.velocity(panels.nodes)
        self._screened = self._equation.vortices(screened.real) if self.bracings else screened.real

    def _has_edge(self, body):
        return self.outlines[body].edge is not None

    def _kutta(self, gamma):
        """(..., edges): the sum of the speeds at the two nodes nearest each free sharp edge."""
        columns = []
        for body in self._turning:
            if self._prescribed[body] is None:
                part = self._panels.node_slice(body)
                columns.append(gamma[..., part.start] + gamma[..., part.stop - 1])
        return np.stack(columns, axis=-1) if columns else np.zeros(gamma.shape[:-1] + (0,))

    def _state(self, directions):
        """Strengths for a vector of directions, as few rows as will do, and the onset there.

        Returns rows (R, N), real or complex; None (a row for each direction) or the matrix
        (directions, R) that combines fields of the rows; and the onset u - i v (directions,) at
        which images that move the stream far upstream (see _shift) leave it as it was given.
        """
        if self._is_pushed:
            strengths, onset = self._pushed(directions, self._wall_normal_speeds(directions))
            return strengths, None, onset @ [1.0, -1j]
        combination, _ = self._combination(directions)
        rows, onset = np.concatenate([self._unit, self._spin]), combination[:, :2]
        if len(directions) < len(rows):
            return combination @ rows, None, onset @ [1.0, -1j]
        return rows, combination, onset @ [1.0, -1j]

    @property
    def _is_pushed(self):
        """Whether wakes or bracings push the stream aside, in each direction in another way."""
        return bool(any(self.wakes) or self.bracings)

    def _pushed(self, directions, blown):
        """(directions, N) strengths with normal speeds blown through walls; the onset there."""
        moved = self._equation.response(blown) if any(self.wakes) else 0j * blown
        gamma, onset = self._wall_flow(directions, blown @ self._panels.weights, moved.real)
        return gamma + 1j * blown, onset

    def _wall_flow(self, directions, flux, moved):
        """(directions, N) gamma where sources of a flux (directions,) move it; the onset there.

        Those of bracings come on top.
        """
        screens = self._screens.strengths(directions)
        flux = flux + screens @ self._screens.lengths
        moved = moved + screens @ self._screened
        onset, circulations = self._onset(directions, flux, moved)
        return onset @ self._unit + moved + circulations @ self._spin, onset

    @cached_property
    def _unit_errors(self):
        """(R, N) strengths of the error's field, for the rows of a model without wakes."""
        onset = np.zeros(len(self._unit) + len(self._spin), complex)
        onset[:2] = 1.0, -1j
        return self._errors(np.concatenate([self._unit, self._spin]), onset[:, None])

    @cached_property
    def _between(self):
        """Points and tangents of the walls, between nodes too, where flow may be let through."""
        return finer_places(self._arcs, self._panels)

    def _errors(self, strengths, free):
        """Strengths (R, N) of the flow that the walls let through, but should not.

        free: onset and bracings u - i v between the nodes, (R, 2 N), or (R, 1) if all the same.
        See offbody.accuracy. A sharp edge's Kutta condition holds for the error as well.
        """
        points, tangents = self._between
        through = (tangents * (free + self._equation.velocity(strengths, points))).imag
        by_panel = through.reshape(len(strengths), len(self._panels.ends), 2 * self.order)
        leftover = (by_panel @ from_finer(self.order).T).reshape(strengths.shape) - strengths.imag
        errors = self._equation.response(self._equation.without_flux(leftover))
        spin = self._kutta(self._spin)
        edges = [k for k, body in enumerate(self._turning) if self._prescribed[body] is None]
        if edges:
            turned = -np.linalg.solve(spin[edges].T, self._kutta(errors.real).T).T
            errors = errors + turned @ self._spin[edges]
        return errors

    def _error_state(self, directions):
        """Rows (R, N) and combination, as _state, of the error's field."""
        rows, combination, onset = self._state(directions)
        if self._is_pushed:
            screens = self._screens.strengths(directions)
            free = onset[:, None] + screens @ self._screens.velocity(self._between[0])
            return self._errors(rows, free), None
        if combination is None:
            # as few rows as directions: the combination is that of the unit flows all the same
            return self._combination(directions)[0] @ self._unit_errors, None
        return self._unit_errors, combination

    def _wall_errors(self, directions, part=np.real):
        """(directions, N) estimated error of surface speed, or what the walls let through."""
        rows, combination = self._error_state(directions)
        return np.abs(part(rows if combination is None else combination @ rows))

    def _typical_directions(self):
        return np.array([0.0] if self.surroundings.walls else [0.0, 60.0, 120.0])

    def _let_through(self):
        """Greatest leftover of normal speed where panels shrink toward breaks, and elsewhere."""
        through = self._wall_errors(self._typical_directions(), np.imag).max(axis=0)
        near = self._near_breaks(SHRINKING)
        through[self._near_breaks(NEAR_EDGE, kinks_only=True)] = 0.0
        return through[near].max(initial=0.0), through[~near].max(initial=0.0)

    def _near_breaks(self, share, kinks_only=False):
        """(N,) nodes nearer to a break (or only: to a kink) than a share of the perimeter."""
        near = np.zeros(self.node_count, bool)
        for body, wall in enumerate(self._arcs):
            part = self._panels.node_slice(body)
            for place in wall.kinks if kinks_only else wall.breaks if wall.is_broken else ():
                away = np.abs(self._panels.arcs[part] - place)
                near[part] |= np.minimum(away, wall.length - away) < share * wall.length
        return near

    @property
    def estimated_error(self):
        """Greatest estimated error of surface speed, over the onset speed, for any direction.

        Within a millionth of the perimeter of a sharp edge, or of a kink (as at the greatest camber
        of a four-digit section), it is not counted: the speed itself is not smooth there.
        """
        errors = self._wall_errors(self._typical_directions()).max(axis=0)
        errors[self._near_breaks(NEAR_EDGE, kinks_only=True)] = 0.0
        return float(errors.max())

    def numerical_error(self, points, direction=0.0):
        """(...,) estimated error of the velocity at points (..., 2); NaN inside a body.

        The size of the error's own field (see ``offbody.accuracy``), which falls off the wall as
        the error does; rounding, about 1e-14 of the greatest speed, is not in it. Of order 2 and 3
        it is a first guess; of other orders the greatest, at a distance off the wall, is within a
        factor of ten of the greatest error.

        Examples
        --------
        >>> import offbody as ob
        >>> model = ob.solve(ob.circle(2.0), panels=10, order=8)
        >>> far, near = model.numerical_error([(-3.0, 0.0), (-1.01, 0.0)])
        >>> bool(1e-10 < far < near < 1e-4)
        True
        """
        points, directions = as_points("points", points), self._directions(direction)
        z, flat = _complex(points).ravel(), np.atleast_1d(directions)
        rows, combination = self._error_state(flat)
        fields = self._equation.velocity(rows, z)
        total = self._masked(fields if combination is None else combination @ fields, z)
        return _shaped(np.abs(total).reshape((len(flat),) + points.shape[:-1]), directions)

    def _onset(self, directions, flux, moved):
        """(directions, 2) onset and (directions, turning bodies) circulations.

        Circulations are prescribed or follow from the Kutta condition; flux (directions,) is that
        of all wakes and moved (directions, N) what they do to gamma.
        """
        given = _components(directions)
        shift = self._shift(given)
        onset = given + flux[:, None] * shift[:, :, 1]
        result = np.zeros((len(directions), len(self._turning)))
        edges = []
        for k, body in enumerate(self._turning):
            if self._prescribed[body] is None:
                edges.append(k)
            else:
                result[:, k] = self._prescribed[body]
        self._refuse_along(given, flux, result, edges)
        onset = onset + result.sum(axis=1)[:, None] * shift[:, :, 0]
        if edges:
            gamma = onset @ self._unit + result @ self._spin
            smooth = self._kept_smooth(shift, gamma if moved is None else gamma + moved)
            onset, result = onset + smooth[:, :2], result + smooth[:, 2:]
        return onset, result

    def _kept_smooth(self, shift, gamma):
        """(directions, 2 + turning bodies) onset and circulations to be added for smooth edges.

        gamma (directions, N) are wall speeds, or changes of them, that break Kutta conditions.
        """
        added = np.zeros((len(gamma), 2 + len(self._turning)))
        edges = [k for k, body in enumerate(self._turning) if self._prescribed[body] is None]
        if edges:
            unit, spin = self._kutta(self._unit), self._kutta(self._spin)
            system = spin[edges] + (shift[:, :, 0] @ unit)[:, None, :]
            miss = self._kutta(gamma)
            found = np.linalg.solve(np.swapaxes(system, 1, 2), -miss[..., None])[..., 0]
            added[:, 2 + np.array(edges)] = found
            added[:, :2] = found.sum(axis=1)[:, None] * shift[:, :, 0]
        return added

    def _combination(self, directions):
        """(directions, 2 + turning bodies) shares of the unit flows without wakes, and _shift."""
        still = np.zeros(len(directions))
        onset, circulations = self._onset(directions, still, None)
        return np.concatenate([onset, circulations], axis=1), self._shift(_components(directions))

    def _shift(self, onset):
        """(directions, 2, 2): what a unit circulation, a unit source must add to the onset.

        Copies without end move the stream even far upstream, by half of what they turn it in all;
        the onset far upstream is to be the one that the caller gave. With a mirror circulations
        cancel and sources double.
        """
        shift = np.zeros((len(onset), 2, 2))
        if self.surroundings.period is not None:
            side = np.where(np.abs(onset[:, 0]) > ALONG_ROW, np.sign(onset[:, 0]), 0.0)
            half = 0.5 * side / self.surroundings.period
            if self.surroundings.mirror is None:
                shift[:, 1, 0] = half
                shift[:, 0, 1] = half
            else:
                shift[:, 0, 1] = 2.0 * half
        return shift

    def _refuse_along(self, onset, flux, prescribed, edges):
        """A stream along a row has no far upstream: nothing may turn it or push it aside."""
        along = np.abs(onset[:, 0]) <= ALONG_ROW
        turns = bool(edges) or (prescribed != 0.0).any()
        if self.surroundings.period and along.any() and (turns or (flux[along] > 0.0).any()):
            raise InputError(
                "direction = 90 or -90: along a row the stream has no far upstream where there is "
                "circulation or a wake; use another direction, or bodies without both"
            )

    def _wall_normal_speeds(self, directions):
        """(directions, N) outward normal speed on the walls."""
        if not any(self.wakes):
            return np.zeros((len(directions), self.node_count))
        return blown_speeds(self, self._lees(directions))

    def _lees(self, directions):
        """{body: Lee} of every wake, settled once for each direction and then kept."""
        new = np.unique([one for one in directions if one not in self._settled])
        if len(new):
            found = settle(self, new)
            for row, one in enumerate(new.tolist()):
                self._settled[one] = {b: lee.at([row]) for b, lee in found.items()}
        kept = [self._settled[one] for one in directions.tolist()]
        bodies = [body for body, wake in enumerate(self.wakes) if wake is not None]
        return {body: Lee.joined([lees[body] for lees in kept]) for body in bodies}

    # --- places on the walls ----------------------------------------------------------------

    def _widest_arcs(self, body, directions):
        """(directions, 2) arc positions widest across the stream: on its left, on its right.

        On a side that runs along the stream, its upstream end.
        """
        nodes = _pairs(self._panels.nodes[self._panels.node_slice(body)])
        stream = _components(directions)
        along, across = stream @ nodes.T, stream @ (nodes @ [[0.0, -1.0], [1.0, 0.0]]).T
        room = 1e-9 * np.ptp(across, axis=1)[:, None]
        result = np.empty((len(directions), 2))
        for side, height in enumerate((across, -across)):
            ties = height >= height.max(axis=1, keepdims=True) - room
            k = np.argmin(np.where(ties, along, np.inf), axis=1)
            result[:, side] = self._turning_arc(body, k, stream @ [1.0, 1j])
        return result

    def _turning_arc(self, body, k, stream):
        """Arc positions near nodes k of a body where its tangent runs along the stream.

        The tangent is the polynomial of node k's panel; Newton's method starts from the node and
        goes no farther than the next one, and a sharp edge stops it.
        """
        panels, order = self._panels, self.order
        arcs = panels.arcs[panels.node_slice(body)]
        total, count = self._arcs[body].length, len(arcs)
        if order == 1:
            return arcs[k]
        panel = k // order + panels.starts[body]
        modes = panels.tangents.reshape(-1, order)[panel] @ to_modes(order).T
        modes = (modes / stream[:, None]).imag
        middle, half = panels.end_arcs[panel].mean(axis=1), 0.5 * np.diff(panels.end_arcs[panel])
        half = half[:, 0]
        x = start = (arcs[k] - middle) / half
        before = np.where(k > 0, arcs[k - 1], 0.0 if panels.edged[body] else arcs[-1] - total)
        after = np.where(
            k < count - 1, arcs[(k + 1) % count],
            total if panels.edged[body] else arcs[0] + total,
        )
        low, high = (before - middle) / half, (after - middle) / half
        for _ in range(4):
            values = legendre.legvander(x, order - 1)
            slope = np.sum(legendre.legder(modes, axis=1) * values[:, :-1], axis=1)
            with np.errstate(divide="ignore", invalid="ignore"):
                step = np.sum(modes * values, axis=1) / slope
            x = np.clip(np.where(np.isfinite(step), x - step, start), low, high)
        return (middle + half * x) % total

    def _lee(self, body, directions):
        """Start (counter-clockwise) and length of the lee wall of a body with a wake."""
        left, right = self._lees(directions)[body].arcs.T
        return right, (left - right) % self._arcs[body].length

    def _breadths(self, body, directions):
        places = self._place(body, self._widest_arcs(body, directions))
        across = (places / np.exp(1j * np.radians(directions))[:, None]).imag
        return across[:, 0] - across[:, 1]

    def _place(self, body, arcs):
        """Complex wall points at arc positions."""
        if self.order > 1:
            wall = self._arcs[body]
            flat = self.outlines[body].position(wall.parameter(np.ravel(arcs)))
            return flat.reshape(np.shape(arcs))
        k, x = self._panel_at(body, arcs)
        a, b = self._panels.ends[k, 0], self._panels.ends[k, 1]
        return 0.5 * (a + b) + 0.5 * (b - a) * x

    def _panel_at(self, body, arcs):
        """Panel index and coordinate in [-1, 1] along its arc of arc positions on a body."""
        part = self._panels.panel_slice(body)
        first = self._panels.end_arcs[part, 0]
        arcs = np.asarray(arcs) % self._arcs[body].length
        k = np.clip(np.searchsorted(first, arcs, "right") - 1, 0, len(first) - 1) + part.start
        low, high = self._panels.end_arcs[k, 0], self._panels.end_arcs[k, 1]
        return k, 2.0 * (arcs - low) / (high - low) - 1.0

    def _wall_speed_at(self, body, gamma, arcs):
        """gamma (..., N) interpolated on its panel at arc positions (k,): (..., k)."""
        k, x = self._panel_at(body, arcs)
        weights = legendre.legvander(x, self.order - 1) @ to_modes(self.order)
        columns = k[:, None] * self.order + np.arange(self.order)
        return np.sum(gamma[..., columns] * weights, axis=-1)

    # --- what the caller asks for -----------------------------------------------------------

    def breadth(self, body, direction=0.0):
        """Breadth of a body across the stream, in the caller's unit: float, or (n,) array."""
        body, directions = self._body(body), self._directions(direction)
        return _shaped(self._breadths(body, np.atleast_1d(directions)), directions)

    def widest(self, body, direction=0.0):
        """(..., 2, 2): the wall points widest across the stream, the stream's left one first."""
        body, directions = self._body(body), self._directions(direction)
        arcs = self._widest_arcs(body, np.atleast_1d(directions))
        return _shaped(_pairs(self._place(body, arcs)), directions)

    def edge_point(self, body):
        """(2,): the sharp edge of a body, or None if it has none."""
        if not self._has_edge(self._body(body)):
            return None
        return _pairs(self.outlines[body].position(np.array([self.outlines[body].edge])))[0]

    def undisturbed(self, points, direction=0.0):
        """(..., 2): the onset velocity at the points, over the onset speed."""
        points, directions = as_points("points", points), self._directions(direction)
        onset = _components(np.atleast_1d(directions))
        shape = (len(onset),) + (1,) * (points.ndim - 1) + (2,)
        full = np.broadcast_to(onset.reshape(shape), (len(onset),) + points.shape).copy()
        return _shaped(full, directions)

    def velocity(self, points, direction=0.0):
        """(..., 2) velocity at points (..., 2), over the onset speed; NaN inside a body.

        A vector of n directions makes it (n, ..., 2). A point on a wall gets the outer limit.

        Raises
        ------
        InputError
            If points or directions are not usable, or the surroundings do not admit a direction.

        Examples
        --------
        >>> import offbody as ob
        >>> model = ob.solve(ob.circle(2.0))
        >>> model.velocity([(0.0, 1.0), (0.0, 2.0)]).round(6) + 0.0
        array([[2.  , 0.  ],
               [1.25, 0.  ]])
        """
        points, directions = as_points("points", points), self._directions(direction)
        complex_velocity = self._velocity(_complex(points).ravel(), np.atleast_1d(directions))
        pairs = _pairs(complex_velocity.conj())
        return _shaped(pairs.reshape(pairs.shape[:1] + points.shape), directions)

    def _velocity(self, z, directions):
        """(directions, len(z)) complex velocity u - i v."""
        rows, combination, onset = self._state(directions)
        fields = self._equation.velocity(rows, z)
        total = fields if combination is None else combination @ fields
        return self._whole_velocity(total, onset, z, directions)

    def _whole_velocity(self, of_walls, onset, z, directions, inside=None):
        """(directions, len(z)) velocity of the walls, the onset and the bracings together."""
        total = of_walls + onset[:, None]
        if self.bracings:
            total += self._screens.strengths(directions) @ self._screens.velocity(z)
        return self._masked(total, z, inside)

    def _field(self, direction):
        """The complex velocity u - i v for one direction, as a function of complex points (m,)."""
        rows, combination, onset = self._state(np.array([direction]))
        strengths = rows if combination is None else combination @ rows

        screens = self._screens.strengths(np.array([direction]))

        def velocity(z):
            total = flow.velocity(self._panels, self.surroundings, strengths, z) + onset[:, None]
            if self.bracings:
                total += screens @ self._screens.velocity(z)
            return self._masked(total, z)[0]

        return velocity

    def _masked(self, values, z, inside=None):
        inside = flow.inside(self._panels, self._home(z)) if inside is None else inside
        nothing = complex(np.nan, np.nan) if np.iscomplexobj(values) else np.nan
        values[:, inside | ~holds(self.surroundings, z)] = nothing
        return values

    def _home(self, z):
        """Points moved by whole periods, where there are any, to where the bodies stand."""
        return z if self._panels.copies is None else self._panels.copies.home(z)

    def velocity_gradient(self, points, direction=0.0):
        """(..., 2, 2) d(u, v)/d(x, y) at points (..., 2), per unit of length; NaN inside a body.

        Examples
        --------
        >>> import offbody as ob
        >>> ob.solve(ob.circle(2.0)).velocity_gradient((2.0, 0.0)).round(6) + 0.0
        array([[ 0.25,  0.  ],
               [ 0.  , -0.25]])
        """
        points, directions = as_points("points", points), self._directions(direction)
        z, flat = _complex(points).ravel(), np.atleast_1d(directions)
        rows, combination, _ = self._state(flat)
        fields = flow.gradient(self._panels, self.surroundings, rows, z)
        total = fields if combination is None else combination @ fields
        if self.bracings:
            total += self._screens.strengths(flat) @ self._screens.gradient(z)
        total = self._masked(total, z)
        gradient = np.stack(
            [np.stack([total.real, -total.imag], -1), np.stack([-total.imag, -total.real], -1)], -2
        )
        return _shaped(gradient.reshape((len(flat),) + points.shape + (2,)), directions)

    def pressure_coefficient(self, points, direction=0.0):
        """(...,) pressure coefficient 1 - speed^2 at points (..., 2); NaN inside a body.

        Examples
        --------
        >>> import offbody as ob
        >>> round(float(ob.solve(ob.circle(2.0)).pressure_coefficient((-1.0, 0.0))), 6)
        1.0
        """
        velocity = self.velocity(points, direction)
        return 1.0 - np.sum(velocity * velocity, axis=-1)

    def stream_function(self, points, direction=0.0):
        """(...,) stream function at points (..., 2), a length for unit onset speed.

        Far away without circulation and wakes it is y cos(direction) - x sin(direction). A wake
        makes a cut straight downstream of its body, a bracing one along itself and straight
        downstream of its end. NaN inside a body.

        Examples
        --------
        >>> import offbody as ob
        >>> model = ob.solve(ob.circle(2.0))
        >>> model.stream_function([(0.0, 1.0), (0.0, 2.0)]).round(6) + 0.0
        array([0. , 1.5])
        """
        points, directions = as_points("points", points), self._directions(direction)
        z, flat = _complex(points).ravel(), np.atleast_1d(directions)
        rows, combination, onset = self._state(flat)
        along = np.radians(flat) if combination is None else np.zeros(len(rows))
        fields = flow.potential(
            self._panels, self.surroundings, rows, self._rearmost(along), along, z
        ).imag
        total = fields if combination is None else combination @ fields
        total = total + (z * onset[:, None] + self._screens.potential(flat, z)).imag
        return _shaped(self._masked(total, z).reshape((len(flat),) + points.shape[:-1]), directions)

    def _rearmost(self, along):
        """(directions, bodies) the panel whose first end lies farthest downstream."""
        places = (self._panels.ends[:, 0] * np.exp(-1j * along)[:, None]).real
        parts = [self._panels.panel_slice(b) for b in range(self._panels.bodies)]
        return np.stack([np.argmax(places[:, p], axis=1) + p.start for p in parts], axis=1)

    def surface(self, body, direction=0.0):
        """SurfaceFlow of one body: points, arc, signed speed and pressure at its nodes.

        Examples
        --------
        >>> import offbody as ob
        >>> wall = ob.solve(ob.circle(2.0)).surface(0)
        >>> round(float(abs(wall.speed).max()), 3)
        2.0
        """
        body, directions = self._body(body), self._directions(direction)
        flat = np.atleast_1d(directions)
        part, total = self._panels.node_slice(body), self._arcs[body].length
        speed = self._wall_speeds(flat)[:, part]
        pressure = 1.0 - speed**2
        if self.wakes[body] is not None:
            start, length = self._lee(body, flat)
            within = (self._panels.arcs[part] - start[:, None]) % total
            base = self._lees(flat)[body].base_pressure
            pressure = np.where(within < length[:, None], base[:, None], pressure)
        arc = (self._panels.arcs[part] - self._arcs[body].start) % total
        return SurfaceFlow(
            _pairs(self._panels.nodes[part]), arc, _shaped(speed, directions),
            _shaped(pressure, directions), _shaped(self._wall_errors(flat)[:, part], directions),
        )

    def _wall_speeds(self, directions):
        """(directions, N) signed surface speed."""
        rows, combination, _ = self._state(directions)
        return (rows if combination is None else combination @ rows).real

    def wall_normal_speed(self, body, direction=0.0):
        """(n,) outward normal speed at the nodes of a body: that of its wake, or zero."""
        body, directions = self._body(body), self._directions(direction)
        blown = self._wall_normal_speeds(np.atleast_1d(directions))
        return _shaped(blown[:, self._panels.node_slice(body)], directions)

    def port_pressure(self, body, arc_fraction, direction=0.0):
        """Pressure coefficient on a wall at a fraction of its arc, from the outline's first point.

        Counter-clockwise, 0 to 1. In the lee of a body with a wake the base pressure, NaN where the
        wake has none.

        Examples
        --------
        >>> import offbody as ob
        >>> model = ob.solve(ob.circle(2.0))                  # first point at (1, 0)
        >>> round(float(model.port_pressure(0, 150 / 360)), 6) + 0.0   # 30 degrees off the front
        0.0
        """
        body, directions = self._body(body), self._directions(direction)
        fraction = as_number("arc_fraction", arc_fraction, least=0.0, greatest=1.0)
        flat, total = np.atleast_1d(directions), self._arcs[body].length
        arc = (self._arcs[body].start + fraction * total) % total
        speed = self._wall_speed_at(body, self._wall_speeds(flat), np.array([arc]))[:, 0]
        pressure = 1.0 - speed**2
        if self.wakes[body] is not None:
            start, length = self._lee(body, flat)
            base = self._lees(flat)[body].base_pressure
            pressure = np.where((arc - start) % total < length, base, pressure)
        return _shaped(pressure, directions)

    def far_downstream(self, direction=0.0):
        """(..., 2) velocity far downstream, over the onset speed.

        That of the onset, but where bodies repeat without end: there circulations turn the stream,
        and wakes add to it.

        Examples
        --------
        >>> import offbody as ob
        >>> row = ob.solve(ob.circle(1.0), surroundings=ob.Row(4.0), circulation=-2.0)
        >>> row.far_downstream().round(9)
        array([ 1. , -0.5])
        """
        directions = self._directions(direction)
        flat = np.atleast_1d(directions)
        given = np.exp(-1j * np.radians(flat))
        onset = self._state(flat)[2]
        # The images move the stream by as much downstream as upstream, the other way.
        return _shaped(_pairs((2.0 * onset - given).conj()), directions)

    def blockage(self, direction=0.0):
        """(bodies,) speed-up of the stream at the middle of each body by walls and copies.

        The part of the velocity there that images induce, along the stream and over the onset
        speed: what a model of the same body in an open stream lacks. Zero in an open stream.

        References
        ----------
        H. J. Allen and W. G. Vincenti, NACA Report 782 (1944).

        Examples
        --------
        >>> import offbody as ob
        >>> duct = ob.solve(ob.circle(1.0), surroundings=ob.Duct(-10.0, 10.0))
        >>> round(float(duct.blockage()[0]), 5)       # pi^2/12 (1/20)^2 = 0.00206
        0.00206
        """
        directions = self._directions(direction)
        flat, panels, middle = np.atleast_1d(directions), self._panels, self._middles
        rows, combination, onset = self._state(flat)
        alone = replace(panels, copies=None)
        fields = flow.velocity(panels, self.surroundings, rows, middle)
        fields = fields - flow.velocity(alone, OpenStream(), rows, middle)
        total = fields if combination is None else combination @ fields
        given = np.exp(-1j * np.radians(flat))
        added = (total + (onset - given)[:, None]) / given[:, None]
        return _shaped(added.real, directions)

    def circulation(self, direction=0.0):
        """(bodies,) circulation round each body, counter-clockwise, for unit onset speed."""
        directions = self._directions(direction)
        speeds = self._wall_speeds(np.atleast_1d(directions)) * self._panels.weights
        first = self._panels.starts[:-1] * self.order
        return _shaped(np.add.reduceat(speeds, first, axis=1), directions)

    def force(self, direction=0.0):
        """(bodies, 2) force per unit dynamic pressure and unit span, a length.

        The integral of the pressure (Blasius). For a body with a wake that would be a thrust and
        means nothing: its component along the stream is then the wake's drag. The one across it is
        that of the pressure, the base pressure in the lee; of the potential flow if there is none.
        NaN for a body with a sharp edge whose circulation is prescribed: the stream turns round its
        edge at an unbounded speed, and the suction there is beyond panels.

        Warns
        -----
        AccuracyWarning
            Where it is NaN for that reason.

        Examples
        --------
        >>> import offbody as ob
        >>> ob.solve(ob.circle(1.0), circulation=-2.0).force().round(9) + 0.0
        array([[0., 4.]])
        """
        directions = self._directions(direction)
        flat = np.atleast_1d(directions)
        rows, combination, _ = self._state(flat)
        strengths = rows if combination is None else combination @ rows
        moment = strengths**2 * self._panels.tangents.conj() * self._panels.weights
        first = self._panels.starts[:-1] * self.order
        force = (1j * np.add.reduceat(moment, first, axis=1)).conj()
        for body, wake in enumerate(self.wakes):
            if wake is not None:
                stream, lee = np.exp(1j * np.radians(flat)), self._lees(flat)[body]
                if wake.has_base:
                    pressure = self.surface(body, flat).pressure_coefficient
                    normal = -1j * self._panels.tangents[self._panels.node_slice(body)]
                    shares = self._panels.weights[self._panels.node_slice(body)]
                    force[:, body] = -pressure @ (normal * shares)
                across = (force[:, body] / stream).imag
                force[:, body] = stream * (2.0 * lee.flux.sum(axis=1) + 1j * across)
        force[:, self._warned_of_edges("force")] = complex(np.nan, np.nan)
        return _shaped(_pairs(force), directions)

    def _warned_of_edges(self, what):
        """Bodies whose edge is turned round at an unbounded speed: a warning of no ``what``."""
        bodies = [
            body for body, given in enumerate(self._prescribed)
            if given is not None and self._has_edge(body)
        ]
        for body in bodies:
            warnings.warn(
                f"the {what} on body {body} is NaN: with circulation = "
                f"{self._prescribed[body]:g} prescribed the speed at its sharp edge is unbounded; "
                "leave its circulation None",
                AccuracyWarning, stacklevel=3,
            )
        return bodies

    def moment(self, about=(0.0, 0.0), direction=0.0):
        """(bodies,) moment about a point, counter-clockwise, per unit dynamic pressure and span.

        A length squared: the integral of the pressure (Blasius), with the base pressure in the lee
        of a wake; NaN for a body whose wake has none, and for a sharp edge with a circulation
        prescribed, as ``force`` is.

        Parameters
        ----------
        about : (2,) array_like
            The point.
        direction : float or (n,) array_like
            One direction, or n of them for (n, bodies).

        Raises
        ------
        InputError
            If the point or a direction is not usable.

        Warns
        -----
        AccuracyWarning
            Where it is NaN because of an edge.

        Examples
        --------
        >>> import offbody as ob
        >>> model = ob.solve(ob.ellipse(2.0, 1.0))        # it turns broadside to the stream
        >>> model.moment(direction=45.0).round(6)
        array([-2.356194])
        """
        point, directions = complex(*as_point("about", about)), self._directions(direction)
        flat, panels = np.atleast_1d(directions), self._panels
        turning = (panels.nodes - point) * panels.tangents.conj() * panels.weights
        moment = -np.add.reduceat(
            self._wall_speeds(flat) ** 2 * turning.real, panels.starts[:-1] * self.order, axis=1
        )
        for body, wake in enumerate(self.wakes):
            if wake is not None:
                # A pressure p pushes along -n = i T: the moment of p is p Re((z - point) conj(T)).
                pressure = self.surface(body, flat).pressure_coefficient
                moment[:, body] = pressure @ turning.real[panels.node_slice(body)]
        moment[:, self._warned_of_edges("moment")] = np.nan
        return _shaped(moment, directions)

    def wake(self, body, direction=0.0):
        """WakeFlow of one body: its drag, base pressure and the points where the flow leaves.

        Raises
        ------
        InputError
            If the body has no wake.

        Examples
        --------
        >>> import offbody as ob
        >>> tube = ob.solve(ob.circle(1.0), wakes=ob.Wake(1.2, separation=80.0))
        >>> round(float(tube.wake(0).base_pressure), 2)
        -1.18
        """
        body, directions = self._body(body), self._directions(direction)
        wake, flat = self.wakes[body], np.atleast_1d(directions)
        if wake is None:
            raise InputError(
                f"body = {body} ({self.outlines[body].name}) has no wake: give ob.solve wakes=..."
            )
        lee = self._lees(flat)[body]
        drag, wall = 2.0 * lee.flux.sum(axis=1), self._arcs[body]
        return WakeFlow(
            _shaped(drag / (wake.reference or self._breadths(body, flat)), directions),
            _shaped(lee.base_pressure, directions),
            _shaped(_pairs(self._place(body, lee.arcs)), directions),
            _shaped((lee.arcs - wall.start) / wall.length % 1.0, directions),
        )

    def with_wakes(self, wakes):
        """The same Model with other wakes, as ``solve`` takes them; nothing is solved anew.

        Examples
        --------
        >>> import offbody as ob
        >>> model = ob.solve(ob.circle(1.0))
        >>> round(float(model.with_wakes(ob.Wake(1.2)).velocity((-200.0, 0.0))[0]), 6)
        0.999519
        """
        other = copy(self)
        other.wakes, other._settled = _as_wakes(wakes, len(self.outlines)), {}
        return other

    def stagnation_points(self, body, direction=0.0):
        """(k, 2) points of a wall where the speed changes sign; a list of them for a vector.

        In the lee of a body with a wake there are none: the wall speed means nothing there.

        Examples
        --------
        >>> import offbody as ob
        >>> ob.solve(ob.circle(2.0)).stagnation_points(0).round(6) + 0.0
        array([[ 1.,  0.],
               [-1.,  0.]])
        """
        body, directions = self._body(body), self._directions(direction)
        flat = np.atleast_1d(directions)
        speeds = self._wall_speeds(flat)
        found = [self._stagnation(body, row, d) for row, d in zip(speeds, flat, strict=True)]
        return found if np.ndim(directions) else found[0]

    def _stagnation(self, body, gamma, direction):
        part, total = self._panels.node_slice(body), self._arcs[body].length
        arcs = self._panels.arcs[part]
        forward = gamma[part] >= 0.0
        places = []
        for k in np.flatnonzero(forward != np.roll(forward, -1)):
            low = arcs[k]
            high = arcs[(k + 1) % len(arcs)] + (total if k + 1 == len(arcs) else 0.0)
            places.append(self._zero_between(body, gamma, low, high) % total)
        places = np.array(places)
        if self.wakes[body] is not None and len(places):
            start, length = self._lee(body, np.array([direction]))
            places = places[(places - start) % total >= length]
        order = np.argsort((places - self._arcs[body].start) % total)
        return _pairs(self._place(body, places[order])) if len(places) else np.empty((0, 2))

    def _zero_between(self, body, gamma, low, high):
        """Where the piecewise polynomial gamma, or its jump between panels, passes zero."""
        def speed(arc):
            return float(self._wall_speed_at(body, gamma, np.array([arc]))[0])

        if speed(low) * speed(high) >= 0.0:   # rounding, or one of them is zero itself
            return low if abs(speed(low)) < abs(speed(high)) else high
        return brentq(speed, low, high, xtol=1e-14 * self._arcs[body].length)

    def streamlines(self, starts, direction=0.0, length=None, domain=None, both_ways=False):
        """Streamlines from points, downstream for a given length: a list of (k, 2) arrays.

        Parameters
        ----------
        starts : (..., 2) array
        direction : float
            One direction, in degrees.
        length : float, optional
            Arc length to follow; negative goes upstream. None: three times the bodies' extent.
        domain : (xmin, xmax, ymin, ymax), optional
            Lines end where they leave it.
        both_ways : bool
            Follow each line upstream too; its start is then within it.

        A line ends at a wall, at a point of rest, at the domain's edge or at its length; one that
        would start inside a body, at a point of rest or outside the domain is empty.

        Raises
        ------
        InputError
            If starts, direction, length or domain are not usable.

        Examples
        --------
        >>> import offbody as ob
        >>> model = ob.solve(ob.circle(2.0))
        >>> line, = model.streamlines((-4.0, 1.0), length=8.0)
        >>> bool(abs(model.stream_function(line) - model.stream_function(line[0])).max() < 1e-6)
        True
        """
        starts = as_points("starts", starts).reshape(-1, 2)
        directions = self._directions(direction)
        if np.ndim(directions):
            raise InputError("direction must be one number for streamlines; call once for each")
        if length is None:
            x0, x1, y0, y1 = self.extent
            length = 3.0 * max(x1 - x0, y1 - y0)
        length = as_number("length", length)
        if domain is not None:
            domain = _as_domain(domain)
        return trace(self, starts, float(directions), length, domain, both_ways)

    def grid(self, x, y, direction=0.0):
        """Velocity on the tensor grid of x and y: (len(y), len(x), 2), NaN inside bodies.

        Examples
        --------
        >>> import offbody as ob
        >>> ob.solve(ob.circle(2.0)).grid([2.0, 3.0], [0.0]).round(4) + 0.0
        array([[[0.75  , 0.    ],
                [0.8889, 0.    ]]])
        """
        x, y = as_reals("x", x), as_reals("y", y)
        for name, axis in (("x", x), ("y", y)):
            if axis.ndim != 1:
                raise InputError(f"{name} must be a vector of grid lines; got shape {axis.shape}")
        directions = self._directions(direction)
        flat, z = np.atleast_1d(directions), (x + 1j * y[:, None]).ravel()
        rows, combination, onset = self._state(flat)
        fields = flow.velocity_on_grid(self._panels, self.surroundings, rows, x, y)
        fields = fields.reshape(len(rows), -1)
        total = fields if combination is None else combination @ fields
        inside = flow.inside_on_grid(self._panels, x, y).ravel()
        pairs = _pairs(self._whole_velocity(total, onset, z, flat, inside).conj())
        return _shaped(pairs.reshape(len(flat), len(y), len(x), 2), directions)

    def _directions(self, direction):
        return self.surroundings.admit(as_directions("direction", direction))

    def _body(self, body):
        return as_body("body", body, self._panels.bodies)


def _as_outlines(outlines):
    bodies = [outlines] if isinstance(outlines, Outline) else outlines
    if isinstance(bodies, str) or not isinstance(bodies, Sequence) or not bodies:
        raise InputError(f"outlines must be an outline or a sequence of them, got {outlines!r}")
    for k, body in enumerate(bodies):
        if not isinstance(body, Outline):
            raise InputError(
                f"outlines[{k}] must be an outline such as ob.circle(...), got {body!r}"
            )
    return tuple(bodies)


def _as_wakes(given, bodies):
    wakes = tuple(_per_body("wakes", given, bodies))
    for wake in wakes:
        if wake is not None and not isinstance(wake, Wake):
            raise InputError(f"wakes must hold ob.Wake(...) or None, got {wake!r}")
    return wakes


def _as_bracings(given):
    if given is None:
        return ()
    several = isinstance(given, Sequence) and not isinstance(given, str)
    bracings = tuple(given) if several else (given,)
    for bracing in bracings:
        if not isinstance(bracing, Bracing):
            raise InputError(f"bracings must hold ob.Bracing(...), got {bracing!r}")
    return bracings


def _per_body(name, given, bodies):
    if isinstance(given, str) or not isinstance(given, (Sequence, np.ndarray)):
        return [given] * bodies
    if len(given) != bodies:
        raise InputError(f"{name} has {len(given)} entries for {bodies} bodies; give one for each")
    return list(given)


def _as_domain(domain):
    domain = as_reals("domain", domain)
    if domain.shape != (4,) or domain[0] >= domain[1] or domain[2] >= domain[3]:
        raise InputError(f"domain must be (xmin, xmax, ymin, ymax), got {domain.tolist()}")
    return tuple(domain)


def _components(directions):
    """(n, 2) unit vectors of directions in degrees, exact at right angles."""
    quarter, rest = np.divmod(np.asarray(directions, float) + 45.0, 90.0)
    angle = np.radians(rest - 45.0)
    unit = np.exp(1j * angle) * np.array([1, 1j, -1, -1j])[quarter.astype(int) % 4]
    return _pairs(unit)


def _complex(points):
    return points[..., 0] + 1j * points[..., 1]


def _pairs(z):
    return np.stack([z.real, z.imag], axis=-1)


def _shaped(values, directions):
    """Drop the leading axis if one direction was asked for; a lone number becomes a float."""
    if np.ndim(directions):
        return values
    return values[0] if values.ndim > 1 else float(values[0])
