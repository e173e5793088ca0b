"""Sensors: where each samples the flow, and how its samples become a reading.

Every sensor that stands in the flow offers the same few things, and the survey needs no others:

``points``               (m, 2) sample points,
``weights``              (m,) their shares in a mean over the sensor (sum 1),
``direct``, ``turned``   (m,) complex: with velocities V = u + i v at the samples, the sensed vector
                         is the sum of direct V + turned conj(V), as any linear reading is,
``centre``               (2,) the place that stands for the whole sensor,
``meets``                whether its path or disc touches a wall,
``moved``                the same sensor elsewhere,

and, where they differ from those of ``Standing``,

``heading``              (m,) real: the sum of heading V is the vector whose direction is sensed,
                         where it is not the one whose length is,
``averages_speed``       whether it senses the mean of |V| in place of the length of the mean,
``nose``                 degrees: where a stream that meets it head on goes to,
``yaw_range``            (least, greatest) yaw on that axis which it can read, in degrees.
"""

from dataclasses import dataclass, replace
from functools import cache, cached_property
from typing import ClassVar

import numpy as np

from offbody.checks import as_number, as_point, as_reals, nearest_name
from offbody.errors import InputError
from offbody.segments import crosses

# Measured on a circle of radius a in a stream, greatest error of the mean over all directions as a
# share of the undisturbed speed. Path of length L passing at a clearance g: 7e-13 for L = 4 a,
# 2e-5 for L = 10 a, both with g = a/50; for L = 20 a 7e-5 with g = a/10 and 9e-9 with g = 2 a.
# At a square mast's corner of radius a: 7e-4 for L = 40 a with g = a/5.
PATH_NODES = 48
# Disc of radius R at a clearance g: 1e-7 for R = a and g = a/2; 1e-5 for R = 0.3 a and 6e-5 for
# R = a, both with g = a/50; 2e-4 for R = 3 a with g = a/10. At a square mast's corner of radius a:
# 1e-6 for R = 3 a with g = a, 1e-3 for R = 10 a with g = a/5.
DISC_RINGS = 6
DISC_ANGLES = 20

LEAST_CROSSING = 10.0  # degrees between paths: below it an error of a path grows sixfold

# Degrees either way: common practice has the total pressure of a blunt tube within 1 percent of the
# dynamic pressure, so 0.5 percent of the speed, up to about 10 to 15 degrees of yaw.
PITOT_YAW = 12.0

READS = ("both", "direction", "speed")


class Standing:
    """What most sensors that stand in the flow have in common."""

    heading: ClassVar = None
    averages_speed: ClassVar = False
    nose: ClassVar = None
    yaw_range: ClassVar = (-np.inf, np.inf)


@dataclass(frozen=True)
class PointSensor(Standing):
    """The velocity vector at a point.

    Parameters
    ----------
    x, y : float
        Where the sensor is, in the caller's unit of length.
    name : str, optional
        What tables and pictures call it; by default its kind and its place in the table.
    reads : {"both", "speed", "direction"}
        What the instrument reads; a quantity that it does not read is NaN in a survey.

    Raises
    ------
    ob.InputError
        If a coordinate is not a finite number, or the name or ``reads`` cannot be used.

    Examples
    --------
    >>> import offbody as ob
    >>> ob.PointSensor(0.0, 1.5, name="top cup", reads="speed")
    PointSensor(x=0.0, y=1.5, name='top cup', reads='speed')
    """

    x: float
    y: float
    name: str | None = None
    reads: str = "both"

    kind: ClassVar[str] = "point"

    def __post_init__(self):
        _settle(self, x=as_number("x", self.x), y=as_number("y", self.y))
        _check_name(self.name)
        _check_reads(self.reads)

    @property
    def centre(self):
        """The sensor's place, (2,)."""
        return np.array([self.x, self.y])

    @cached_property
    def points(self):
        """The one sample point, (1, 2)."""
        return self.centre[None]

    weights: ClassVar = np.ones(1)
    direct: ClassVar = np.ones(1)
    turned: ClassVar = np.zeros(1)

    def meets(self, wall):
        """False: a point has no extent; whether it lies inside a body shows in the flow itself."""
        return False

    def moved(self, x, y):
        """The same sensor, moved by x and y."""
        return replace(self, x=self.x + x, y=self.y + y)


@dataclass(frozen=True)
class PathSensor(Standing):
    """The velocity component along the path between two transducers, averaged over the path.

    Parameters
    ----------
    start, end : array_like of shape (2,)
        The two transducers, in the caller's unit of length. The component is positive from
        ``start`` to ``end``.
    name : str, optional
        What tables and pictures call it; by default its kind and its place in the table.

    Raises
    ------
    ob.InputError
        If the transducers are not two distinct points, or the name cannot be used.

    Notes
    -----
    The mean is taken with 48 Gauss-Legendre points. It is good to 1e-12 of the undisturbed speed
    for paths up to four radii of the nearest curved wall in length; passing that wall at a
    fraction of the radius, to 2e-4 for twenty radii and 1e-3 for forty; better the farther off.

    Examples
    --------
    >>> import offbody as ob
    >>> ob.PathSensor((0.0, 1.0), (0.2, 1.0), name="sonic")
    PathSensor(start=(0.0, 1.0), end=(0.2, 1.0), name='sonic')
    """

    start: tuple[float, float]
    end: tuple[float, float]
    name: str | None = None

    kind: ClassVar[str] = "path"
    reads: ClassVar[str] = "speed"

    def __post_init__(self):
        _settle(self, start=_pair("start", self.start), end=_pair("end", self.end))
        _check_name(self.name)
        if self.start == self.end:
            raise InputError(
                f"end = {self.end} is also the start: give the places of two different transducers"
            )

    @property
    def centre(self):
        """The middle of the path, (2,)."""
        return (np.array(self.start) + np.array(self.end)) / 2

    @cached_property
    def axis(self):
        """Unit vector from start to end, as a complex number."""
        along = complex(*self.end) - complex(*self.start)
        return along / abs(along)

    @cached_property
    def points(self):
        """Gauss points of the path, (m, 2)."""
        start, end = np.array(self.start), np.array(self.end)
        return start + _gauss(PATH_NODES)[0][:, None] * (end - start)

    @property
    def weights(self):
        """Gauss weights, (m,)."""
        return _gauss(PATH_NODES)[1]

    @property
    def direct(self):
        """With ``turned``: the mean component, laid along the path as a vector, (m,)."""
        return self.weights / 2

    @cached_property
    def turned(self):
        """See ``direct``."""
        return self.weights * self.axis**2 / 2

    def meets(self, wall):
        """Whether the path crosses a closed wall, (n,) complex."""
        return crosses(self.start, self.end, wall)

    def moved(self, x, y):
        """The same sensor, moved by x and y."""
        return replace(self, start=np.add(self.start, (x, y)), end=np.add(self.end, (x, y)))


@dataclass(frozen=True)
class CrossedPaths(Standing):
    """Two or three paths combined to a vector, as an ultrasonic anemometer does.

    The sensed vector is the one whose components along the paths fit the paths' mean components
    best, by least squares; with two paths the fit is exact.

    Parameters
    ----------
    paths : sequence of two or three PathSensor or (start, end)
        The paths; a name given to one of them is not used.
    name : str, optional
        What tables and pictures call it; by default its kind and its place in the table.

    Raises
    ------
    ob.InputError
        If there are not two or three paths, if no two of them cross at 10 degrees or more, or the
        name cannot be used.

    Examples
    --------
    >>> import offbody as ob
    >>> sonic = ob.CrossedPaths([((-0.1, 1.0), (0.1, 1.0)), ((0.0, 0.9), (0.0, 1.1))])
    >>> len(sonic.paths)
    2
    """

    paths: tuple[PathSensor, ...]
    name: str | None = None

    kind: ClassVar[str] = "crossed paths"
    reads: ClassVar[str] = "both"

    def __post_init__(self):
        _settle(self, paths=_as_paths(self.paths))
        _check_name(self.name)
        sines = np.abs((self._axes[:, None] * self._axes.conj()).imag)
        widest = np.degrees(np.arcsin(min(1.0, sines.max())))
        if widest < LEAST_CROSSING:
            raise InputError(
                f"paths cross at {round(widest, 2):g} degrees at most, which fixes no vector: let "
                f"two of them cross at {LEAST_CROSSING:g} degrees or more"
            )

    @property
    def centre(self):
        """The mean of the paths' middles, (2,)."""
        return np.mean([path.centre for path in self.paths], axis=0)

    @cached_property
    def points(self):
        """Gauss points of all paths, (m, 2)."""
        return np.concatenate([path.points for path in self.paths])

    @cached_property
    def weights(self):
        """Weights of a mean over all paths, (m,)."""
        return self._path_weights / len(self.paths)

    @cached_property
    def direct(self):
        """With ``turned``: the least-squares vector from the mean components, (m,)."""
        return np.repeat(self._shares * self._axes.conj() / 2, PATH_NODES) * self._path_weights

    @cached_property
    def turned(self):
        """See ``direct``."""
        return np.repeat(self._shares * self._axes / 2, PATH_NODES) * self._path_weights

    @property
    def _axes(self):
        return np.array([path.axis for path in self.paths])

    @property
    def _shares(self):
        """What a unit of each path's component adds to the fitted vector."""
        inverse = np.linalg.pinv(np.stack([self._axes.real, self._axes.imag], axis=1))
        return inverse[0] + 1j * inverse[1]

    @property
    def _path_weights(self):
        return np.concatenate([path.weights for path in self.paths])

    def meets(self, wall):
        """Whether one of the paths crosses a closed wall, (n,) complex."""
        return any(path.meets(wall) for path in self.paths)

    def moved(self, x, y):
        """The same sensor, moved by x and y."""
        return replace(self, paths=tuple(path.moved(x, y) for path in self.paths))


@dataclass(frozen=True)
class DiscSensor(Standing):
    """The speed averaged over a disc (a cup rotor) and the direction of the mean vector (a vane).

    Parameters
    ----------
    centre : array_like of shape (2,)
        The middle of the disc, in the caller's unit of length.
    radius : float
        The radius that the cups or the vane sweep, in the same unit.
    name : str, optional
        What tables and pictures call it; by default its kind and its place in the table.
    reads : {"both", "speed", "direction"}
        What the instrument reads; a quantity that it does not read is NaN in a survey.

    Raises
    ------
    ob.InputError
        If the centre is not a point, the radius is not greater than zero, or the name or
        ``reads`` cannot be used.

    Notes
    -----
    The mean is taken with six Gauss radii of twenty angles each: good to 1e-7 of the undisturbed
    speed for a disc as large as the tube that it clears by half its radius and 1e-4 nearly
    touching; 1e-3 nearly touching a corner of a tenth of its radius.

    Examples
    --------
    >>> import offbody as ob
    >>> ob.DiscSensor((0.0, 1.5), 0.1, reads="speed")
    DiscSensor(centre=(0.0, 1.5), radius=0.1, name=None, reads='speed')
    """

    centre: tuple[float, float]
    radius: float
    name: str | None = None
    reads: str = "both"

    kind: ClassVar[str] = "disc"
    averages_speed: ClassVar[bool] = True

    def __post_init__(self):
        _settle(
            self,
            centre=_pair("centre", self.centre),
            radius=as_number("radius", self.radius, positive=True),
        )
        _check_name(self.name)
        _check_reads(self.reads)

    @cached_property
    def points(self):
        """Sample points on rings, (m, 2)."""
        return np.array(self.centre) + self.radius * _unit_disc()[0]

    @property
    def weights(self):
        """Shares of the disc's area, (m,)."""
        return _unit_disc()[1]

    @property
    def direct(self):
        """With ``turned``: the mean vector, (m,)."""
        return self.weights

    @property
    def turned(self):
        """See ``direct``."""
        return np.zeros(self.weights.shape)

    def meets(self, wall):
        """Whether a closed wall, (n,) complex, comes within the disc."""
        here = wall - complex(*self.centre)
        side = np.roll(here, -1) - here
        # The nearest place of each straight piece, as a share of the piece.
        share = np.clip(-(here * side.conj()).real / np.abs(side) ** 2, 0, 1)
        return bool(np.abs(here + share * side).min() < self.radius)

    def moved(self, x, y):
        """The same sensor, moved by x and y."""
        return replace(self, centre=np.add(self.centre, (x, y)))


@dataclass(frozen=True)
class PitotTube(Standing):
    """The speed that a Pitot-static tube's total minus static pressure reads.

    Parameters
    ----------
    x, y : float
        Where its nose is, in the caller's unit of length.
    axis : float
        Where a stream that meets it head on goes to: degrees counter-clockwise from +x.
    static_behind : float
        Distance of the static holes behind the nose, in the same unit.
    greatest_yaw : float
        Up to which it reads the speed, degrees either way of its axis.
    name : str, optional
        What tables and pictures call it; by default its kind and its place in the table.

    Raises
    ------
    ob.InputError
        If a number is not finite, the holes lie ahead of the nose, the greatest yaw is not between
        0 and 90, or the name cannot be used.

    Notes
    -----
    The total pressure is the same everywhere outside wakes, so that the tube reads the speed at its
    static holes. Up to the greatest yaw its own error is left out: common practice has it within 1
    percent of the dynamic pressure up to about 10 to 15 degrees. Beyond it a survey calls it
    ``saturated`` and refuses it trust (a rule of this project). The yaw is that at the nose.

    Examples
    --------
    >>> import offbody as ob
    >>> mast = ob.solve(ob.circle(0.3))
    >>> table = ob.survey(mast, ob.PitotTube(-0.4, 0.4, axis=0.0), directions=[0.0, 30.0])
    >>> table.yaw.round(1), table.trust
    (array([[ 4. ],
           [31.9]]), array([[ True],
           [False]]))
    """

    x: float
    y: float
    axis: float
    static_behind: float = 0.0
    greatest_yaw: float = PITOT_YAW
    name: str | None = None

    kind: ClassVar[str] = "Pitot tube"
    reads: ClassVar[str] = "speed"
    weights: ClassVar = np.array([0.0, 1.0])
    direct: ClassVar = weights
    turned: ClassVar = np.zeros(2)
    heading: ClassVar = np.array([1.0, 0.0])

    def __post_init__(self):
        _settle(
            self,
            x=as_number("x", self.x),
            y=as_number("y", self.y),
            axis=as_number("axis", self.axis),
            static_behind=as_number("static_behind", self.static_behind, least=0),
            greatest_yaw=as_number(
                "greatest_yaw", self.greatest_yaw, positive=True, greatest=90
            ),
        )
        _check_name(self.name)

    @property
    def nose(self):
        """Where a stream that meets it head on goes to, degrees."""
        return self.axis

    @property
    def yaw_range(self):
        """Least and greatest yaw at which it reads the speed, degrees."""
        return -self.greatest_yaw, self.greatest_yaw

    @property
    def centre(self):
        """Where the static holes are, (2,)."""
        return self.points[1]

    @cached_property
    def points(self):
        """The nose and the static holes, (2, 2)."""
        along = np.radians(self.axis)
        behind = self.static_behind * np.array([np.cos(along), np.sin(along)])
        return np.array([self.x, self.y]) + np.array([0.0 * behind, behind])

    def meets(self, wall):
        """Whether the tube between nose and static holes crosses a closed wall, (n,) complex."""
        return self.static_behind > 0 and crosses(*self.points, wall)

    def moved(self, x, y):
        """The same sensor, moved by x and y."""
        return replace(self, x=self.x + x, y=self.y + y)


@dataclass(frozen=True)
class MultiHoleProbe(Standing):
    """Speed, direction and yaw on its axis that a multi-hole probe reads, until it saturates.

    Parameters
    ----------
    x, y : float
        Where its tip is, in the caller's unit of length.
    axis : float
        Where a stream that meets it head on goes to: degrees counter-clockwise from +x.
    hole_angles : sequence of float
        Of the holes in the plane of the flow: by how many degrees of yaw, counter-clockwise, a
        stream meets each of them head on; at least one on either side of the axis.
    name : str, optional
        What tables and pictures call it; by default its kind and its place in the table.

    Raises
    ------
    ob.InputError
        If a number is not finite, the holes do not lie on both sides within 90 degrees, or the
        name cannot be used.

    Notes
    -----
    The probe is taken as a point, its tip. It saturates, and a survey refuses it trust, where the
    yaw exceeds that of its outermost hole: there the highest pressure is no longer between holes,
    and one difference of pressures belongs to two yaws (a rule of this project; a calibration may
    reach less far).

    Examples
    --------
    >>> import offbody as ob
    >>> mast = ob.solve(ob.circle(0.3))
    >>> probe = ob.MultiHoleProbe(-0.4, 0.4, axis=0.0, hole_angles=(-45.0, 0.0, 45.0))
    >>> table = ob.survey(mast, probe, directions=[0.0, 30.0, 60.0])
    >>> table.yaw[:, 0].round(1), table.saturated[:, 0]
    (array([ 4. , 31.9, 58.1]), array([False, False,  True]))
    """

    x: float
    y: float
    axis: float
    hole_angles: tuple[float, ...]
    name: str | None = None

    kind: ClassVar[str] = "multi-hole probe"
    reads: ClassVar[str] = "both"
    weights: ClassVar = np.ones(1)
    direct: ClassVar = np.ones(1)
    turned: ClassVar = np.zeros(1)

    def __post_init__(self):
        _settle(
            self,
            x=as_number("x", self.x),
            y=as_number("y", self.y),
            axis=as_number("axis", self.axis),
            hole_angles=_hole_angles(self.hole_angles),
        )
        _check_name(self.name)

    @property
    def nose(self):
        """Where a stream that meets it head on goes to, degrees."""
        return self.axis

    @property
    def yaw_range(self):
        """Least and greatest yaw that it can read, degrees."""
        return min(self.hole_angles), max(self.hole_angles)

    @property
    def centre(self):
        """The tip, (2,)."""
        return np.array([self.x, self.y])

    @cached_property
    def points(self):
        """The one sample point, (1, 2)."""
        return self.centre[None]

    def meets(self, wall):
        """False: a tip has no extent; whether it lies inside a body shows in the flow itself."""
        return False

    def moved(self, x, y):
        """The same sensor, moved by x and y."""
        return replace(self, x=self.x + x, y=self.y + y)


@dataclass(frozen=True)
class CupAndVane(Standing):
    """The speed at a cup and the direction at a vane, read as one instrument.

    Parameters
    ----------
    cup, vane : PointSensor or DiscSensor
        What reads the speed, and what reads the direction; names given to them are not used, nor
        is what they say that they read.
    name : str, optional
        What tables and pictures call it; by default its kind and its place in the table.

    Raises
    ------
    ob.InputError
        If the cup or the vane is no point or disc, or the name cannot be used.

    Examples
    --------
    >>> import offbody as ob
    >>> mast = ob.solve(ob.circle(0.3))
    >>> pair = ob.CupAndVane(ob.DiscSensor((0.0, 2.0), 0.1), ob.PointSensor(0.0, 1.0))
    >>> table = ob.survey(mast, pair, directions=[45.0])
    >>> table.speed_ratio.round(4), table.direction_error.round(2)
    (array([[1.]]), array([[-1.29]]))
    """

    cup: PointSensor | DiscSensor
    vane: PointSensor | DiscSensor
    name: str | None = None

    kind: ClassVar[str] = "cup and vane"
    reads: ClassVar[str] = "both"

    def __post_init__(self):
        for field in ("cup", "vane"):
            if not isinstance(getattr(self, field), PointSensor | DiscSensor):
                raise InputError(
                    f"{field} must be a PointSensor or a DiscSensor, got {getattr(self, field)!r}"
                )
        _check_name(self.name)

    @property
    def averages_speed(self):
        """Whether the cup is a disc."""
        return self.cup.averages_speed

    @property
    def centre(self):
        """The cup's place, (2,)."""
        return np.array(self.cup.centre)

    @cached_property
    def points(self):
        """Sample points of the cup, then of the vane, (m, 2)."""
        return np.concatenate([self.cup.points, self.vane.points])

    @cached_property
    def weights(self):
        """Shares of the cup, and none of the vane, (m,)."""
        return np.concatenate([self.cup.weights, 0.0 * self.vane.weights])

    @cached_property
    def heading(self):
        """Shares of the vane, and none of the cup, (m,)."""
        return np.concatenate([0.0 * self.cup.weights, self.vane.weights])

    @property
    def direct(self):
        """With ``turned``: the cup's mean vector, (m,)."""
        return self.weights

    @property
    def turned(self):
        """See ``direct``."""
        return np.zeros(self.weights.shape)

    def meets(self, wall):
        """Whether a closed wall, (n,) complex, comes within the cup or the vane."""
        return self.cup.meets(wall) or self.vane.meets(wall)

    def moved(self, x, y):
        """The same pair, both moved by x and y."""
        return replace(self, cup=self.cup.moved(x, y), vane=self.vane.moved(x, y))


@dataclass(frozen=True)
class WallPort:
    """The pressure at a port in the wall of a body.

    Parameters
    ----------
    body : int
        Which body of the model.
    arc_fraction : float
        Where along the wall: the arc length from the outline's first point, counter-clockwise,
        over the whole, from 0 to 1.
    name : str, optional
        What tables and pictures call it; by default its kind and its place in the table.

    Raises
    ------
    ob.InputError
        If the body is not an index, the fraction lies outside 0 to 1, or the name cannot be used.

    Examples
    --------
    >>> import offbody as ob
    >>> ob.WallPort(0, 0.25)
    WallPort(body=0, arc_fraction=0.25, name=None)
    """

    body: int
    arc_fraction: float
    name: str | None = None

    kind: ClassVar[str] = "port"
    reads: ClassVar[str] = "pressure"

    def __post_init__(self):
        if isinstance(self.body, bool) or not isinstance(self.body, int | np.integer):
            raise InputError(f"body must be the index of a body, got {self.body!r}")
        _settle(
            self,
            body=int(self.body),
            arc_fraction=as_number("arc_fraction", self.arc_fraction, least=0, greatest=1),
        )
        _check_name(self.name)


SENSORS = (
    PointSensor, PathSensor, CrossedPaths, DiscSensor, PitotTube, MultiHoleProbe, CupAndVane,
    WallPort,
)


def _settle(sensor, **fields):
    """Store validated fields in a frozen sensor under construction."""
    for field, value in fields.items():
        object.__setattr__(sensor, field, value)


def _pair(name, value):
    return tuple(as_point(name, value).tolist())


def _check_name(name):
    if name is not None and not (isinstance(name, str) and name.strip()):
        raise InputError(f"name must be a text that is not blank, or None, got {name!r}")


def _check_reads(reads):
    if reads not in READS:
        raise InputError(f"reads = {reads!r} is not known; {nearest_name(reads, READS)}")


def _hole_angles(angles):
    angles = as_reals("hole_angles", angles)
    if angles.ndim != 1 or not angles.size or not -90 < angles.min() < 0 < angles.max() < 90:
        raise InputError(
            f"hole_angles = {angles.tolist()}: give a list with at least one angle on either side "
            "of the axis, all between -90 and 90 degrees"
        )
    return tuple(angles.tolist())


def _as_paths(paths):
    given = list(paths) if isinstance(paths, list | tuple | np.ndarray) else [paths]
    if len(given) not in (2, 3):
        raise InputError(f"paths must be two or three paths, got {len(given)}")
    return tuple(_as_path(f"paths[{place}]", path) for place, path in enumerate(given))


def _as_path(name, path):
    if isinstance(path, PathSensor):
        return path
    try:
        start, end = path
    except (TypeError, ValueError):
        raise InputError(f"{name} must be a PathSensor or (start, end), got {path!r}") from None
    try:
        return PathSensor(start, end)
    except InputError as error:
        raise InputError(f"{name}: {error}") from None


@cache
def _gauss(count):
    """Gauss-Legendre points and weights on [0, 1]."""
    points, weights = np.polynomial.legendre.leggauss(count)
    return _locked((points + 1) / 2), _locked(weights / 2)


@cache
def _unit_disc():
    """Points and weights of a mean over the unit disc: Gauss in area, equal angles on each ring."""
    area, share = _gauss(DISC_RINGS)
    # Every other ring is turned by half a step, so that no radius carries all the points.
    steps = np.arange(DISC_ANGLES) + (np.arange(DISC_RINGS)[:, None] % 2) / 2
    rings = np.sqrt(area)[:, None] * np.exp(2j * np.pi * steps / DISC_ANGLES)
    points = np.stack([rings.real, rings.imag], axis=-1).reshape(-1, 2)
    return _locked(points), _locked(np.repeat(share / DISC_ANGLES, DISC_ANGLES))


def _locked(array):
    array.setflags(write=False)
    return array
