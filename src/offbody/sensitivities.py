"""Derivatives of what a survey reads: by the sensor's place, the direction, and how bodies stand.

A body that moves as a whole, or grows, by a small displacement D(zeta) of its wall keeps its own
equation, seen in its own frame. Its field W, of strengths gamma that it carries along, changes by

    dW(z) = -d/dz (field of the strengths gamma D) + growth W(z)

at a fixed place z, images moving as their bodies do; on its own wall the flow of all others changes
by dW/dz D, and turns with the tangent where the body turns. That is the right-hand side of one more
solution of the same equation, for each of the unit flows: the tangent of the solution. Nothing is
differenced.
"""

from dataclasses import dataclass, replace

import numpy as np

from offbody import flow
from offbody.checks import as_points
from offbody.errors import InputError
from offbody.surroundings import OpenStream
from offbody.surveys import Survey

MOTIONS = (("x", "1/length"), ("y", "1/length"), ("turn", "1/degree"), ("size", "1"))
X, Y, TURN, SIZE = range(4)
DEGREE = np.pi / 180.0
SMALLEST = 1e-10  # share of a flow, over the largest, which is left out


@dataclass(frozen=True, eq=False)
class Sensitivity:
    """Derivatives of the columns of a survey of n directions and k sensors; ``sensitivity`` makes
    it. Arrays are (n, k, parameters), NaN where the sensor does not read the quantity.

    Attributes
    ----------
    parameters : tuple of (name, unit)
        The last axis: ``sensor x``, ``sensor y`` (the sensor as a whole is moved), ``direction``
        (of the stream, per degree of the table's own angles), and for each body, ``body 0 x``,
        ``body 0 y`` (it is moved), ``body 0 turn`` (per degree counter-clockwise) and ``body 0
        size`` (per unit of a factor on its size: times 0.01, a percent).
    speed_ratio, direction_error, component_error, static_error : arrays
        As the columns of the survey, per unit of each parameter. Ports move with their bodies.
    about : (bodies, 2) array
        The points about which bodies are turned, and from which they grow.
    """

    parameters: tuple
    speed_ratio: np.ndarray
    direction_error: np.ndarray
    component_error: np.ndarray
    static_error: np.ndarray
    about: np.ndarray


def sensitivity(table, about=None):
    """Derivatives of a survey's columns by the place of sensors, the direction, and all bodies.

    Exact but for the error of the panels: the tangent of the solution, with one right-hand side
    more for each parameter and unit flow. Kutta conditions hold and prescribed circulations stay
    as they are.

    Parameters
    ----------
    table : Survey
        What ``ob.survey`` returned, of bodies without wakes and bracings.
    about : (bodies, 2) or (2,) array_like, optional
        The points about which bodies are turned and from which they grow. None: the middle of each
        body's wall.

    Returns
    -------
    Sensitivity

    Raises
    ------
    InputError
        If the table is none, its bodies have wakes or bracings or panels of order 1, or ``about``
        does not fit.

    Examples
    --------
    >>> import offbody as ob
    >>> mast = ob.solve(ob.circle(2.0))
    >>> found = ob.sensitivity(ob.survey(mast, ob.PointSensor(-5.0, 0.0), [0.0]))
    >>> [name for name, _ in found.parameters]
    ['sensor x', 'sensor y', 'direction', 'body 0 x', 'body 0 y', 'body 0 turn', 'body 0 size']
    >>> found.speed_ratio[0, 0].round(6) + 0.0         # of 1 - (size / x)^2
    array([-0.016,  0.   ,  0.   ,  0.016,  0.   ,  0.   , -0.08 ])
    """
    if not isinstance(table, Survey):
        raise InputError(f"table must be what ob.survey returned, got {table!r}")
    model = table.model
    if any(model.wakes) or model.bracings:
        raise InputError(
            "table: sensitivities of flows with wakes or bracings are not known; survey a model "
            "without them, model.with_wakes(None)"
        )
    if model.order == 1:
        raise InputError("order = 1: sensitivities need panels of order 2 or more; solve with them")
    about = _as_about(about, model)
    flows = _Flows(table)
    changes = [(change, None) for change in table._changes]
    changes.append(flows.by_direction())
    for body, point in enumerate(about):
        changes += flows.by_motions(body, complex(*point))
    names = [("sensor x", "1/length"), ("sensor y", "1/length"), ("direction", "1/degree")]
    names += [
        (f"body {body} {motion}", unit) for body in range(len(about)) for motion, unit in MOTIONS
    ]
    return Sensitivity(tuple(names), *_columns(table, changes), about)


def _as_about(about, model):
    if about is None:
        middles = model._middles
        return np.stack([middles.real, middles.imag], axis=-1)
    points = as_points("about", about)
    bodies = len(model.outlines)
    if points.shape not in ((2,), (bodies, 2)):
        raise InputError(
            f"about has shape {points.shape}: give one point, or one for each of {bodies} bodies"
        )
    return np.broadcast_to(points, (bodies, 2)).copy()


class _Flows:
    """The unit flows of a model, their changes, and how a table's directions combine them."""

    def __init__(self, table):
        self.table, self.model = table, table.model
        model = self.model
        points = table._samples.points
        self.places = points[:, 0] + 1j * points[:, 1]
        self.rows = np.concatenate([model._unit, model._spin])
        self.onset = np.zeros((len(self.rows), 1), complex)
        self.onset[:2, 0] = 1.0, -1j
        self.fields = model._equation.velocity(self.rows, self.places)
        self.combination, self.shift = model._combination(table.directions)
        # Few flows that leave their edges smoothly, as the unit flows do not, stand for all.
        _, sizes, kept = np.linalg.svd(self.combination, full_matrices=False)
        self.kept = kept[sizes > SMALLEST * sizes.max(initial=0.0)]

    def by_direction(self):
        """Changes per degree: (n, m) velocity u + i v at the samples, (n, N) wall speed."""
        if self.model.surroundings.walls:   # they admit no other direction
            nothing = np.full((len(self.combination), len(self.places)), np.nan + 0j)
            return nothing, np.full((len(self.combination), self.model.node_count), np.nan)
        turned = DEGREE * np.stack([-self._given[:, 1], self._given[:, 0]], axis=1)
        still = np.zeros((len(turned), self.rows.shape[0] - 2))
        change = np.concatenate([turned, still], axis=1)
        sense = -1.0 if self.table.by_bearing else 1.0
        return self._changed(sense * change, 0.0, 0.0)

    @property
    def _given(self):
        angle = np.radians(self.table.directions)
        return np.stack([np.cos(angle), np.sin(angle)], axis=1)

    def by_motions(self, body, about):
        """The same for each of the four motions of a body."""
        rows, own = self._tangent(body, about)
        fields = self.model._equation.velocity(rows.reshape(-1, rows.shape[-1]), self.places)
        fields = fields.reshape(own.shape) + own
        factors = np.array([1.0, 1.0, DEGREE, 1.0])[:, None, None]
        still, shares = np.zeros_like(self.combination), self.combination @ self.kept.T
        return [
            self._changed(still, shares @ field, shares @ row)
            for field, row in zip(factors * fields, factors * rows, strict=True)
        ]

    def _changed(self, change, velocity, speed):
        """Changes of the flow where the unit flows' shares change, and they themselves do.

        change (n, R) of the shares; velocity (n, m) and speed (n, N) with the shares as they are.
        What they do to a Kutta condition, the circulations take off.
        """
        change = change + self.model._kept_smooth(self.shift, change @ self.rows + speed)
        velocity = velocity + change @ (self.fields + self.onset)
        return velocity.conj(), speed + change @ self.rows

    def _tangent(self, body, about):
        """Changes per unit of a body's four motions, a turn in radians, of the flows kept.

        Of the strengths, (4, R, N), and of the velocity that the strengths of the moving body
        induce at the samples as it carries them along, (4, R, m).
        """
        model, rows, onset = self.model, self.kept @ self.rows, self.kept @ self.onset
        panels, part = model._panels, model._panels.node_slice(body)
        own = np.zeros_like(rows)
        own[:, part] = rows[:, part]
        away = panels.nodes[part] - about
        displaced = np.stack([np.ones_like(away), np.full_like(away, 1j), 1j * away, away])
        carried = np.zeros((4, *rows.shape), complex)
        carried[:, :, part] = displaced[:, None] * own[:, part]

        def moving(panels, surroundings, z):
            """(4, R, len(z)) change of the velocity that the moving body induces at a place."""
            strengths = carried.reshape(-1, rows.shape[-1])
            change = -flow.gradient(panels, surroundings, strengths, z).reshape(4, len(rows), -1)
            change[SIZE] += flow.velocity(panels, surroundings, own, z)
            return change

        def everywhere(evaluate, z):
            return evaluate(panels, model.surroundings, z)

        def of_images(evaluate, z):
            """What images of the moving body add: all but the body itself."""
            free = replace(panels, copies=None)
            return everywhere(evaluate, z) - evaluate(free, OpenStream(), z)

        def outer(kind):
            """(R, n) velocity, or its gradient, on the moving wall, of all but the body itself."""
            rest = everywhere(lambda *where: kind(*where[:2], rows - own, where[2]), nodes)
            return rest + of_images(lambda *where: kind(*where[:2], own, where[2]), nodes)

        nodes = panels.nodes[part]
        change = np.empty((4, *rows.shape), complex)
        here = np.zeros(len(panels.nodes), bool)
        here[part] = True
        change[:, :, ~here] = everywhere(moving, panels.nodes[~here])
        change[:, :, part] = of_images(moving, nodes) + displaced[:, None] * outer(flow.gradient)
        change[TURN][:, part] += 1j * (onset + outer(flow.velocity))
        circulation = np.zeros((4, len(rows), panels.bodies))
        # A wall that grows is to keep its circulation, not its strengths.
        circulation[SIZE, :, body] = -(own @ panels.weights)
        tangents = model._equation.vortices(
            (panels.tangents * change).real.reshape(-1, rows.shape[-1]),
            circulation.reshape(-1, panels.bodies),
        )
        return tangents.reshape(change.shape), everywhere(moving, self.places)


def _columns(table, changes):
    """The columns' derivatives, each (n, k, parameters), from changes of velocity and wall speed.

    changes: pairs (n, m) and (n, N), the third of them by the direction; wall speeds None where
    they do not tell.
    """
    samples, velocity = table._samples, table._velocity
    size = np.abs(table._undisturbed)
    sense = -1.0 if table.by_bearing else 1.0
    columns = [[] for _ in range(4)]
    for parameter, (change, speeds) in enumerate(changes):
        is_direction = parameter == 2
        if parameter > 1:
            change = table._past_booms(change)
        per_angle = sense * DEGREE if is_direction else 0.0
        ratio = table._speed_of(change, velocity, table._speed_axes)
        paths = samples.are("path")
        along = samples.axes[paths].conj() * table._undisturbed[:, paths]
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio[:, paths] += per_angle * table.speed_ratio[:, paths] * along.imag / along.real
            turn = (samples.read_heading(change) / table._heading).imag - per_angle
        undisturbed = 1j * per_angle * table._undisturbed
        excess = (samples.read(change) - undisturbed) * samples.axes.conj()
        static = -2.0 * samples.gather(samples.weights * (velocity.conj() * change).real)
        for place, sensor in enumerate(table.sensors):
            if sensor.kind == "port":
                static[:, place] = _port_change(table, sensor, speeds)
        columns[0].append(ratio)
        columns[1].append(table._where_read("direction", sense * np.degrees(turn)))
        columns[2].append(np.where(paths, excess.real / size, np.nan))
        columns[3].append(static)
    return [np.stack(column, axis=-1) for column in columns]


def _port_change(table, port, speeds):
    """(n,) change of the pressure at a port with that of the wall speeds (n, N)."""
    model = table.model
    if speeds is None:   # it stays where it is in its wall
        return np.nan
    wall = model._arcs[port.body]
    arc = np.array([(wall.start + port.arc_fraction * wall.length) % wall.length])
    here = [
        model._wall_speed_at(port.body, one, arc)[:, 0]
        for one in (model._wall_speeds(table.directions), speeds)
    ]
    return -2.0 * here[0] * here[1]
