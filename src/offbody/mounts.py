"""Where to mount sensors: every place of a grid is looked at, and the best are refined.

A search runs in three steps. The scan reads all places of a grid, all winds at once, and rates
every set of one, two or three of them. The same table, each error lowered by what its slope could
take off within half a step, is rated again: what even that cannot reach is excluded, so the best of
it bounds what a finer search could find. The best few of the scan are then refined by sequential
quadratic programming with the exact gradients of the flow. For booms the second scan is laid
between that bound and the first scan's best.

An error is the departure of the speed ratio from 1; an error of direction counts as the share of
its own limit that it takes, times the limit of the speed.
"""

import itertools
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property

import numpy as np
from scipy.optimize import brentq, minimize, minimize_scalar
from scipy.spatial import cKDTree

from offbody.bearings import from_bearing, to_bearing, within_turn
from offbody.checks import (
    as_body,
    as_count,
    as_directions,
    as_number,
    as_point,
    as_reals,
    nearest_name,
)
from offbody.errors import InputError
from offbody.model import inside
from offbody.outlines import Outline
from offbody.sensors import SENSORS, PointSensor, WallPort
from offbody.surroundings import holds, usual_directions
from offbody.surveys import survey

# IEC 61400-12-1 (from memory): greatest distortion of the speed by what stands beside the sensor.
LIMITS = {"mast": 0.01, "boom": 0.005}
DIRECTION_LIMIT = 1.0  # degrees; a rule of this project, for sensors that read no speed

RINGS = 24  # lengths of a scan,
FINE_RINGS = 10  # and of the second one
TRIAL_LENGTHS = 100  # among which the shortest that stands clear is sought
AROUND = {1: 120, 2: 90, 3: 36}  # angles of a scan, for one boom or for sets of two or three
LEAST_AROUND = 36
GRID = {1: 2500, 2: 350, 3: 70}  # places of a scan in an area
DISTINCT = 12.0  # degrees between booms that count as another choice
DISTINCT_SHARE = 0.1  # the same in an area, of its size
READINGS_AT_ONCE = 1_500_000  # winds times sample points
PAIRS_AT_ONCE = 2_000_000  # winds times sets of places
WITHIN = 1 + 1e-6  # times a limit: the refinement rests on the limit to rounding
OFF_WALL = 1e-6  # of the region's size: a sensor stands clear of walls
TURN_STEP = 0.05  # degrees, for slopes of a pressure against the wind
MOST_EXCHANGES = 6


@dataclass(frozen=True)
class Reach:
    """Where booms of one length, from one foot, may reach: a region for ``ob.best_mounts``.

    Parameters
    ----------
    greatest : float
        Greatest length, from the foot, in the caller's unit.
    foot : array_like of shape (2,)
        Where booms count from, such as the axis of a mast.
    sector : (from, to), optional
        Where booms may point, degrees and with growing angle: bearings if the winds are given as
        bearings, else directions. (225, 225) is one angle. None: all round.
    least : float
        Least length.

    Raises
    ------
    ob.InputError
        If the lengths do not grow, or an argument is no number.

    Examples
    --------
    >>> import offbody as ob
    >>> ob.Reach(3.0, sector=(170, 280))
    Reach(greatest=3.0, foot=(0.0, 0.0), sector=(170.0, 280.0), least=0.0)
    """

    greatest: float
    foot: tuple[float, float] = (0.0, 0.0)
    sector: tuple[float, float] | None = None
    least: float = 0.0

    def __post_init__(self):
        greatest = as_number("greatest", self.greatest, positive=True)
        least = as_number("least", self.least, least=0.0)
        if least > greatest:
            raise InputError(f"least = {least:g} is more than greatest = {greatest:g}: swap them")
        foot = tuple(as_point("foot", self.foot).tolist())
        sector = self.sector
        if sector is not None:
            sector = tuple(as_reals("sector", sector).tolist())
            if len(sector) != 2:
                raise InputError(f"sector must be (from, to) in degrees, got {self.sector!r}")
        for name, value in (
            ("greatest", greatest), ("foot", foot), ("sector", sector), ("least", least),
        ):
            object.__setattr__(self, name, value)


@dataclass(frozen=True)
class Stretch:
    """A stretch of a body's surface for ports: a region for ``ob.best_mounts``.

    Parameters
    ----------
    body : int
        Which body of the model.
    first, last : float
        Arc fractions as ``ob.WallPort`` counts them, counter-clockwise from first to last; a first
        greater than the last runs across the outline's first point.

    Raises
    ------
    ob.InputError
        If a fraction lies outside 0 to 1.

    Examples
    --------
    >>> import offbody as ob
    >>> ob.Stretch(0, 0.4, 0.6)
    Stretch(body=0, first=0.4, last=0.6)
    """

    body: int = 0
    first: float = 0.0
    last: float = 1.0

    def __post_init__(self):
        for name in ("first", "last"):
            number = as_number(name, getattr(self, name), least=0.0, greatest=1.0)
            object.__setattr__(self, name, number)

    def holds(self, fractions):
        """Whether arc fractions lie on the stretch."""
        if self.first <= self.last:
            return (fractions >= self.first) & (fractions <= self.last)
        return (fractions >= self.first) | (fractions <= self.last)


def best_mounts(
    model, where, sensors=None, *, count=1, directions=None, bearings=None, weights=None,
    limit="mast", direction_limit=None, keep_out=(), spacing=0.0, clearance=0.0, reynolds=None,
    choices=3,
):
    """The best places for sensors under limits, and how sure it is that there are none better.

    Parameters
    ----------
    model : Model
        What ``ob.solve`` returned.
    where : Reach, Outline or Stretch
        Booms from one foot; an area within an outline; or a stretch of wall, for ports.
    sensors : sensor or sequence of sensors, optional
        What each mount carries, all of it together: the place (0, 0) is the end of the boom, or
        the place in the area. A sensor moves with its mount and does not turn. None: a point that
        reads the speed. None in a stretch of wall, where ports stand.
    count : int
        How many mounts share the work: in every wind one of them must do. For ports: 1 seeks the
        static port that stays nearest the undisturbed pressure, 2 the pair whose pressure
        difference turns fastest with the wind.
    directions, bearings : array_like of shape (n,), optional
        The winds that must be served, as in ``ob.survey``. None: all.
    weights : mapping of angle to frequency, optional
        The wind climate, by the middles of its sectors, in the convention of the winds; winds
        share evenly what their nearest sector has, and those of frequency zero need not be served.
        None: all winds alike.
    limit : {"mast", "boom"} or float
        Greatest error of the speed ratio: "mast" 0.01 and "boom" 0.005 are those of IEC 61400-12-1
        (from memory) for the distortion by the mast and by the boom. For a static port, of the
        pressure coefficient.
    direction_limit : float, optional
        Greatest error of direction, degrees. None: not looked at; 1 where no sensor reads speed.
    keep_out : sequence of Outline
        Where no sensor may stand.
    spacing : float
        Least distance between mounts, in the caller's unit.
    clearance : float
        Least distance between a mount and any wall.
    reynolds : float or sequence, optional
        As ``ob.survey`` takes it.
    choices : int
        How many to return.

    Returns
    -------
    Mounts

    Raises
    ------
    ob.InputError
        If an argument cannot be used, or no place in the region is allowed.

    Notes
    -----
    Booms: first the shortest with which every wind has a trusted sensor within the limit. If none
    will do, the least worst error with all winds trusted; failing that, the greatest share of the
    wind. Areas: the same without the length. ``Mounts.notes`` says which it came to. Trust is that
    of ``ob.survey``.

    Beside the standard's own figures for a tube (IEC 61400-12-1, from memory: 6.1 diameters for 1
    percent, 8.2 for 0.5) the booms found are shorter without a wake (5.0 and 7.1), about equal with
    a drag coefficient of 0.3 (6.3 and 10), and longer with 1.2 (11.7 and 21).

    References
    ----------
    D. Kraft, DFVLR-FB 88-28 (1988), for sequential quadratic programming.

    Examples
    --------
    >>> import offbody as ob
    >>> mast = ob.solve(ob.circle(0.3))
    >>> found = ob.best_mounts(mast, ob.Reach(3.0), directions=range(-45, 46, 3))
    >>> round(found.best.length, 3)                 # five diameters
    1.5
    >>> port = ob.best_mounts(mast, ob.Stretch(0), directions=[0.0]).best
    >>> port.arc_fractions.round(4)                 # 30 degrees off the front, at one half
    array([0.5833])
    """
    if not hasattr(model, "velocity_gradient"):
        raise InputError(f"model must be what ob.solve returned, got {model!r}")
    count = as_count("count", count, least=1, greatest=3)
    choices = as_count("choices", choices, least=1)
    angles, by_bearing = _as_winds(model, directions, bearings)
    weights = _as_weights(angles, weights)
    angles, weights = angles[weights > 0], weights[weights > 0]
    asked = _Asked(model, angles, by_bearing, weights, count, choices, reynolds)
    if isinstance(where, Stretch):
        if sensors is not None:
            raise InputError("sensors: a stretch of wall takes ports, and nothing else; leave out")
        return _Ports(asked, where, _as_limit(limit)).found()
    site = _Site(
        asked,
        _as_carried(sensors),
        _as_limit(limit),
        direction_limit,
        _as_keep_out(keep_out),
        as_number("spacing", spacing, least=0.0),
        as_number("clearance", clearance, least=0.0),
    )
    if isinstance(where, Reach):
        return _BoomSearch(site, where).found()
    if isinstance(where, Outline):
        return _AreaSearch(site, where).found()
    raise InputError(f"where must be ob.Reach, an outline or ob.Stretch, got {where!r}")


# --- what comes back ------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class Search:
    """How a search went, and what it excludes.

    Attributes
    ----------
    quantity : str
        What was made as small or as large as possible: "length", "worst error", "share",
        "worst pressure" or "sensitivity".
    places, sets : int
        How many places were read, and how many sets of them were rated.
    step : tuple of float
        Of the first scan: of the length where it is largest, and of the angle, degrees; or along x
        and y; or the largest along the wall.
    scan_best, refined : float
        The quantity of the scan's best and after refinement.
    bound : float
        What no finer search could pass, by the slopes at the scan's places: an error changes by no
        more, from a place to half a step off, than the greatest slope there and at its neighbours
        says.
    """

    quantity: str
    places: int
    sets: int
    step: tuple
    scan_best: float
    refined: float
    bound: float

    @property
    def gap(self):
        """Relative distance between what was found and the bound."""
        return abs(self.refined - self.bound) / max(abs(self.refined), 1e-12)


@dataclass(frozen=True, eq=False)
class Mount:
    """One choice: places for sensors, and how good they are.

    Attributes
    ----------
    sensors : tuple of sensors
        In their places, ready for ``ob.survey``.
    places : (k, 2) array
        Of the mounts.
    angles : (k,) array or None
        Where the booms point, in the convention of the winds.
    length : float or None
        Of the booms, from their foot.
    error : (n,) array
        In each wind, of the mount that reads it best; infinite where none is trusted.
    serves : (n,) int array
        Which mount that is; -1 for none.
    worst_error, worst_angle : float
        The greatest error, and the wind where it is.
    mean_error : float
        Mean over the climate, an untrusted wind counting as 1.
    share : float
        Of the climate, within the limit.
    margin : float
        The limit less the worst error.
    wall_distance, spacing : float
        Between the mounts and the nearest wall; between the nearest two of them (infinite for one).
    error_per_length, error_per_degree : float
        How fast an error within the limit can change as the boom grows, or turns; in an area per
        length moved, and NaN.
    """

    sensors: tuple
    places: np.ndarray
    angles: np.ndarray | None
    length: float | None
    error: np.ndarray = field(repr=False)
    serves: np.ndarray = field(repr=False)
    worst_error: float
    worst_angle: float
    mean_error: float
    share: float
    margin: float
    wall_distance: float
    spacing: float
    error_per_length: float
    error_per_degree: float

    def row(self):
        """What a table of choices holds of this one: a dict of plain numbers and texts."""
        places = {
            f"{name}_{number}": float(value)
            for number, place in enumerate(self.places, start=1)
            for name, value in zip("xy", place, strict=True)
        }
        angles = () if self.angles is None else enumerate(self.angles.tolist(), start=1)
        return {
            "length": np.nan if self.length is None else self.length,
            **{f"angle_{number}": angle for number, angle in angles},
            **places,
            **{name: getattr(self, name) for name in (
                "worst_error", "worst_angle", "mean_error", "share", "margin", "wall_distance",
                "spacing", "error_per_length", "error_per_degree",
            )},
        }


@dataclass(frozen=True, eq=False)
class PortMount:
    """One choice of a static port, or of a pair of ports.

    Attributes
    ----------
    sensors : tuple of WallPort
    arc_fractions : (k,) array
    places : (k, 2) array
    pressure : (n,) array
        Pressure coefficient in each wind; of a pair, the first less the second.
    worst_pressure : float
        Its greatest size.
    slope : float
        Per degree of wind direction, counter-clockwise: of a static port the greatest size over the
        winds, of a pair the least. NaN where the surroundings admit no other wind.
    saturates : (low, high)
        Of a pair: between which winds, about the middle one, the difference grows all the way and
        both ports are trusted; in the convention of the winds, with growing angle.
    because : (str, str)
        What ends it on either side: "the slope turns" or "trust ends".
    margin : float
        Of a static port, the limit less the worst pressure.
    """

    sensors: tuple
    arc_fractions: np.ndarray
    places: np.ndarray
    pressure: np.ndarray = field(repr=False)
    worst_pressure: float
    slope: float
    saturates: tuple
    because: tuple
    margin: float

    def row(self):
        """What a table of choices holds of this one: a dict of plain numbers and texts."""
        ports = {
            f"{name}_{number}": float(value)
            for number, port in enumerate(zip(self.arc_fractions, *self.places.T, strict=True), 1)
            for name, value in zip(("arc_fraction", "x", "y"), port, strict=True)
        }
        return ports | {
            "worst_pressure": self.worst_pressure, "slope": self.slope, "margin": self.margin,
            "saturates_from": self.saturates[0], "saturates_to": self.saturates[1],
            "because_from": self.because[0], "because_to": self.because[1],
        }


@dataclass(frozen=True, eq=False, repr=False)
class Mounts:
    """What ``ob.best_mounts`` found.

    Attributes
    ----------
    model : Model
    where : Reach, Outline or Stretch
    choices : tuple of Mount or PortMount
        The best first.
    angles : (n,) array
        The winds that were asked for and have a frequency.
    by_bearing : bool
        Whether they, and the angles of booms, are bearings.
    weights : (n,) array
        Their frequencies; they sum to 1.
    limit : float
    curve : dict of arrays, or None
        For booms, the trade-off: "length", the least "worst_error" of any set of that length at
        the scan's angles (infinite where none is trusted in every wind), and the greatest "share"
        of the wind within the limit.
    search : Search
        What was looked at, and what that excludes.
    notes : tuple of str
        What the reader must know.
    """

    model: object
    where: object
    choices: tuple
    angles: np.ndarray
    by_bearing: bool
    weights: np.ndarray
    limit: float
    curve: dict | None
    search: Search
    notes: tuple

    def __repr__(self):
        return f"Mounts({len(self.choices)} choices, {self.search.quantity} " \
               f"{self.search.refined:.4g}, none beyond {self.search.bound:.4g})"

    @property
    def best(self):
        """The first choice."""
        return self.choices[0]

    def survey(self, choice=0, **angles):
        """The ``ob.Survey`` of one choice, for the winds asked for or for others."""
        if not angles:
            angles = {"bearings" if self.by_bearing else "directions": self.angles}
        return survey(self.model, list(self.choices[choice].sensors), **angles)

    def rows(self):
        """One dict per choice, numbered from 1, with the same keys for each."""
        return [{"choice": n, **one.row()} for n, one in enumerate(self.choices, start=1)]


# --- what was asked -------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class _Asked:
    """The winds, and how many mounts and choices."""

    model: object
    angles: np.ndarray
    by_bearing: bool
    weights: np.ndarray
    count: int
    choices: int
    reynolds: object

    @cached_property
    def directions(self):
        return np.atleast_1d(from_bearing(self.angles) if self.by_bearing else self.angles)

    def heading(self, angles):
        """Headings in radians, from +x, of angles in the caller's convention, and back."""
        return np.radians(90.0 - angles if self.by_bearing else angles)

    def angle(self, headings):
        """Angles within a turn, in the caller's convention, of headings in radians."""
        degrees = np.degrees(headings)
        return within_turn(90.0 - degrees if self.by_bearing else degrees)

    def result(self, where, chosen, limit, curve, search, notes):
        return Mounts(
            self.model, where, tuple(chosen), self.angles, self.by_bearing, self.weights, limit,
            curve, search, tuple(notes),
        )


@dataclass(frozen=True, eq=False)
class _Site:
    """What stands where: the errors of what a mount carries, at any place."""

    asked: _Asked
    carried: tuple
    limit: float
    direction_limit: float | None
    keep_out: tuple
    spacing: float
    clearance: float

    def __post_init__(self):
        given = self.direction_limit
        if given is not None:
            given = as_number("direction_limit", given, positive=True)
        elif not any(sensor.reads in ("speed", "both") for sensor in self.carried):
            given = DIRECTION_LIMIT
        object.__setattr__(self, "direction_limit", given)
        if not self._parts:
            raise InputError(
                "sensors: none of them reads speed, or direction beside a direction_limit: there "
                "is no error to keep small"
            )

    @cached_property
    def _parts(self):
        """(which sensor, quantity) of every error that counts."""
        wanted = ["speed"] if self.direction_limit is None else ["speed", "direction"]
        return [
            (place, quantity)
            for place, sensor in enumerate(self.carried)
            for quantity in wanted
            if sensor.reads in ("both", quantity)
        ]

    @cached_property
    def _walls(self):
        model = self.asked.model
        return cKDTree(np.concatenate([outline.points(4000) for outline in model.outlines]))

    def wall_distance(self, z):
        """(m,) distance of places from the nearest wall of a body or of the surroundings."""
        home = self.asked.model._home(z)
        distance = self._walls.query(_pairs(home))[0]
        for wall in self.asked.model.surroundings.walls:
            distance = np.minimum(distance, np.abs(z.imag - wall))
        return distance

    def clear(self, z, room):
        """(m,) whether a mount may stand there: in the flow, off walls, out of keep-out areas."""
        model = self.asked.model
        offsets = np.concatenate([sensor.points for sensor in self.carried]) @ [1, 1j]
        points = z[:, None] + offsets
        blocked = inside(model, _pairs(points)) | ~holds(model.surroundings, points)
        for outline in self.keep_out:
            blocked |= inside(outline, _pairs(points))
        clear = ~blocked.any(axis=1) & (self.wall_distance(z) >= max(self.clearance, room))
        walls = [wall @ [1, 1j] for wall in model.walls]
        for sensor in self.carried:
            if len(sensor.points) > 1:
                for place in np.flatnonzero(clear):
                    here = sensor.moved(z[place].real, z[place].imag)
                    clear[place] = not any(here.meets(wall) for wall in walls)
        return clear

    def sensors(self, z):
        """What the mounts at z carry, end to end, without names."""
        return [sensor.moved(*place) for place in _pairs(z) for sensor in self._nameless]

    @cached_property
    def _nameless(self):
        return tuple(replace(sensor, name=None) for sensor in self.carried)

    @cached_property
    def _lighter(self):
        """What a scan reads in place of discs, and the shares (s, k) in which it is averaged.

        Four points at the root of a half of the radius: exact for a speed of third degree.
        """
        points, shares = [], np.zeros((0, len(self.carried)))
        for place, sensor in enumerate(self._nameless):
            own = [sensor]
            if sensor.kind == "disc":
                ring = sensor.radius * np.sqrt(0.5) * np.array([1, 1j, -1, -1j])
                middle = _pairs(ring) + sensor.centre
                own = [PointSensor(*point, reads=sensor.reads) for point in middle]
            points += own
            share = np.eye(len(self.carried))[[place] * len(own)] / len(own)
            shares = np.concatenate([shares, share])
        return tuple(points), shares

    @property
    def samples(self):
        """How many points a scan reads at a place."""
        return sum(len(sensor.points) for sensor in self._lighter[0])

    def read(self, z, directions, slopes=True, trust=True, exactly=True):
        """Errors (q, n, m) of every part, with signs; their slopes (q, n, m, 2); trust (n, m).

        If not exactly, as a scan does.
        """
        carried, shares = self._lighter
        if exactly:
            carried, shares = self._nameless, np.eye(len(self.carried))
        samples = sum(len(sensor.points) for sensor in carried)
        at_once = max(1, READINGS_AT_ONCE // (len(directions) * samples))
        errors = np.empty((len(self._parts), len(directions), len(z)))
        gradients = np.empty((*errors.shape, 2)) if slopes else None
        trusted = np.ones(errors.shape[1:], bool)
        for first in range(0, len(z), at_once):
            part = slice(first, first + at_once)
            places = _pairs(z[part])
            table = survey(
                self.asked.model,
                [sensor.moved(*place) for place in places for sensor in carried],
                directions,
                reynolds=self.asked.reynolds if trust else None,
            )
            shape = (len(directions), len(places), len(carried))
            if trust:
                trusted[:, part] = table.trust.reshape(shape).all(axis=2)
            for row, (sensor, quantity) in enumerate(self._parts):
                mine = np.flatnonzero(shares[:, sensor])
                share = shares[mine, sensor]
                column, slope, scale = (
                    (table.speed_ratio - 1, "speed_ratio_gradient", 1.0)
                    if quantity == "speed" else
                    (table.direction_error, "direction_error_gradient",
                     self.limit / self.direction_limit)
                )
                errors[row, :, part] = scale * column.reshape(shape)[..., mine] @ share
                if slopes:
                    values = getattr(table, slope).reshape(*shape, 2)[:, :, mine]
                    gradients[row, :, part] = scale * np.einsum("nmsa,s->nma", values, share)
        return errors, gradients, trusted

    def errors(self, z):
        """(n, m) errors of the places alone: the greatest of the parts, infinite without trust."""
        errors, _, trust = self.read(z, self.asked.directions, slopes=False)
        return _greatest(errors, trust)


def _greatest(errors, trust):
    """(n, m) greatest of the parts' errors; infinite where one has no meaning or no trust."""
    greatest = np.abs(errors).max(axis=0)
    return np.where(trust & np.isfinite(greatest), greatest, np.inf)


# --- the scan -------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class _Ratings:
    """How good sets of places are, (t,) each; ``sets`` (t, k) are indices of the scan's places."""

    sets: np.ndarray
    worst: np.ndarray
    share: np.ndarray
    mean: np.ndarray

    @classmethod
    def of(cls, errors, weights, limit, sets):
        """Of the errors (m, n) of places, taking the best place of a set in each wind."""
        worst, share, mean = np.empty((3, len(sets)))
        at_once = max(1, PAIRS_AT_ONCE // errors.shape[1])
        for first in range(0, len(sets), at_once):
            part = slice(first, first + at_once)
            least = errors[sets[part, 0]]
            for member in sets[part, 1:].T:
                np.minimum(least, errors[member], out=least)
            worst[part] = least.max(axis=1)
            share[part] = (least <= limit * WITHIN) @ weights
            mean[part] = np.minimum(least, 1.0) @ weights
        return cls(sets, worst, share, mean)

    def keys(self, limit, lengths=None):
        """(t, 3) what to sort sets by, the best first; see the notes of ``best_mounts``."""
        worst, share = self.worst, self.share
        level = np.where(worst <= limit * WITHIN, 0, np.where(np.isfinite(worst), 1, 2))
        first = np.where(level == 2, -share, worst)
        second = np.where(level == 2, self.mean, 0.0)
        if lengths is not None:
            first = np.where(level == 0, lengths, first)
            some = (level == 2) & (share > 0)
            second = np.where(level == 0, worst, np.where(some, lengths, self.mean))
        # Mirror images are equal but for rounding.
        return np.stack([level, first.round(12), second.round(12)], axis=1)


class _Scan:
    """The errors at the places of a grid (rows, columns), and what lies between them.

    half_steps (rows, columns, 2) are complex displacements: half a step along either axis.
    """

    def __init__(self, site, places, half_steps, wraps, room):
        self.site, self.shape, self.wraps = site, places.shape, wraps
        self.places = places.ravel()
        self.clear = site.clear(self.places, room)
        readings = site.read(self.places[self.clear], site.asked.directions, exactly=False)
        self.errors = self._spread(_greatest(readings[0], readings[2]), np.inf).T
        self.hopes = self._hopes(readings, half_steps.reshape(-1, 2))

    def _spread(self, values, empty):
        full = np.full((len(values), len(self.places)), empty)
        full[:, self.clear] = values
        return full

    def _around(self, values, operation):
        """(n, m) values joined with those of the eight neighbours of every place."""
        grid = values.reshape(-1, *self.shape)
        for axis in (1, 2):
            ahead, behind = (np.roll(grid, step, axis) for step in (1, -1))
            if not (axis == 2 and self.wraps):
                np.moveaxis(ahead, axis, 0)[0] = np.moveaxis(grid, axis, 0)[0]
                np.moveaxis(behind, axis, 0)[-1] = np.moveaxis(grid, axis, 0)[-1]
            grid = operation(operation(grid, ahead), behind)
        return grid.reshape(len(values), -1)

    def _hopes(self, readings, half_steps):
        """(m, n) the least that the errors could be within half a step of every place."""
        errors, slopes, trust = readings
        steps = np.stack([half_steps.real, half_steps.imag], axis=-1)[self.clear]
        hopes = None
        for part, slope in zip(np.abs(errors), slopes, strict=True):
            change = np.abs(np.einsum("nma,msa->snm", slope, steps)).sum(axis=0)
            change = self._around(self._spread(np.nan_to_num(change), 0.0), np.maximum)
            value = self._spread(part, np.nan)
            # Beside a place that is not allowed, half a step may lead to one that is.
            beside = self._around(value - change, np.fmin)
            value = np.maximum(np.where(np.isnan(value), beside, value) - change, 0.0)
            hopes = value if hopes is None else np.fmax(hopes, value)
        trusted = self._around(self._spread(trust, False).astype(bool), np.logical_or)
        return np.where(trusted & np.isfinite(hopes), hopes, np.inf).T

    @cached_property
    def allowed(self):
        """Whether a place is allowed, or one beside it."""
        return self._around(self.clear[None], np.logical_or)[0]

    def rate(self, errors, sets):
        """Ratings of sets by the errors, or by the hopes."""
        asked = self.site.asked
        return _Ratings.of(errors, asked.weights, self.site.limit, sets)


def _sets(places, allowed, count, spacing, room):
    """(t, count) indices of the places allowed, as sets no closer together than the spacing."""
    indices = np.flatnonzero(allowed)
    if count == 1:
        return indices[:, None]
    pairs = itertools.combinations(indices.tolist(), count)
    sets = np.array(list(pairs), dtype=np.intp).reshape(-1, count)
    for one, other in itertools.combinations(range(count), 2):
        apart = np.abs(places[sets[:, one]] - places[sets[:, other]])
        sets = sets[apart >= spacing - room]
    return sets


class _Search:
    """What searches over booms and over an area share: ratings, refinement, and the result."""

    def __init__(self, site, where):
        self.site, self.where = site, where

    def _scanned(self, scan):
        """Sets of a scan with their ratings, and the ratings of what lies within half a step."""
        count, spacing = self.site.asked.count, self.site.spacing
        found, hoped = [], []
        for ring in self._rings(scan):
            for allowed, errors, room, rated in (
                (scan.clear, scan.errors, 0.0, found),
                (scan.allowed, scan.hopes, self._room(scan, ring), hoped),
            ):
                here = np.zeros(len(scan.places), bool)
                here[ring] = allowed[ring]
                rated.append(scan.rate(errors, _sets(scan.places, here, count, spacing, room)))
        return _joined(found), _joined(hoped)

    def _refined(self, variables, steps):
        """The variables of a set, refined; as they were if that made it no better."""
        start = self._judged(variables)
        served = start.error <= self.site.limit * WITHIN
        by_length = start.key[0] != 1 and self._has_length
        if not served.any():
            return start
        if start.key[0] == 1:
            served = np.ones(len(served), bool)
        moved_to = _Refinement(self, variables, steps, start, served, by_length).run()
        for share in (1.0, 0.5, 0.25, 0.1, 0.03):
            # The way there may leave the limits of trust: go as far as it does not.
            tried = self._judged(variables + share * (moved_to - variables))
            if tried is not None and tried.key < start.key:
                return tried
        return start

    def _judged(self, variables):
        """The judgement of one set, or None where it may not stand."""
        site, z = self.site, self.place(variables)
        tolerance = 0.5 * self.room
        if not site.clear(z, self.room - tolerance).all() or self._apart(z) < site.spacing - (
            tolerance
        ):
            return None
        errors = site.errors(z)
        sets = np.arange(len(z))[None]
        ratings = _Ratings.of(errors.T, site.asked.weights, site.limit, sets)
        lengths = self.lengths(variables)
        key = tuple(ratings.keys(site.limit, lengths)[0].tolist())
        return _Judged(
            variables, z, errors, errors.min(axis=1), errors.argmin(axis=1), ratings, key
        )

    @staticmethod
    def _apart(z):
        """Least distance between two places; infinite for one."""
        pairs = itertools.combinations(z, 2)
        return min((abs(one - other) for one, other in pairs), default=np.inf)

    def _distinct(self, scan, ratings, lengths, taken):
        """The best sets of a scan that differ from each other and from those taken."""
        order = np.lexsort(ratings.keys(self.site.limit, lengths).T[::-1])
        places = scan.places[ratings.sets[order]]
        left = np.ones(len(order), bool)
        for z in taken:
            left &= self._differs(places, z)
        while len(taken) < self.site.asked.choices and left.any():
            first = int(left.argmax())
            taken.append(places[first])
            yield ratings.sets[order[first]]
            left &= self._differs(places, places[first])

    def _mount(self, judged):
        """The Mount of a judged set."""
        site, asked = self.site, self.site.asked
        z, error = judged.z, judged.error
        trusted = np.isfinite(error)
        serves = np.where(trusted, judged.serves, -1)
        within = error <= site.limit * WITHIN
        per_length, per_degree = self._sensitivity(judged, within if within.any() else trusted)
        worst = int(np.where(trusted, error.round(9), np.inf).argmax())
        mounts = [f"{self.word} {number}" for number in range(1, len(z) + 1)]
        sensors = [
            replace(sensor, name=mount if own is None else f"{mount} {own}")
            for mount, place in zip(mounts, z, strict=True)
            for sensor, own in zip(site.sensors(np.array([place])), self._own_names, strict=True)
        ]
        return Mount(
            sensors=tuple(sensors),
            places=_pairs(z),
            angles=self.angles(judged.variables),
            length=None if not self._has_length else float(self.lengths(judged.variables)[0]),
            error=error,
            serves=serves,
            worst_error=float(error.max()),
            worst_angle=float(asked.angles[worst]),
            mean_error=float(judged.ratings.mean[0]),
            share=float(judged.ratings.share[0]),
            margin=float(site.limit - error.max()),
            wall_distance=float(site.wall_distance(z).min()),
            spacing=float(self._apart(z)),
            error_per_length=per_length,
            error_per_degree=per_degree,
        )

    @property
    def _own_names(self):
        carried = self.site.carried
        if len(carried) == 1:
            return [carried[0].name]
        return [one.name or f"{one.kind} {k}" for k, one in enumerate(carried, start=1)]

    def _sensitivity(self, judged, winds):
        """Greatest change of the errors that count, per unit of length and per degree."""
        if not winds.any():
            return np.nan, np.nan
        directions = self.site.asked.directions[winds]
        _, slopes, _ = self.site.read(judged.z, directions, trust=False)
        mine = slopes[:, np.arange(len(directions)), judged.serves[winds]]
        mounts = judged.z[judged.serves[winds]]
        return self._rates(mine @ [1, -1j], mounts)

    def _notes(self, best):
        """What it came to, and what the surveys of the best choice have to say."""
        site = self.site
        percent = f"{100 * site.limit:g} percent"
        if best.key[0] == 1:
            yield (
                f"No choice keeps every wind within {percent}: these have the least worst error "
                "with every wind trusted."
            )
        if best.key[0] == 2:
            yield (
                f"No choice has a trusted sensor in every wind: these keep the greatest share of "
                f"the wind within {percent}."
            )
        asked = site.asked
        table = survey(asked.model, site.sensors(best.z), asked.directions, reynolds=asked.reynolds)
        yield from table.notes


@dataclass(frozen=True, eq=False)
class _Judged:
    """One set: its variables, places (k,), errors (n, k), and in each wind the least and whose."""

    variables: np.ndarray
    z: np.ndarray
    errors: np.ndarray
    error: np.ndarray
    serves: np.ndarray
    ratings: _Ratings
    key: tuple


class _Refinement:
    """Sequential quadratic programming on one set: the shortest length, or the least worst error.

    In each wind the mount that read it best at the start is held to the limit. A few winds stand
    for all: those at peaks of the error, joined by others as these come to exceed the limit.
    """

    def __init__(self, search, variables, steps, start, served, by_length):
        self.search, self.by_length = search, by_length
        self.start, self.steps, self.served = variables, steps, served
        self.serves = start.serves
        self.site = search.site
        self.level = self.site.limit if by_length else float(start.error[served].max())
        self._kept = None

    def run(self):
        """The refined variables."""
        winds = self._peaks(self._errors(self.start))
        best = self.start
        for _ in range(MOST_EXCHANGES):
            try:
                best, level = self._solved(winds)
            except InputError:  # a step led into a body
                return best
            errors = self._errors(best)
            over = self._peaks(np.where(errors > level * WITHIN + 1e-12, errors, 0.0))
            if not np.setdiff1d(over, winds).size:
                break
            winds = np.union1d(winds, over)
        return best

    def _errors(self, variables):
        """(n,) errors of the winds that are served, zero in the others."""
        try:
            values, _ = self._read(variables, np.flatnonzero(self.served), slopes=False)
        except InputError:
            return np.zeros(len(self.served))
        errors = np.zeros(len(self.served))
        errors[self.served] = np.abs(values).max(axis=0)
        return errors

    def _peaks(self, errors):
        """Winds where the error is greatest among neighbours and more than half the greatest."""
        padded = np.pad(errors, 1, mode="wrap")
        peak = (errors >= padded[:-2]) & (errors >= padded[2:]) & (errors > 0)
        # An arc has ends; and where mounts take over from each other there is a peak of either.
        serves = np.pad(self.serves, 1, mode="wrap")
        peak |= (self.serves != serves[:-2]) | (self.serves != serves[2:])
        peak[[0, -1]] = True
        return np.flatnonzero(peak & self.served & (errors > 0.5 * errors.max()))

    def _read(self, variables, winds, slopes=True):
        """Errors (q, w), with signs, of the mounts that serve the winds; slopes by variables."""
        z = self.search.place(variables)
        errors, gradients, _ = self.site.read(
            z, self.site.asked.directions[winds], slopes=slopes, trust=False
        )
        mine = (slice(None), np.arange(len(winds)), self.serves[winds])
        if not slopes:
            return errors[mine], None
        moves = self.search.moves(variables)[self.serves[winds]]
        gradient = gradients[mine]
        rates = gradient[..., 0, None] * moves.real + gradient[..., 1, None] * moves.imag
        return errors[mine], rates

    def _constraints(self, unknowns, winds):
        """Room to the limit on either side, and its slopes, at the same unknowns only once."""
        if self._kept is None or not np.array_equal(self._kept[0], unknowns):
            variables = unknowns[: len(self.start)]
            values, rates = self._read(variables, winds)
            values, rates = values.ravel(), rates.reshape(-1, len(variables))
            level = self.level if self.by_length else unknowns[-1]
            room = np.concatenate([level - values, level + values])
            slopes = np.concatenate([-rates, rates])
            if not self.by_length:
                slopes = np.column_stack([slopes, np.ones(len(slopes))])
            scale = self.site.limit
            self._kept = np.array(unknowns), np.nan_to_num(room / scale), slopes / scale
        return self._kept[1:]

    def _solved(self, winds):
        """Variables and the greatest error for a few winds."""
        search, site, self._kept = self.search, self.site, None
        size = len(self.start)
        unknowns, bounds = self.start, search.bounds(self.start, self.steps)
        if self.by_length:
            target = np.eye(size)[0]
        else:
            unknowns = np.append(unknowns, self.level)
            bounds = [*bounds, (0.0, self.level)]
            target = np.eye(size + 1)[-1] / site.limit
        constraints = [{
            "type": "ineq",
            "fun": lambda x: self._constraints(x, winds)[0],
            "jac": lambda x: self._constraints(x, winds)[1],
        }]
        room = max(site.clearance, search.room)
        constraints.append({
            "type": "ineq",
            "fun": lambda x: (site.wall_distance(search.place(x[:size])) - room) / search.size,
        })
        if site.spacing and len(search.place(self.start)) > 1:
            constraints.append({
                "type": "ineq",
                "fun": lambda x: (search._apart(search.place(x[:size])) - site.spacing)
                / search.size,
            })
        found = minimize(
            lambda x: target @ x, unknowns, jac=lambda x: target, bounds=bounds, method="SLSQP",
            constraints=constraints, options={"maxiter": 60, "ftol": 1e-12},
        )
        return found.x[:size], self.level if self.by_length else float(found.x[-1])


# --- booms ----------------------------------------------------------------------------------------


class _BoomSearch(_Search):
    """Booms of one length: the variables are the length over the greatest, and the headings."""

    word = "boom"
    _has_length = True

    def __init__(self, site, where):
        super().__init__(site, where)
        self.size = where.greatest
        self.room = OFF_WALL * self.size
        self.foot = complex(*where.foot)
        self.headings, self.turn, self.wraps = self._headings()

    def _headings(self):
        """The headings of a scan, the step between them, and whether they close."""
        asked = self.site.asked
        count = max(LEAST_AROUND, int(AROUND[asked.count] / np.sqrt(self.site.samples)))
        if self.where.sector is None:
            return np.arange(count) * 2 * np.pi / count, 2 * np.pi / count, True
        first, last = self.where.sector
        sweep = (last - first) % 360.0 if last != first else 0.0
        if sweep == 0.0 and last != first:
            sweep = 360.0
        number = max(2 * asked.count, round(count * sweep / 360.0) + 1) if sweep else 1
        headings = asked.heading(first + np.linspace(0.0, sweep, number))
        return headings, np.radians(sweep) / max(number - 1, 1), False

    def found(self):
        site, asked = self.site, self.site.asked
        scan = self._scan(self._first_lengths())
        found, hoped = self._scanned(scan)
        if not len(found.sets):
            raise InputError(
                f"where = {self.where!r}: no place is allowed; a longer boom, a wider sector, or "
                "less clearance or spacing would help"
            )
        lengths, steps = self._lengths_of(scan, found), self._steps(scan)
        best = found.keys(site.limit, lengths)
        best = best[np.lexsort(best.T[::-1])[0]]
        bound = self._bound(best[0], scan, hoped)
        curve = [self._curve(scan, found)]
        starts = []
        taken = []
        if best[0] == 0 and best[1] > bound * (1 + 1e-9):
            fine = self._scan(np.linspace(max(bound, 1e-9 * self.size), best[1], FINE_RINGS))
            again, hoped_again = self._scanned(fine)
            bound = max(bound, self._bound(0, fine, hoped_again))
            curve.append(self._curve(fine, again))
            starts = [(fine, one, self._steps(scan)) for one in itertools.islice(
                self._distinct(fine, again, self._lengths_of(fine, again), taken), 1)]
        starts += [(scan, one, steps) for one in self._distinct(scan, found, lengths, taken)]
        judged = [self._refined(self._variables(s, one), step) for s, one, step in starts]
        judged = sorted(judged, key=lambda one: one.key)
        quantity = {0: "length", 1: "worst error", 2: "share"}[int(best[0])]
        search = Search(
            quantity=quantity,
            places=len(scan.places) + (0 if len(curve) == 1 else len(fine.places)),
            sets=len(found.sets) + (0 if len(curve) == 1 else len(again.sets)),
            step=(float(np.diff(self._radii(scan)).max(initial=0.0)), float(np.degrees(self.turn))),
            scan_best=abs(float(best[1])),
            refined=abs(float(judged[0].key[1])) if judged[0].key[0] == best[0] else np.nan,
            bound=float(bound),
        )
        mounts = [self._mount(one) for one in judged]
        notes = self._notes(judged[0])
        return asked.result(self.where, mounts, site.limit, _merged(curve), search, notes)

    def _first_lengths(self):
        """Lengths of the first scan, from the shortest that may stand somewhere to the greatest."""
        least = max(self.where.least, 1e-3 * self.size)
        if least >= self.size:
            return np.array([self.size])
        trial = np.geomspace(least, self.size, TRIAL_LENGTHS)
        z = self.foot + trial[:, None] * np.exp(1j * self.headings)
        stands = ~inside(self.site.asked.model, _pairs(z))
        room = max(self.site.clearance, self.room)
        stands[stands] = self.site.wall_distance(z[stands]) >= room
        first = int(stands.any(axis=1).argmax())
        return np.geomspace(trial[max(first - 1, 0)], self.size, RINGS)

    def _scan(self, lengths):
        z = np.exp(1j * self.headings)
        gaps = np.diff(lengths, prepend=lengths[0], append=lengths[-1])
        along = 0.5 * np.maximum(gaps[:-1], gaps[1:])[:, None] * z
        around = 0.5j * self.turn * lengths[:, None] * z
        return _Scan(
            self.site, self.foot + lengths[:, None] * z, np.stack([along, around], axis=-1),
            self.wraps, self.room,
        )

    def _radii(self, scan):
        return np.abs(scan.places - self.foot).reshape(scan.shape)[:, 0]

    def _rings(self, scan):
        rows, columns = scan.shape
        return (slice(row * columns, (row + 1) * columns) for row in range(rows))

    def _room(self, scan, ring):
        """By how much two booms of a ring may come closer within half a step."""
        return self.turn * float(np.abs(scan.places[ring.start] - self.foot))

    def _lengths_of(self, scan, ratings):
        return np.abs(scan.places[ratings.sets[:, 0]] - self.foot)

    def _bound(self, level, scan, hoped):
        """What no finer search could pass."""
        if level == 1:
            return float(hoped.worst.min())
        if level == 2:
            return float(hoped.share.max())
        radii = self._radii(scan)
        below = radii - 0.5 * np.diff(radii, prepend=radii[0])
        rows = hoped.sets[hoped.worst <= self.site.limit * WITHIN, 0] // scan.shape[1]
        return float(below[rows].min(initial=radii[-1]))

    def _curve(self, scan, ratings):
        """Length, least worst error and greatest share of every ring that has a set."""
        radii, rows = self._radii(scan), ratings.sets[:, 0] // scan.shape[1]
        worst, share = np.full(len(radii), np.inf), np.zeros(len(radii))
        np.minimum.at(worst, rows, ratings.worst)
        np.maximum.at(share, rows, ratings.share)
        some = np.isin(np.arange(len(radii)), rows)
        return np.stack([radii, worst, share])[:, some]

    def _steps(self, scan):
        radii = self._radii(scan)
        along = np.diff(radii).max(initial=0.0) / self.size
        return np.array([along] + [self.turn] * self.site.asked.count)

    def _variables(self, scan, one):
        arms = scan.places[one] - self.foot
        return np.array([np.abs(arms[0]) / self.size, *np.angle(arms)])

    def place(self, variables):
        """Places (k,) of the variables."""
        return self.foot + variables[0] * self.size * np.exp(1j * variables[1:])

    def moves(self, variables):
        """(k, variables) complex moves of the places per unit of the variables."""
        ahead = self.size * np.exp(1j * variables[1:])
        return np.column_stack([ahead, np.diag(1j * variables[0] * ahead)])

    def bounds(self, variables, steps):
        """How far the refinement may go: a step and a half, within the region."""
        low, high = variables - 1.5 * steps, variables + 1.5 * steps
        low[0] = max(low[0], self.where.least / self.size, 1e-6)
        high[0] = min(high[0], 1.0)
        if self.where.sector is not None:
            ends = np.sort(self.headings[[0, -1]])
            turns = np.round((variables[1:] - ends.mean()) / (2 * np.pi)) * 2 * np.pi
            low[1:] = np.maximum(low[1:], ends[0] + turns)
            high[1:] = np.minimum(high[1:], ends[1] + turns)
        low, high = np.minimum(low, variables), np.maximum(high, variables)
        return list(zip(low, high, strict=True))

    def lengths(self, variables):
        return np.array([variables[0] * self.size])

    def angles(self, variables):
        return self.site.asked.angle(variables[1:])

    def _differs(self, places, z):
        """(t,) whether sets of places point elsewhere than the booms to z."""
        arms, others = places - self.foot, z - self.foot
        turn = np.abs(np.angle(arms[:, :, None] * others.conj(), deg=True)).min(axis=2)
        return turn.max(axis=1) > DISTINCT

    def _rates(self, slopes, mounts):
        """Greatest error per length along the booms, and per degree that they turn."""
        arms = mounts - self.foot
        along, around = (slopes * (arms / np.abs(arms))).real, (slopes * 1j * arms).real
        return float(np.abs(along).max()), float(np.radians(np.abs(around).max()))


def _merged(curves):
    """The curve of all scans, by growing length."""
    whole = np.concatenate(curves, axis=1)
    whole = whole[:, np.unique(whole[0].round(12), return_index=True)[1]]
    return dict(zip(("length", "worst_error", "share"), whole, strict=True))


def _joined(ratings):
    """Ratings of several rings, end to end."""
    names = ("sets", "worst", "share", "mean")
    return _Ratings(*(np.concatenate([getattr(one, name) for one in ratings]) for name in names))


# --- areas ----------------------------------------------------------------------------------------


class _AreaSearch(_Search):
    """Places within an outline: the variables are x and y of each, over the area's size."""

    word = "mount"
    _has_length = False

    def __init__(self, site, where):
        super().__init__(site, where)
        ring = where.points(2000)
        self.low, high = ring.min(axis=0), ring.max(axis=0)
        self.sides = high - self.low
        self.size = float(self.sides.max())
        self.room = OFF_WALL * self.size

    def found(self):
        site, asked = self.site, self.site.asked
        scan, step = self._scan()
        found, hoped = self._scanned(scan)
        if not len(found.sets):
            raise InputError(
                f"where = {self.where!r}: no place in it is allowed; a larger area, or less "
                "clearance or spacing would help"
            )
        keys = found.keys(site.limit)
        best = keys[np.lexsort(keys.T[::-1])[0]]
        steps = np.tile(step, asked.count) / self.size
        judged = [
            self._refined(self._variables(scan.places[one]), steps)
            for one in self._distinct(scan, found, None, [])
        ]
        judged = sorted(judged, key=lambda one: one.key)
        by_share = best[0] == 2
        search = Search(
            quantity="share" if by_share else "worst error",
            places=int(scan.clear.sum()),
            sets=len(found.sets),
            step=tuple(step.tolist()),
            scan_best=abs(float(best[1])),
            refined=abs(float(judged[0].key[1])),
            bound=float(hoped.share.max() if by_share else hoped.worst.min()),
        )
        mounts = [self._mount(one) for one in judged]
        return asked.result(
            self.where, mounts, site.limit, None, search, self._notes(judged[0])
        )

    def _scan(self):
        """The scan of a grid about as dense as its share of the places allows, and its steps."""
        number = np.sqrt(GRID[self.site.asked.count] / np.prod(self.sides))
        counts = np.maximum(2, np.ceil(self.sides * number)).astype(int)
        step = self.sides / counts
        # Middles of cells: half a step round them covers the area.
        x, y = (low + size * (np.arange(n) + 0.5) for low, size, n in
                zip(self.low, step, counts, strict=True))
        places = x + 1j * y[:, None]
        half = np.broadcast_to([0.5 * step[0], 0.5j * step[1]], (*places.shape, 2))
        within = inside(self.where, _pairs(places))
        return _AreaScan(self.site, places, half, within, self.room), step

    def _rings(self, scan):
        return [slice(0, len(scan.places))]

    def _room(self, scan, ring):
        return 2.0 * self.size * np.sqrt(1.0 / len(scan.places))

    def _variables(self, z):
        return (_pairs(z) / self.size).ravel()

    def place(self, variables):
        """Places (k,) of the variables."""
        return self.size * (variables[::2] + 1j * variables[1::2])

    def moves(self, variables):
        """(k, variables) complex moves of the places per unit of the variables."""
        return self.size * np.kron(np.eye(len(variables) // 2), [1, 1j])

    def bounds(self, variables, steps):
        """How far the refinement may go: a step and a half."""
        return list(zip(variables - 1.5 * steps, variables + 1.5 * steps, strict=True))

    def _judged(self, variables):
        if not inside(self.where, _pairs(self.place(variables))).all():
            return None
        return super()._judged(variables)

    def lengths(self, variables):
        return None

    def angles(self, variables):
        return None

    def _differs(self, places, z):
        """(t,) whether one place of each set is far from all of z."""
        away = np.abs(places[:, :, None] - z).min(axis=2)
        return away.max(axis=1) > DISTINCT_SHARE * self.size

    def _rates(self, slopes, mounts):
        return float(np.abs(slopes).max()), np.nan


class _AreaScan(_Scan):
    """A scan of which only the places within an outline are allowed."""

    def __init__(self, site, places, half_steps, within, room):
        self.within = within.ravel()
        super().__init__(_Fenced(site, self.within), places, half_steps, False, room)
        self.site = site


@dataclass(frozen=True, eq=False)
class _Fenced:
    """A site with a fence round it."""

    site: _Site
    within: np.ndarray

    @property
    def asked(self):
        return self.site.asked

    def clear(self, z, room):
        return self.within & self.site.clear(z, room)

    def read(self, z, directions, **how):
        return self.site.read(z, directions, **how)


# --- ports ----------------------------------------------------------------------------------------


class _Ports:
    """Ports in a stretch of wall; its places are the nodes of the wall."""

    def __init__(self, asked, where, limit):
        self.asked, self.where, self.limit = asked, where, limit
        self.model = asked.model
        self.body = as_body("body", where.body, len(self.model.outlines))
        if asked.count > 2:
            raise InputError(f"count = {asked.count}: ports are sought alone or in pairs")
        wall = self.model.surface(self.body, asked.directions)
        fractions = wall.arc / self.model._arcs[self.body].length
        order = np.argsort((fractions - where.first) % 1.0)
        order = order[where.holds(fractions[order])]
        if len(order) < 3:
            raise InputError(f"where = {where!r}: too short to hold three nodes of the wall")
        # Unrolled, so that they grow across the outline's first point.
        self.fractions = where.first + (fractions[order] - where.first) % 1.0
        self.closed = where.first == 0.0 and where.last == 1.0
        self.points, self.pressure = wall.points[order], wall.pressure_coefficient[:, order]
        self.table = survey(
            self.model, [PointSensor(*point) for point in self.points], asked.directions,
            reynolds=asked.reynolds,
        )
        self.trust = self.table.trust & np.isfinite(self.pressure)

    @property
    def _turns(self):
        """Whether the wind can turn at all."""
        return not self.model.surroundings.walls

    def pressures(self, fractions, directions):
        """(k, n) pressure coefficients at arc fractions."""
        return np.stack([
            self.model.port_pressure(self.body, float(fraction % 1.0), directions)
            for fraction in fractions
        ])

    def slopes(self, fractions, directions):
        """(k, n) their slopes per degree of direction."""
        if not self._turns:
            return np.full((len(fractions), len(directions)), np.nan)
        ahead = self.pressures(fractions, directions + TURN_STEP)
        return (ahead - self.pressures(fractions, directions - TURN_STEP)) / (2 * TURN_STEP)

    def found(self):
        if self.asked.count == 1:
            return self._static()
        if not self._turns:
            raise InputError(
                f"count = 2 in {self.model.surroundings!r}: the stream cannot turn there, so no "
                "pair of ports can tell its direction"
            )
        return self._pairs()

    # --- a static port

    def _static(self):
        errors = np.where(self.trust, np.abs(self.pressure), np.inf)
        worst = errors.max(axis=0)
        before, after = self._neighbours(worst, np.inf)
        lowest = np.flatnonzero(np.isfinite(worst) & (worst <= before) & (worst < after))
        if not lowest.size:
            raise InputError(
                f"where = {self.where!r}: no port there is trusted in every wind asked for; ask "
                "for fewer winds or another stretch"
            )
        found = [self._polished_static(node) for node in lowest]
        chosen = sorted(
            (self._port([fraction]) for fraction in found if fraction is not None),
            key=lambda port: (round(port.worst_pressure, 6), abs(port.slope)),
        )
        search = Search(
            "worst pressure", len(worst), len(worst), (self._step(),),
            float(worst.min()), chosen[0].worst_pressure, self._least_pressure(errors),
        )
        return self._result(chosen, search)

    def _least_pressure(self, errors):
        """What the worst pressure could be within half a step of a node, at the least."""
        ends = np.roll(self.points, -1, axis=0) - np.roll(self.points, 1, axis=0)
        along = ends / np.hypot(*ends.T)[:, None]
        slope = np.abs(np.einsum("nma,ma->nm", self.table.speed_ratio_gradient, along))
        slope = np.nan_to_num(2 * np.abs(self.table.speed_ratio) * slope)
        before, after = self._neighbours(slope, 0.0)
        reach = 0.5 * self._gaps() * self.model._arcs[self.body].length
        hope = np.maximum(errors - np.maximum(slope, np.maximum(before, after)) * reach, 0.0)
        return float(hope.max(axis=0).min())

    def _polished_static(self, node):
        """The arc fraction of the least worst pressure between the neighbours of a node."""
        low, high = self._between(node)
        if low == high:
            return None

        def worst(fraction):
            return np.abs(self.pressures([fraction], self.asked.directions)).max()

        found = minimize_scalar(worst, bounds=(low, high), method="bounded",
                                options={"xatol": 1e-12, "maxiter": 200})
        return found.x if found.fun <= worst(self.fractions[node]) else self.fractions[node]

    # --- a pair

    def _pairs(self):
        slopes = self.slopes(self.fractions, self.asked.directions)
        slopes[~self.trust.all(axis=0)] = np.nan
        least = self._least_differences(slopes)
        if not np.isfinite(least).any():
            raise InputError(
                f"where = {self.where!r}: no two ports there are trusted in every wind asked for; "
                "ask for fewer winds or a longer stretch"
            )
        starts = []
        best = np.nanmax(least)
        taken = np.where(np.isnan(least), -np.inf, least)
        while len(starts) < self.asked.choices and np.isfinite(taken).any():
            pair = np.unravel_index(taken.argmax(), taken.shape)
            if taken[pair] <= 0:
                break
            starts.append(pair)
            near = [np.abs(self.fractions - self.fractions[node]) < 0.05 for node in pair]
            taken[np.ix_(*near)] = -np.inf
        if not starts:
            raise InputError(
                f"where = {self.where!r}: no pair of ports there tells the direction over the "
                "whole arc; ask for a narrower arc"
            )
        chosen = sorted(
            (self._port(self._polished_pair(pair)) for pair in starts),
            key=lambda port: -abs(port.slope),
        )
        before, after = self._neighbours(slopes.T, np.nan)
        doubt = np.fmax(np.abs(slopes.T - before), np.abs(slopes.T - after)).T
        hope = self._least_differences(slopes, np.nan_to_num(doubt))
        search = Search(
            "sensitivity", len(slopes), len(slopes) * (len(slopes) - 1), (self._step(),),
            float(best), abs(chosen[0].slope), float(np.nanmax(hope)),
        )
        return self._result(chosen, search)

    @staticmethod
    def _least_differences(slopes, doubt=None):
        """(N, N) least over the winds of how much faster one port's pressure grows than another's.

        With a doubt (N, n), the most that it could be.
        """
        doubt = np.zeros(slopes.shape) if doubt is None else doubt
        least = np.full((len(slopes),) * 2, np.inf)
        for column, room in zip(slopes.T, doubt.T, strict=True):
            np.minimum(least, (column + room)[:, None] - (column - room), out=least)
        return least

    def _polished_pair(self, pair):
        """The arc fractions of greatest least slope near a pair of nodes."""
        start = self.fractions[list(pair)]
        bounds = [self._between(node) for node in pair]

        def loss(fractions):
            slopes = self.slopes(fractions, self.asked.directions)
            return -(slopes[0] - slopes[1]).min()

        # Not smooth where two winds share the least: a simplex, from a scan that is dense.
        size = np.ptp(bounds, axis=1) / 4
        simplex = np.array([start, start + [size[0], 0], start + [0, size[1]]])
        found = minimize(loss, start, method="Nelder-Mead", bounds=bounds, options={
            "initial_simplex": np.clip(simplex, *np.transpose(bounds)), "xatol": 1e-9,
            "fatol": 1e-12, "maxiter": 200,
        })
        return found.x if found.fun < loss(start) else start

    def _saturation(self, sensors, fractions):
        """Winds between which the pressure difference of a pair grows all the way, and why."""
        directions = self.asked.directions
        middle = _middle(directions)
        away = np.arange(181.0)
        ends, reasons = [], []

        def slope(direction):
            slopes = self.slopes(fractions, np.array([direction]))
            return float(slopes[0, 0] - slopes[1, 0])

        sense = np.sign(slope(middle))
        for side in (-1.0, 1.0):
            line = middle + side * away
            trust = survey(self.model, sensors, line, reynolds=self.asked.reynolds)
            trusted = np.append(trust.trust.all(axis=1), False)
            slopes = self.slopes(fractions, line)
            rising = np.append((slopes[0] - slopes[1]) * sense > 0, False)
            last_trusted, last_rising = int(trusted.argmin()), int(rising.argmin())
            if last_rising <= last_trusted and last_rising < len(line):
                before, after = line[last_rising - 1], line[last_rising]
                # At the turn itself rounding decides: it may be there already.
                turns = slope(before) * slope(after) < 0
                ends.append(brentq(slope, before, after, xtol=1e-9) if turns else float(after))
                reasons.append("the slope turns")
            else:
                ends.append(float(line[min(last_trusted, len(line)) - 1]))
                reasons.append("trust ends")
        if self.asked.by_bearing:
            ends, reasons = [float(to_bearing(end)) for end in ends[::-1]], reasons[::-1]
        return tuple(float(within_turn(end)) for end in ends), tuple(reasons)

    # --- both

    def _gaps(self):
        """(N,) distance of every node from the farther of its neighbours, as arc fractions."""
        gaps = np.diff(self.fractions, append=self.fractions[0] + 1.0)
        if not self.closed:
            gaps[-1] = 0.0
        return np.maximum(gaps, np.roll(gaps, 1))

    def _step(self):
        return float(self._gaps().max())

    def _neighbours(self, values, beyond):
        """Values (..., N) of the neighbours before and after; ``beyond`` the ends of the stretch."""
        before, after = np.roll(values, 1, axis=-1), np.roll(values, -1, axis=-1)
        if not self.closed:
            before[..., 0] = after[..., -1] = beyond
        return before, after

    def _between(self, node):
        """Arc fractions of a node's neighbours."""
        last = len(self.fractions) - 1
        low = self.fractions[node - 1] if node else (
            self.fractions[-1] - 1.0 if self.closed else self.fractions[0])
        high = self.fractions[node + 1] if node < last else (
            self.fractions[0] + 1.0 if self.closed else self.fractions[-1])
        return low, high

    def _port(self, fractions):
        """The PortMount of one or two arc fractions."""
        fractions = np.asarray(fractions, float)
        directions = self.asked.directions
        pressure = self.pressures(fractions, directions)
        slopes = self.slopes(fractions, directions)
        names = ["port"] if len(fractions) == 1 else ["port 1", "port 2"]
        sensors = tuple(
            WallPort(self.body, float(fraction % 1.0), name=name)
            for fraction, name in zip(fractions, names, strict=True)
        )
        saturates, because = (np.nan, np.nan), ("", "")
        if len(fractions) == 2:
            pressure, slope = pressure[0] - pressure[1], slopes[0] - slopes[1]
            slope = slope[np.abs(slope).argmin()]
            saturates, because = self._saturation(sensors, fractions)
        else:
            pressure, slope = pressure[0], slopes[0]
            slope = slope[np.abs(np.nan_to_num(slope)).argmax()]
        worst = float(np.abs(pressure).max())
        arcs = (fractions % 1.0) * self.model._arcs[self.body].length
        arcs = (arcs + self.model._arcs[self.body].start) % self.model._arcs[self.body].length
        return PortMount(
            sensors=sensors,
            arc_fractions=fractions % 1.0,
            places=_pairs(self.model._place(self.body, arcs)),
            pressure=pressure,
            worst_pressure=worst,
            slope=float(slope),
            saturates=saturates,
            because=because,
            margin=self.limit - worst if len(fractions) == 1 else np.nan,
        )

    def _result(self, chosen, search):
        notes = survey(
            self.model, chosen[0].sensors, self.asked.directions, reynolds=self.asked.reynolds
        ).notes
        chosen = chosen[: self.asked.choices]
        return self.asked.result(self.where, chosen, self.limit, None, search, notes)


def _middle(directions):
    """The middle of an arc of directions: opposite the widest gap between them."""
    turned = np.sort(within_turn(directions))
    gaps = np.diff(turned, append=turned[0] + 360.0)
    widest = int(gaps.argmax())
    if gaps.max() - gaps.min() < 1e-9 and len(turned) > 2:
        return float(directions[0])
    return float(within_turn(turned[widest] + 0.5 * gaps[widest] + 180.0))


# --- arguments ------------------------------------------------------------------------------------


def _as_winds(model, directions, bearings):
    """The winds as they were given, and whether they are bearings."""
    if directions is not None and bearings is not None:
        raise InputError("directions and bearings are both given: give one of them")
    if directions is None and bearings is None:
        return usual_directions(model.surroundings), False
    name, given = ("directions", directions) if bearings is None else ("bearings", bearings)
    angles = np.atleast_1d(as_directions(name, given))
    if not angles.size:
        raise InputError(f"{name} is empty: give at least one angle, or leave it out")
    model.surroundings.admit(from_bearing(angles) if bearings is not None else angles)
    return angles, bearings is not None


def _as_weights(angles, table):
    """(n,) frequencies of the winds, with sum 1."""
    if table is None:
        return np.full(len(angles), 1.0 / len(angles))
    if not isinstance(table, Mapping) or not table:
        raise InputError(f"weights must map the middles of sectors to frequencies, got {table!r}")
    middles = as_reals("weights' angles", list(table.keys()))
    frequencies = as_reals("weights' frequencies", list(table.values()))
    if frequencies.min() < 0:
        raise InputError(f"weights must not be negative, got {frequencies.min():g}")
    away = np.abs(within_turn(angles[:, None] - middles + 180.0) - 180.0)
    sector = away.argmin(axis=1)
    weights = frequencies[sector] / np.bincount(sector, minlength=len(middles))[sector]
    if weights.sum() <= 0:
        raise InputError("weights: none of the winds asked for lies in a sector with a frequency")
    return weights / weights.sum()


def _as_limit(limit):
    if isinstance(limit, str):
        if limit not in LIMITS:
            raise InputError(f"limit = {limit!r} is not known; {nearest_name(limit, LIMITS)}")
        return LIMITS[limit]
    return as_number("limit", limit, positive=True)


def _as_carried(sensors):
    """What a mount carries, as a tuple of sensors."""
    if sensors is None:
        return (PointSensor(0.0, 0.0, reads="speed"),)
    carried = tuple(sensors) if isinstance(sensors, list | tuple) else (sensors,)
    for sensor in carried:
        if not isinstance(sensor, SENSORS) or sensor.kind == "port":
            raise InputError(
                f"sensors must be sensors that stand in the flow, such as ob.PointSensor(0, 0), "
                f"got {sensor!r}"
            )
    if not carried:
        raise InputError("sensors is empty: leave it out, or give at least one")
    return carried


def _as_keep_out(keep_out):
    outlines = (keep_out,) if isinstance(keep_out, Outline) else tuple(keep_out)
    for outline in outlines:
        if not isinstance(outline, Outline):
            raise InputError(f"keep_out must hold outlines such as ob.circle(...), got {outline!r}")
    return outlines


def _pairs(z):
    return np.stack([z.real, z.imag], axis=-1)
