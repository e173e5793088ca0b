"""Surveys: what every sensor reads in every direction, against the undisturbed stream."""

from dataclasses import dataclass
from functools import cached_property, wraps
from typing import ClassVar

import numpy as np

from offbody.arcs import Arcs
from offbody.bearings import from_bearing, to_bearing, within_turn
from offbody.booms import Boom
from offbody.checks import as_body, as_directions, as_number
from offbody.compressibility import LOW_SPEED, as_mach, critical_mach
from offbody.errors import InputError
from offbody.sensors import SENSORS, PointSensor
from offbody.separations import DOUBTFUL, IN_WAKE, separation, wake_codes
from offbody.surroundings import holds, usual_directions

# Rules of this project, not of the trade: first and cautious guesses.
INCIDENCE_LIMIT = 12.0  # degrees up to which the flow is taken to follow a body with a sharp edge
FROM_BEHIND = 90.0  # degrees beyond which a sharp edge leads
SQUARE_TO_PATH = 0.05  # cosine below which a ratio of components along a path says nothing
WIDEST_STEP = 15.0  # degrees over which a sector goes on: none can step across a lee


def survey(
    model, sensors, directions=None, *, bearings=None, booms=None, reynolds=None, mach=None
):
    """Table of what every sensor reads in every direction, against the undisturbed stream.

    Parameters
    ----------
    model : Model
        What ``ob.solve`` returned.
    sensors : sensor or sequence of sensors
        PointSensor, PathSensor, CrossedPaths, DiscSensor, PitotTube, MultiHoleProbe, CupAndVane
        or WallPort, in any mixture; k of them.
    directions : array_like of shape (n,), optional
        Where the stream goes TO, degrees counter-clockwise from +x. By default 0, 1 ... 359 in
        an open stream, and 0 and 180 where walls bound the stream.
    bearings : array_like of shape (n,), optional
        In place of ``directions``: where the wind comes FROM, degrees clockwise from north. The
        table's direction errors are then clockwise positive, as in a record.
    booms : Boom or sequence, optional
        Per sensor, None or the boom that it stands above, whose own section then counts too; one
        boom, or none, for all.
    reynolds : float or sequence, optional
        Of the bodies, as ``ob.separation`` takes it: wakes then start where it says, in place of
        the points widest across the stream or those of the model's own wakes.
    mach : float, optional
        Of the undisturbed stream; above 0.3 the notes say what low speed leaves out.

    Returns
    -------
    Survey
        Arrays of shape (n, k); see there for the columns and for the rules of trust.

    Raises
    ------
    ob.InputError
        If both directions and bearings are given or one of them cannot be used; if there is no
        sensor, a sensor is of no known kind, or two have one name; if a boom is none, or its
        sensor a port; if a sensor lies inside a body or below the ground, or a body lies in a path
        or a disc: such a sensor could never read.

    Examples
    --------
    >>> import offbody as ob
    >>> mast = ob.solve(ob.circle(0.3))
    >>> table = ob.survey(mast, ob.PointSensor(-1.5, 0.0), directions=[0.0, 90.0])
    >>> table.speed_ratio.round(4)
    array([[0.99],
           [1.01]])
    """
    if not hasattr(model, "velocity_gradient"):
        raise InputError(f"model must be what ob.solve returned, got {model!r}")
    sensors = _as_sensors(sensors)
    angles, by_bearing = _as_angles(model, directions, bearings)
    samples = _Samples.of(model, sensors)
    mach = None if mach is None else as_mach(mach)
    booms = _as_booms(booms, sensors)
    table = Survey(
        model, sensors, _names(sensors), angles, by_bearing, booms, samples, reynolds, mach
    )
    _check_between_walls(table)
    _check_clear_of_bodies(table)
    return table


def _column(method):
    """A column of the table: worked out when first asked for, then kept, read-only."""

    @wraps(method)
    def once(self):
        values = method(self)
        values.setflags(write=False)
        return values

    return cached_property(once)


@dataclass(frozen=True, eq=False, repr=False)
class Survey:
    """Table of n directions by k sensors, made by ``ob.survey``; arrays are (n, k) unless said.

    A quantity that a sensor does not read, or that has no meaning, is NaN. A sensor stands for
    the undisturbed stream if its speed ratio is 1 and its direction error 0. Columns are worked
    out when first asked for.

    Attributes
    ----------
    model : Model
    sensors : tuple of sensors
    names : tuple of str
        Of the sensors; where no name was given, the kind and the place in the table.
    directions : (n,) array
        Where the stream goes TO, degrees counter-clockwise from +x.
    bearings : (n,) array
        Where the wind comes FROM, degrees clockwise from north.
    by_bearing : bool
        Whether the table was asked for by bearings.
    angles : (n,) array
        The table's own angles: the bearings if it was asked for by bearings, else the directions.
    booms : tuple of Boom or None
        That the sensors stand above.
    speed_ratio : array
        Sensed over undisturbed speed; for a path, the ratio of the components along it, NaN where
        the stream is within three degrees of square to it.
    body_speed_ratio, boom_speed_ratio : arrays
        Its two factors: what the bodies make of the undisturbed speed, and what the sensor's own
        boom makes of that (1 where there is none).
    direction_error : array
        Sensed minus undisturbed direction, degrees in (-180, 180]; counter-clockwise positive, or
        clockwise positive if the table was asked for by bearings.
    component_error : array
        For paths: sensed minus undisturbed component along the path, over the undisturbed speed.
    static_error : array
        Pressure coefficient at the sensor, the mean over a path or a disc.
    yaw : array
        For a tube or a probe: of the flow on its axis, degrees, signed as the direction error.
    saturated : array of bool
        Whether that yaw is beyond what it can read.
    speed_ratio_gradient, direction_error_gradient : (n, k, 2) arrays
        Change of the speed ratio and of the direction error, in degrees, per unit of length by
        which the sensor as a whole is misplaced in x and in y.
    numerical_error : array
        Half-width, over the undisturbed speed, within which the panels leave the velocity sensed:
        the model's estimate at the samples, summed by their weights in the reading; at a port, of
        the wall speed.
    in_wake, doubtful : arrays of bool
        Whether the sensor reaches into the wake of a body, or only into the margin round one.
    trust : array of bool
        False where potential flow is known to fail, by the rules below.
    reason : array of str
        Why there is no trust; empty where there is.
    notes : tuple of str
        What the reader must know about the whole table.
    columns : tuple of (name, unit, sentence)
        What ``rows`` yields.

    Notes
    -----
    Trust is refused, the first rule that applies giving the reason,

    1. to every sensor, where a body with a sharp edge meets the stream at more than 12 degrees of
       incidence, from behind (beyond 90 degrees) included: its circulation would be fiction. The
       incidence is the angle between the stream and the line to the edge from the point of the
       wall farthest from it;
    2. to a sensor with a sample point, or a port, in the lee of a body without a sharp edge:
       downstream of the line that joins the two points where the flow leaves its wall, and within
       the strip between them, which widens by 10 degrees on either side. They are those of
       ``ob.separation`` if a Reynolds number is given, else those of its wake (``ob.Wake``), else
       the points widest across the stream. Bracing has such a lee too, from end to end;
    3. to a tube or a probe that is ``saturated``.

    A margin of another 10 degrees, from a tenth of the breadth ahead of that line, is trusted and
    marked doubtful. A body with a sharp edge within its incidence has only a thin wake: left out,
    or a margin if a Reynolds number is given and the flow stays attached. These limits are
    cautious choices of this project. A sensor inside a body has no place in a table:
    ``ob.survey`` refuses it.

    Examples
    --------
    >>> import offbody as ob
    >>> mast = ob.solve(ob.circle(0.3))
    >>> ob.survey(mast, ob.PointSensor(0.0, 1.5, name="boom"), bearings=range(0, 360, 10))
    Survey(bearings: 36, sensors: boom)
    """

    model: object
    sensors: tuple
    names: tuple
    angles: np.ndarray
    by_bearing: bool
    booms: tuple
    _samples: object
    _reynolds: object = None
    _mach: float | None = None

    columns: ClassVar[tuple] = (
        ("sensor", "", "Name of the sensor."),
        ("direction", "degrees", "Where the stream goes to, counter-clockwise from +x."),
        ("bearing", "degrees", "Where the wind comes from, clockwise from north (+y)."),
        (
            "speed_ratio",
            "1",
            "Sensed over undisturbed speed; for a path, of the components along it.",
        ),
        ("body_speed_ratio", "1", "Its factor by the bodies."),
        ("boom_speed_ratio", "1", "Its factor by the sensor's own boom; 1 without one."),
        (
            "direction_error",
            "degrees",
            "Sensed minus undisturbed direction; counter-clockwise positive in a table made for "
            "directions, clockwise positive in one made for bearings.",
        ),
        (
            "component_error",
            "1",
            "For a path: sensed minus undisturbed component, over the undisturbed speed.",
        ),
        ("static_error", "1", "Pressure coefficient at the sensor."),
        (
            "yaw",
            "degrees",
            "For a tube or a probe: of the flow on its axis, signed as direction_error.",
        ),
        ("saturated", "", "True where that yaw is beyond what it can read."),
        (
            "speed_ratio_gradient_x",
            "1/length",
            "Change of the speed ratio per unit of length by which the sensor moves along x.",
        ),
        (
            "speed_ratio_gradient_y",
            "1/length",
            "Change of the speed ratio per unit of length by which the sensor moves along y.",
        ),
        (
            "numerical_error",
            "1",
            "Half-width within which the panels leave the velocity, over the undisturbed speed.",
        ),
        ("in_wake", "", "True where the sensor reaches into the wake of a body."),
        ("doubtful", "", "True where it only reaches into the margin round a wake."),
        ("trust", "", "False where potential flow is known to fail."),
        ("reason", "", "Why there is no trust; empty where there is."),
    )

    def __repr__(self):
        kind = "bearings" if self.by_bearing else "directions"
        return f"Survey({kind}: {len(self.angles)}, sensors: {', '.join(self.names)})"

    @_column
    def directions(self):
        return np.array(from_bearing(self.angles) if self.by_bearing else self.angles)

    @_column
    def bearings(self):
        return np.array(self.angles if self.by_bearing else to_bearing(self.angles))

    @_column
    def speed_ratio(self):
        return self._speed_of(self._velocity, self._velocity, self._speed_axes)

    @_column
    def body_speed_ratio(self):
        if not any(self.booms):
            return self.speed_ratio
        bare = self._free_of_booms
        return self._speed_of(bare, bare, self._axes_of(bare))

    @_column
    def boom_speed_ratio(self):
        return self.speed_ratio / self.body_speed_ratio

    @_column
    def direction_error(self):
        return self._where_read("direction", self._turn_from(self._undisturbed))

    @_column
    def component_error(self):
        excess = ((self._sensed - self._undisturbed) * self._samples.axes.conj()).real
        return np.where(self._samples.are("path"), excess / np.abs(self._undisturbed), np.nan)

    @_column
    def static_error(self):
        pressure = 1 - self._samples.gather(self._samples.weights * np.abs(self._velocity) ** 2)
        for place, sensor in enumerate(self.sensors):
            if sensor.kind == "port":
                pressure[:, place] = self.model.port_pressure(
                    sensor.body, sensor.arc_fraction, self.directions
                )
        return pressure

    @_column
    def yaw(self):
        noses = [np.nan if s.kind == "port" or s.nose is None else s.nose for s in self.sensors]
        return self._turn_from(np.exp(1j * np.radians(noses)))

    @_column
    def saturated(self):
        if np.isinf(self._samples.yaw_ranges).all():
            return np.zeros((len(self.angles), len(self.sensors)), bool)
        yaw = -self.yaw if self.by_bearing else self.yaw
        least, greatest = self._samples.yaw_ranges.T
        return (yaw < least) | (yaw > greatest)

    @_column
    def speed_ratio_gradient(self):
        changes = [
            self._speed_of(change, self._velocity, self._speed_axes) for change in self._changes
        ]
        return np.stack(changes, axis=-1)

    @_column
    def direction_error_gradient(self):
        with np.errstate(divide="ignore", invalid="ignore"):
            turns = [
                np.degrees((self._samples.read_heading(change) / self._heading).imag)
                for change in self._changes
            ]
        turns = np.stack(turns, axis=-1)
        return self._where_read("direction", -turns if self.by_bearing else turns)

    @_column
    def numerical_error(self):
        samples = self._samples
        error = self.model.numerical_error(samples.points, self.directions)
        shares = [np.abs(direct) + np.abs(turned) for direct, turned in samples.readings]
        return np.maximum(*(samples.gather(share * error) for share in shares))

    @_column
    def in_wake(self):
        return (self._wakes == IN_WAKE).any(axis=0)

    @_column
    def doubtful(self):
        return (self._wakes == DOUBTFUL).any(axis=0) & ~self.in_wake

    @_column
    def trust(self):
        return ~(self._astray.any(axis=0)[:, None] | self.in_wake | self.saturated)

    @_column
    def reason(self):
        reasons = np.full(self.trust.shape, "", dtype=object)
        # The last written is the first that applies.
        for row, place in np.argwhere(self.saturated):
            limit = self._samples.yaw_ranges[place]
            reasons[row, place] = f"yaw beyond {limit[0]:g} to {limit[1]:g} degrees"
        for number in reversed(range(len(self.model.bracings))):
            lee = self._wakes[len(self.model.outlines) + number] == IN_WAKE
            reasons[lee] = f"in the lee of bracing {number}"
        for body in reversed(range(len(self.model.outlines))):
            reasons[self._wakes[body] == IN_WAKE] = f"in the lee of body {body}"
        for body in reversed(range(len(self.model.outlines))):
            for row in np.flatnonzero(self._astray[body]):
                reasons[row] = _astray_reason(body, self._incidence[body, row])
        return reasons

    @cached_property
    def notes(self):
        left_out = (
            self._wake_left_out(body)
            for body, outline in enumerate(self.model.outlines)
            if outline.edge is None and self.model.wakes[body] is None
        )
        return (*left_out, *self._layers_at_ports(), *self._compressibility())

    def sectors(self, limit=0.01):
        """Per sensor, the sectors in which its speed ratio is within a limit of 1 and trusted.

        Parameters
        ----------
        limit : float
            Greatest difference of the speed ratio from 1.

        Returns
        -------
        list of lists of (from, to)
            In the table's own angles (bearings if it was asked for by bearings), within [0, 360)
            and ``from`` through ``to`` with growing angle, so that (350.0, 20.0) runs across
            zero. Both ends are angles of the table: nothing is read in between, and angles more
            than 15 degrees apart are not joined. The whole turn is (first, first + 360). A sensor
            that reads no speed has no sectors.

        Raises
        ------
        ob.InputError
            If the limit is not greater than zero.

        Examples
        --------
        >>> import offbody as ob
        >>> mast = ob.solve(ob.circle(0.3))
        >>> ob.survey(mast, ob.PointSensor(-1.8, 0.0)).sectors(0.01)
        [[(195.0, 165.0)]]
        """
        limit = as_number("limit", limit, positive=True)
        good = self.trust & (np.abs(self.speed_ratio - 1) <= limit)
        return [_runs(self.angles, column) for column in good.T]

    def worst(self):
        """Per sensor, the angle of its worst trusted speed ratio, and that ratio.

        Returns
        -------
        list of (angle, speed_ratio)
            The angle is the table's own (a bearing if it was asked for by bearings). A sensor
            with no trusted speed ratio has (nan, nan).

        Examples
        --------
        >>> import offbody as ob
        >>> mast = ob.solve(ob.circle(0.3))
        >>> [(angle, ratio)] = ob.survey(mast, ob.PointSensor(0.0, 1.5), range(0, 360, 30)).worst()
        >>> float(angle), round(ratio, 4)
        (0.0, 1.01)
        """
        deviation = np.where(self.trust, np.abs(self.speed_ratio - 1), np.nan)
        rows = np.where(np.isnan(deviation), -1.0, deviation).argmax(axis=0)
        return [
            (float(self.angles[row]), float(self.speed_ratio[row, place]))
            if np.isfinite(deviation[row, place])
            else (np.nan, np.nan)
            for place, row in enumerate(rows)
        ]

    def rows(self):
        """Yield one dict per direction and sensor, with the keys of ``columns``.

        Yields
        ------
        dict
            Plain Python numbers, booleans and texts; directions vary slowest.

        Examples
        --------
        >>> import offbody as ob
        >>> mast = ob.solve(ob.circle(0.3))
        >>> row = next(ob.survey(mast, ob.PointSensor(0.0, 1.5)).rows())
        >>> row["sensor"], row["trust"]
        ('point 1', True)
        """
        names = [name for name, _, _ in self.columns]
        tables = [self.speed_ratio, self.body_speed_ratio, self.boom_speed_ratio]
        tables += [self.direction_error, self.component_error, self.static_error]
        tables += [self.yaw, self.saturated, *np.moveaxis(self.speed_ratio_gradient, -1, 0)]
        tables += [self.numerical_error, self.in_wake, self.doubtful, self.trust, self.reason]
        angles = zip(self.directions.tolist(), self.bearings.tolist(), strict=True)
        tables = [table.tolist() for table in tables]
        for (direction, bearing), *lines in zip(angles, *tables, strict=True):
            for sensor, *values in zip(self.names, *lines, strict=True):
                yield dict(zip(names, (sensor, direction, bearing, *values), strict=True))

    @cached_property
    def _free_of_booms(self):
        """Velocity u + i v at every sample, (n, m), without the sensors' own booms."""
        return _as_complex(self.model.velocity(self._samples.points, self.directions))

    @cached_property
    def _velocity(self):
        """Velocity u + i v at every sample, (n, m)."""
        return self._past_booms(self._free_of_booms)

    @cached_property
    def _changes(self):
        """Change of it, (n, m), per unit of length along x and along y."""
        gradient = self.model.velocity_gradient(self._samples.points, self.directions)
        return [self._past_booms(_as_complex(gradient[..., axis])) for axis in (0, 1)]

    def _past_booms(self, change):
        """Velocities or their changes at the samples past the boom of each sensor."""
        if not any(self.booms):
            return change
        change = change.copy()
        for place, boom in enumerate(self.booms):
            if boom is not None:
                here = self._samples.owner == place
                change[:, here] = boom.passed(self._free_of_booms[:, here], change[:, here])
        return change

    @cached_property
    def _undisturbed(self):
        """Undisturbed u + i v at every sensor, (n, k); the onset is the same everywhere."""
        return _as_complex(self.model.undisturbed(self._samples.centres, self.directions))

    @cached_property
    def _sensed(self):
        """Sensed u + i v of every sensor, (n, k); for a path, its component along it."""
        return self._samples.read(self._velocity)

    @cached_property
    def _heading(self):
        """The vectors whose direction is sensed, u + i v, (n, k)."""
        return self._samples.read_heading(self._velocity)

    def _turn_from(self, axes):
        """Degrees by which the headings are turned from axes, (n, k) or (k,), signed as errors."""
        turn = self._heading * axes.conj()
        degrees = np.where(turn == 0, np.nan, np.angle(turn, deg=True))
        degrees = -degrees if self.by_bearing else degrees
        # A stream turned back is 180 degrees off, whichever way the rounding went.
        return np.where(degrees == -180, 180.0, degrees)

    @cached_property
    def _speed_axes(self):
        return self._axes_of(self._velocity)

    def _axes_of(self, velocity):
        """Along which vectors sensed, and their changes, are measured as speeds, (n, k)."""
        samples = self._samples
        axes = _unit(samples.read(velocity))
        paths = samples.are("path")
        if paths.any():
            along = samples.axes[paths]
            cosine = (_unit(self._undisturbed[:, paths]) * along.conj()).real
            cosine[np.abs(cosine) < SQUARE_TO_PATH] = np.nan
            # Its reading is compared with the undisturbed component, not with the whole speed.
            axes[:, paths] = along * (1 / cosine)
        return axes

    def _speed_of(self, change, velocity, axes):
        """Ratio to the undisturbed speed, (n, k), of the velocity at the samples or its change.

        NaN in the columns of sensors that read no speed.
        """
        samples = self._samples
        speed = (samples.read(change) * axes.conj()).real
        averaging = [s.kind != "port" and s.averages_speed for s in self.sensors]
        if any(averaging):
            mean = samples.weights * (change * _unit(velocity).conj()).real
            speed[:, averaging] = samples.gather(mean)[:, averaging]
        return self._where_read("speed", speed / np.abs(self._undisturbed))

    def _where_read(self, quantity, values):
        """The values, NaN in the columns of sensors that do not read the quantity."""
        unread = [sensor.reads not in ("both", quantity) for sensor in self.sensors]
        values[:, unread] = np.nan
        return values

    @cached_property
    def _incidence(self):
        """Angle between the stream and every body with a sharp edge, (bodies, n); else NaN."""
        angles = np.full((len(self.model.outlines), len(self.directions)), np.nan)
        for body, outline in enumerate(self.model.outlines):
            if outline.edge is not None:
                to_edge = _as_complex(self.model.edge_point(body) - self.model.walls[body])
                chord = to_edge[np.abs(to_edge).argmax()]
                turn = self.directions - np.angle(chord, deg=True)
                angles[body] = 180 - np.abs(within_turn(turn) - 180)
        return angles

    @cached_property
    def _astray(self):
        """Where the stream meets a sharp-edged body beyond the limit, (bodies, n)."""
        return self._incidence > INCIDENCE_LIMIT

    @cached_property
    def _separation(self):
        """Where the flow leaves the bodies by the march, or None."""
        if self._reynolds is None:
            return None
        return separation(self.model, self.directions, self._reynolds)

    @cached_property
    def _wakes(self):
        """Whether a sensor lies in the wake, or its margin, of each body, then of each bracing.

        (bodies + bracings, n, k).
        """
        samples, points = self._samples, self._samples.points
        codes = [self._codes(body) for body in range(len(self.model.outlines))]
        for bracing in self.model.bracings:
            codes.append(wake_codes(points, bracing.ends(self.directions), self.directions))
        codes = np.stack([samples.gather(one, np.maximum) for one in codes])
        for place, sensor in enumerate(self.sensors):
            if sensor.kind == "port":
                codes[sensor.body, self._in_lee(sensor), place] = IN_WAKE
        return codes

    def _codes(self, body):
        """The same at the sample points, of one body, (n, m)."""
        points = self._samples.points
        if self._separation is not None:
            return self._separation.codes(body, points)
        if self.model.outlines[body].edge is not None:
            return np.zeros((len(self.directions), len(points)), int)
        if self.model.wakes[body] is None:
            ends = self.model.widest(body, self.directions)
        else:
            ends = self.model.wake(body, self.directions).points
        return wake_codes(points, ends, self.directions)

    def _in_lee(self, port):
        """Where a port lies behind the separation that the wake of its body implies, (n,)."""
        if self.model.wakes[port.body] is None:
            return np.zeros(len(self.directions), bool)
        left, right = self.model.wake(port.body, self.directions).arc_fractions.T
        return (port.arc_fraction - right) % 1 < (left - right) % 1

    def _layers_at_ports(self):
        """Notes on the boundary layer at ports, which potential flow leaves out."""
        for place, sensor in enumerate(self.sensors):
            if sensor.kind == "port" and self._separation is not None:
                layer = self._separation.displacement_thickness(sensor.body, sensor.arc_fraction)
                layer = layer[self.trust[:, place] & np.isfinite(layer)]
                if layer.size:
                    yield (
                        f"The boundary layer at {self.names[place]} displaces the flow by up to "
                        f"{layer.max():.2g} (a length) where the port is trusted; its pressure is "
                        "that of the flow outside the layer, if the layer is thin against the "
                        "wall's curvature and the port flush."
                    )

    def _compressibility(self):
        """The note on a stream too fast to be taken as incompressible."""
        if self._mach is None or self._mach <= LOW_SPEED:
            return
        least = min(
            np.nanmin(self.model.surface(body, self.directions).pressure_coefficient)
            for body in range(len(self.model.outlines))
        )
        critical = critical_mach(least)
        yield (
            f"At Mach number {self._mach:.2g}, above {LOW_SPEED:g}, compressibility is not "
            "negligible: ob.compressible_pressure corrects pressure coefficients by Karman and "
            "Tsien's rule or Prandtl and Glauert's. The flow on a wall first turns sonic at "
            f"{critical:.2g} by the former"
            + ("; beyond it neither holds." if self._mach > critical else ".")
        )

    def _wake_left_out(self, body):
        """The note on a bluff body without a drag coefficient."""
        note = (
            f"No drag coefficient is given for body {body} ({self.model.outlines[body].name}): "
            "the wake's displacement is left out. "
        )
        standing = np.flatnonzero(~self._samples.are("port"))
        if standing.size:
            wall = self.model.walls[body]
            middle = (wall.min(axis=0) + wall.max(axis=0)) / 2
            distance = np.abs(_as_complex(self._samples.centres - middle))
            worst = standing[distance[standing].argmin()]
            breadth = np.max(self.model.breadth(body, self.directions))
            percent = 100 * breadth / (4 * np.pi * distance[worst])
            note += (
                f"For Cd = 1 it would slow the undisturbed flow at {self.names[worst]} by up to "
                f"{percent:.2g} percent (Cd b/(4 pi R), in an open stream); "
            )
        else:
            note += "As a guide to Cd: "
        return note + (
            "common practice: about 1.2 for a subcritical tube, 0.3 to 0.7 beyond the drag "
            "crisis, about 2 for a square."
        )


@dataclass(frozen=True, eq=False)
class _Samples:
    """The sample points of all sensors, end to end."""

    points: np.ndarray  # (m, 2)
    weights: np.ndarray  # (m,)
    readings: tuple  # (direct, turned) of speed and of direction, (m,) each
    owner: np.ndarray  # (m,) which sensor
    starts: np.ndarray  # (k,) first sample of each sensor
    centres: np.ndarray  # (k, 2)
    axes: np.ndarray  # (k,) complex, zero but for paths
    yaw_ranges: np.ndarray  # (k, 2) degrees, counter-clockwise
    kinds: tuple

    @classmethod
    def of(cls, model, sensors):
        # A port samples its place on the wall, for the lee; its pressure is the model's own.
        standing = [
            PointSensor(*_port_place(model, sensor)) if sensor.kind == "port" else sensor
            for sensor in sensors
        ]
        counts = [len(sensor.points) for sensor in standing]
        speed = [(sensor.direct, sensor.turned) for sensor in standing]
        direction = [
            reading if sensor.heading is None else (sensor.heading, 0.0 * sensor.heading)
            for sensor, reading in zip(standing, speed, strict=True)
        ]
        return cls(
            points=np.concatenate([sensor.points for sensor in standing]),
            weights=np.concatenate([sensor.weights for sensor in standing]),
            readings=tuple(
                tuple(np.concatenate(part) for part in zip(*reading, strict=True))
                for reading in (speed, direction)
            ),
            owner=np.repeat(np.arange(len(sensors)), counts),
            starts=np.cumsum([0, *counts[:-1]]),
            centres=np.array([sensor.centre for sensor in standing]),
            axes=np.array([s.axis if s.kind == "path" else 0j for s in standing]),
            yaw_ranges=np.array([sensor.yaw_range for sensor in standing]),
            kinds=tuple(sensor.kind for sensor in sensors),
        )

    def gather(self, values, operation=np.add):
        """Values at the samples, (n, m, ...), joined to one per sensor, (n, k, ...)."""
        return operation.reduceat(values, self.starts, axis=1)

    def read(self, velocity):
        """Vectors sensed, (n, k), of velocities (or their changes) at the samples, (n, m)."""
        return self._read(velocity, *self.readings[0])

    def read_heading(self, velocity):
        """The same of the vectors whose direction is sensed."""
        return self._read(velocity, *self.readings[1])

    def _read(self, velocity, direct, turned):
        return self.gather(direct * velocity + turned * velocity.conj())

    def are(self, kind):
        """Which sensors are of a kind, (k,) bool."""
        return np.array([one == kind for one in self.kinds])


def _as_sensors(sensors):
    """The sensors as a tuple, or an InputError."""
    known = ", ".join(kind.__name__ for kind in SENSORS)
    if isinstance(sensors, SENSORS):
        return (sensors,)
    if not isinstance(sensors, list | tuple):
        raise InputError(f"sensors must be a list of sensors ({known}), got {sensors!r}")
    if not sensors:
        raise InputError(f"sensors is empty: give at least one of {known}")
    for place, sensor in enumerate(sensors):
        if not isinstance(sensor, SENSORS):
            raise InputError(f"sensors[{place}] must be one of {known}, got {sensor!r}")
    return tuple(sensors)


def _names(sensors):
    """One name per sensor, all different, or an InputError."""
    names = tuple(
        sensor.name if sensor.name is not None else f"{sensor.kind} {place}"
        for place, sensor in enumerate(sensors, start=1)
    )
    for place, name in enumerate(names):
        if name in names[:place]:
            first = names.index(name)
            raise InputError(
                f"sensors[{first}] and sensors[{place}] are both named {name!r}: give each sensor "
                "a name of its own"
            )
    return names


def _as_booms(booms, sensors):
    """One boom or None per sensor, or an InputError."""
    if not isinstance(booms, list | tuple):
        booms = [booms] * len(sensors)
    if len(booms) != len(sensors):
        raise InputError(
            f"booms has {len(booms)} entries for {len(sensors)} sensors; give one, or None, for "
            "each"
        )
    for place, (boom, sensor) in enumerate(zip(booms, sensors, strict=True)):
        if boom is not None and not isinstance(boom, Boom):
            raise InputError(f"booms[{place}] must be an ob.Boom or None, got {boom!r}")
        if boom is not None and sensor.kind == "port":
            raise InputError(f"booms[{place}] is given for a port, which stands on none: give None")
    return tuple(booms)


def _as_angles(model, directions, bearings):
    """The table's own angles, and whether they are bearings."""
    if directions is not None and bearings is not None:
        raise InputError(
            "directions and bearings are both given: give directions (where the stream goes to) "
            "or bearings (where the wind comes from), not both"
        )
    if directions is None and bearings is None:
        return usual_directions(model.surroundings), False
    name, given = ("directions", directions) if bearings is None else ("bearings", bearings)
    angles = np.atleast_1d(as_directions(name, given))
    if angles.size == 0:
        raise InputError(f"{name} is empty: give at least one angle, or leave it out")
    angles.setflags(write=False)
    return angles, bearings is not None


def _port_place(model, port):
    """The point of the wall, (2,), at which a port is."""
    outline = model.outlines[as_body("WallPort body", port.body, len(model.outlines))]
    wall = Arcs(outline)
    arc = (wall.start + port.arc_fraction * wall.length) % wall.length
    (place,) = outline.position(wall.parameter(np.array([arc])))
    return place.real, place.imag


def _check_between_walls(table):
    """Refuse a sensor that reaches beyond a plane wall, where there is no flow."""
    samples, surroundings = table._samples, table.model.surroundings
    for sample in np.flatnonzero(~holds(surroundings, _as_complex(samples.points))):
        place = samples.owner[sample]
        raise InputError(
            f"sensors[{place}] ({table.names[place]}, {table.sensors[place]!r}) reaches beyond "
            f"the wall of {surroundings!r}: move it into the flow"
        )


def _check_clear_of_bodies(table):
    """Refuse a sensor that a body encloses or meets: it could never read."""
    model, samples = table.model, table._samples
    walls = [_as_complex(wall) for wall in model.walls]
    enclosed = np.flatnonzero(np.isnan(table._velocity[0]))
    for place, sensor in enumerate(table.sensors):
        if sensor.kind == "port":
            continue
        bodies = [body for body, wall in enumerate(walls) if sensor.meets(wall)]
        caught = _as_complex(samples.points[enclosed[samples.owner[enclosed] == place]])
        if caught.size and not bodies:
            # No way out of a body but through its own wall: that wall is the nearest.
            bodies = [np.argmin([np.abs(wall - caught[0]).min() for wall in walls])]
        if bodies:
            raise InputError(
                f"sensors[{place}] ({table.names[place]}, {sensor!r}) lies inside or across body "
                f"{bodies[0]} ({model.outlines[bodies[0]].name}) and could never read: move it "
                "clear of the body"
            )


def _as_complex(vectors):
    return np.ascontiguousarray(vectors).view(complex)[..., 0]


def _unit(vectors):
    """Complex vectors divided by their lengths; NaN for none, as at a stagnation point."""
    with np.errstate(invalid="ignore"):
        return vectors / np.abs(vectors)


def _astray_reason(body, incidence):
    meets = f"body {body} (sharp edge) meets the stream"
    if incidence > FROM_BEHIND:
        return f"{meets} from behind"
    return f"{meets} at {incidence:.0f} degrees"


def _runs(angles, good):
    """Sectors of neighbouring angles that are good, as (from, to) within the whole turn."""
    turned = within_turn(angles)
    order = np.argsort(turned, kind="stable")
    turned, good = turned[order], good[order]
    steps = np.diff(turned, append=turned[0] + 360)
    joined = good & np.roll(good, -1) & (steps <= WIDEST_STEP)
    if joined.all():
        return [(float(turned[0]), float(turned[0] + 360))]
    first = np.flatnonzero(good & ~np.roll(joined, 1))
    last = np.flatnonzero(good & ~joined)
    if first.size and last[0] < first[0]:
        last = np.roll(last, -1)  # the sector that runs across zero ends first and starts last
    return list(zip(turned[first].tolist(), turned[last].tolist(), strict=True))
