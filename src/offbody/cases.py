"""Case files: what stands in the stream, what measures it, and which winds to survey.

A case is a TOML file. Every key, with [] round what may be left out:

    [title] = "text"             a heading for the summary and the pictures
    length_unit = "m"            m, cm, mm, km, ft or in: the unit of EVERY length in the file

    [stream]
    bearings = "all"             where the wind comes FROM, clockwise from north (north is +y); or
    directions = "all"           where the stream goes TO, counter-clockwise from +x
                                 "all" is every degree (between walls: both ways along x); else
                                 a step, a list, or { from = 200, to = 280, step = 2 }
    [prevailing_bearing]         one, or a list: the winds that the pictures show
    [speed], [speed_unit]        of the undisturbed stream; only ever printed

    [climate]                    how often the wind blows from where: weights for the mounts
    bearings, frequencies        the middles of the sectors, and a number for each, in any unit

    [surroundings]               left out: an open stream
    kind                         "open"
                                 "ground"     [y], its height, 0 if left out
                                 "duct"       lower, upper: the heights of its walls
                                 "row"        pitch: copies of the bodies along y, without end

    [[body]]
    shape                        "circle"     diameter, [centre]
                                 "ellipse"    length, thickness, [centre], [turned]
                                 "rectangle"  width (along x), depth (along y), corner_radius,
                                              [centre], [turned]
                                 "polygon"    points, corner_radius, [turned], [moved]
                                 "section"    code (four digits), chord, [nose], [turned]
                                 "points"     file or points, [corner_radius] or [sharp],
                                              [scaled], [turned], [moved]
    [name]                       "body 1", "body 2" ... if left out
    [drag_coefficient]           a number, or { bearings = [...], values = [...] }
    [drag_reference]             the length it refers to; left out: the breadth across the stream
    [circulation]                per unit speed of the stream, counter-clockwise positive
    [axis]                       where booms count from; left out: the middle of the body

    [[bracing]]                  lattice members of one face, as drag spread along it
    between                      the names of two bodies, from wall to wall on the line that joins
                                 their axes; or start and end
    drag_coefficient             per length of the face in a stream square to it: the share of the
                                 face that members cover, times the drag coefficient of these
    [name]                       "bracing 1", "bracing 2" ... if left out

    [[sensor]]
    kind                         "point"         reads, a position
                                 "disc"          reads, radius, a position (its centre)
                                 "path"          start and end; or path_length, path_bearing, a
                                                 position (its middle)
                                 "crossed_paths" paths = [{ start, end }, ...]; or path_length,
                                                 path_bearings, a position (their middle)
                                 "cup_and_vane"  cup = { [radius], a position }, vane likewise
                                 "pitot_tube"    a position (its nose), nose_bearing,
                                                 [static_behind], [greatest_yaw]
                                 "multi_hole_probe"  a position (its tip), nose_bearing,
                                                 hole_angles, counter-clockwise from its axis
                                 "wall_port"     body, arc_fraction
    [name]                       "sensor 1", "sensor 2" ... if left out
    reads                        "speed", "direction" or "both"
    a position                   x and y; or a boom:
    boom = { [body], bearing, length, from = "axis" or "face", [offset], [diameter], [height],
             [drag_coefficient] }
                                 bearing: where the boom points, seen from the body;
                                 offset: of the instrument to the left of the boom's end;
                                 diameter, height: of a tubular boom, and of the instrument above
                                 its axis, for the boom's own part; body may be left out where
                                 there is only one

    [panels]                     left out: laid by the library
    [count]                      one number, or one per body
    [order]                      1 to 16

    [field]                      the region of the pictures and of the dense grid
    [x], [y]                     [from, to], both; left out: round the bodies and the sensors
    [spacing] or [points]        one length (rounded to divide the region), or how many lines:
                                 [along x, along y]
    [bearing]                    one, or a list; left out: the prevailing wind, else the worst

    [uncertainty]                tolerances, for the budget in the report; each of them is
                                 { within = 0.02 }: anywhere up to that far either way, or
                                 { standard = 0.01 }: normal, by its standard uncertainty;
                                 with the unit in the key where it is no length
    [boom_length], [position]    { within } or { standard }, in the unit of length
    [boom_angle], [alignment], [direction_calibration], [model_direction]
                                 { within_degrees } or { standard_degrees }
    [speed_calibration], [model_speed]
                                 { within_percent } or { standard_percent }

    [mounts]                     the search of `offbody mounts`, in one of
    reach = { [body], greatest, [least], [bearings] = [from, to] }
                                 booms of one length from the axis of a body: how long, and where
                                 they may point
    area = { points, [corner_radius] }
                                 places within a polygon
    stretch = { [body], [first], [last] }
                                 a stretch of wall for ports: arc fractions, counter-clockwise
    [carries]                    the names of sensors: what each mount is to carry, in its place;
                                 left out: a point that reads the speed
    [count]                      how many mounts share the winds, 1 to 3; 2: a pair of ports
    [bearings]                   the winds to serve, as in [stream]; left out: the same
    [limit]                      "mast" (1 percent of the speed), "boom" (0.5), or a number, 0.01
    [direction_limit]            degrees; [spacing] between mounts, [clearance] from walls
    [keep_out]                   polygons, each a list of points, where no sensor may stand
    [choices]                    how many to show

    [record]                     the columns of the sensors' record, for `offbody correct`; see
                                 ``offbody.records`` for its keys

``turned`` is in degrees, counter-clockwise: about the centre, the nose, or the origin of the
points. A case says its angles one way: with ``direction`` in place of ``bearing`` in every key,
or the other way round, never both. ``nose_bearing`` is where a nose points, ``nose_direction``
where a stream that meets it head on goes to. Tables in an error message count from one:
``body[2]`` is the second ``[[body]]``.
"""

import contextlib
import difflib
import os
import re
import tomllib
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import NamedTuple

import numpy as np
from scipy.optimize import brentq

import offbody as ob
from offbody.checks import as_count, as_number, as_point, as_points, as_reals, nearest_name
from offbody.errors import InputError
from offbody.records import read_settings
from offbody.surroundings import usual_directions

LENGTH_UNITS = ("m", "cm", "mm", "km", "ft", "in")
GRID_INTERVALS = 360  # along the longer side of the region, if the case does not say
MOST_NODES = 20_000_000
READINGS = ("speed", "direction", "both")

# As in "in the lee of bracing 0".
_COUNTED_BRACING = re.compile(r"\bbracing (?P<number>\d+)$")
# As in "the lee of body 0", "body 0 (circle ...)" and "bodies 0 (circle ...) and 1 (circle ...)".
_COUNTED_BODY = re.compile(r"\b(?:body |bodies |(?P<before>and ))(?P<number>\d+)(?= \(|$)")
_COUNTED_SENSOR = re.compile(r"\bsensors\[(\d+)\]")


@dataclass(frozen=True)
class Body:
    """One body of a case: its outline, and what the outline does not say."""

    name: str
    outline: object
    axis: complex
    wake: object
    circulation: float | None


class Mount(NamedTuple):
    """How a sensor is held: the polyline of its boom from its foot, and the boom's own section."""

    line: np.ndarray | None
    section: object


UNMOUNTED = Mount(None, None)


@dataclass(frozen=True)
class Region:
    """Where the dense grid and the pictures lie, and for which winds; None: to be chosen."""

    x: np.ndarray | None
    y: np.ndarray | None
    spacing: float | None
    points: tuple[int, int] | None
    angles: np.ndarray | None


@dataclass(frozen=True)
class Case:
    """A case as read: angles stay in the case's own convention, told by ``by_bearing``.

    ``climate`` holds the middles of the sectors and their shares of one; ``booms`` the polyline of
    each sensor's boom, from its foot, and ``boom_sections`` its ``ob.Boom``, or None.
    """

    file: str
    entries: dict = field(repr=False)
    title: str
    length_unit: str
    speed: float | None
    speed_unit: str | None
    by_bearing: bool
    angles: np.ndarray = field(repr=False)
    prevailing: np.ndarray | None
    climate: tuple | None
    surroundings: object
    bodies: tuple[Body, ...]
    bracings: dict
    sensors: tuple
    booms: tuple
    boom_sections: tuple
    panels: object
    order: int | None
    region: Region
    tolerances: dict
    mounts: dict | None = field(repr=False)
    text: str = field(repr=False)

    def directions(self, angles):
        """Directions of the stream for angles in the case's own convention."""
        return ob.from_bearing(angles) if self.by_bearing else angles

    def speed_in_words(self, before):
        """The undisturbed speed after a separator, or nothing where it is not given."""
        return f"{before}undisturbed speed {self.speed:g} {self.speed_unit}" if self.speed else ""

    def in_its_names(self, sentence):
        """A sentence of the library, which counts from zero, in the case's own names."""
        sentence = _COUNTED_SENSOR.sub(lambda found: f"sensor[{int(found[1]) + 1}]", sentence)
        sentence = _COUNTED_BRACING.sub(
            lambda found: list(self.bracings)[int(found["number"])], sentence
        )
        return _COUNTED_BODY.sub(
            lambda found: (found["before"] or "") + self.bodies[int(found["number"])].name, sentence
        )

    def solve(self):
        """The solved model of the case's bodies in their surroundings."""
        with _located(self.file, self.in_its_names):
            return ob.solve(
                [body.outline for body in self.bodies],
                surroundings=self.surroundings,
                panels=self.panels,
                order=self.order,
                circulation=[body.circulation for body in self.bodies],
                wakes=[body.wake for body in self.bodies],
                bracings=tuple(self.bracings.values()),
            )

    def survey(self, model):
        """The survey of the case's sensors for the case's winds."""
        if not self.sensors:
            raise InputError(f"{self.file}: sensor: missing; a survey needs a [[sensor]]")
        with _located(self.file, self.in_its_names):
            kind = "bearings" if self.by_bearing else "directions"
            angles = {kind: self.angles}
            return ob.survey(model, self.sensors, booms=self.boom_sections, **angles)

    def best_mounts(self, model):
        """What the search of the case's [mounts] finds."""
        if self.mounts is None:
            raise InputError(f"{self.file}: mounts: missing; say in a [mounts] table where to seek")
        kind = "bearings" if self.by_bearing else "directions"
        asked = {kind: self.angles} | self.mounts
        if self.climate is not None:
            asked["weights"] = dict(zip(*(each.tolist() for each in self.climate), strict=True))
        with _located(f"{self.file}: mounts", self.in_its_names):
            return ob.best_mounts(model, **asked)

    @property
    def unstated_tolerances(self):
        """The tolerances that the case leaves out, in words."""
        return [name.replace("_", " ") for name in _TOLERANCES if name not in self.tolerances]

    def uncertainty(self, table):
        """What the case's tolerances make of its survey, or None where it states none."""
        if not self.tolerances:
            return None
        booms = {
            sensor.name: boom[0]
            for sensor, boom in zip(self.sensors, self.booms, strict=True)
            if boom is not None
        }
        given = {
            name: dict.fromkeys(booms, tolerance) if name in _OF_BOOMS else tolerance
            for name, tolerance in self.tolerances.items()
        }
        with _located(self.file, self.in_its_names):
            return ob.uncertainty(table, boom_foot=booms, **given)

    def grid_lines(self, model, winds=1):
        """The lines (x, y) of the dense grid: as the case says, or round bodies and sensors."""
        (x0, x1), (y0, y1) = self._box(model)
        if self.region.points:
            along_x, along_y = self.region.points
        else:
            spacing = self.region.spacing or max(x1 - x0, y1 - y0) / GRID_INTERVALS
            along_x, along_y = (
                1 + max(1, round(min(side / spacing, MOST_NODES))) for side in (x1 - x0, y1 - y0)
            )
        if along_x * along_y * winds > MOST_NODES:
            raise InputError(
                f"{self.file}: field: {along_x} by {along_y} nodes, winds: {winds}, are more than "
                f"{MOST_NODES} in all; widen the spacing, or show fewer winds"
            )
        return np.linspace(x0, x1, along_x), np.linspace(y0, y1, along_y)

    def _box(self, model):
        """The region as ranges of x and of y."""
        if self.region.x is not None:
            return self.region.x, self.region.y
        xmin, xmax, ymin, ymax = model.extent
        places = [sensor.points for sensor in self.sensors if sensor.kind != "port"]
        places = np.concatenate([[[xmin, ymin], [xmax, ymax]], *places])
        low, high = places.min(axis=0), places.max(axis=0)
        size = max(high - low)
        # A body alone is seen with its own size all round; a long row of things is not a strip.
        margin = 0.2 * size + max(xmax - xmin, ymax - ymin) * (0.8 if not self.sensors else 0.3)
        lean = np.maximum(0.3 * size - (high - low) / 2, 0.0)
        low, high = low - margin - lean, high + margin + lean
        # Walls are where the region ends, if they are not far off.
        walls = self.surroundings.walls
        if walls and walls[0] > low[1] - size:
            low[1] = walls[0]
        if len(walls) > 1 and walls[1] < high[1] + size:
            high[1] = walls[1]
        return np.stack([low, high], axis=-1)


def read_case(path, entries=None):
    """The case that a TOML file describes.

    Parameters
    ----------
    path : str or path-like
        The case file; see the head of this module for its keys.
    entries : dict, optional
        What the file would hold, in place of it: plain numbers, texts, lists and dicts. The path is
        then only what messages name, and what paths within the case are relative to.

    Returns
    -------
    Case

    Raises
    ------
    ob.InputError
        For a file that is missing, not UTF-8 or not TOML, and for a key that is missing,
        unknown or of the wrong kind: with the file, the key and what was expected.

    Examples
    --------
    >>> from importlib import resources
    >>> with resources.as_file(resources.files("offbody") / "demo.toml") as path:
    ...     case = read_case(path)
    >>> [sensor.name for sensor in case.sensors]
    ['cup', 'propeller vane', 'sonic']
    """
    reading = _Reading(Path(path))
    text, entries = read_entries(Path(path)) if entries is None else ("", entries)
    top = _Table(reading, "", entries)
    title = top.text("title", Path(path).stem)
    length_unit = top.choice("length_unit", LENGTH_UNITS)
    reading.surroundings = _surroundings(top.table("surroundings", optional=True))
    angles, prevailing, speed, speed_unit = _stream(top.table("stream"))
    bodies = _bodies(top)
    climate = _climate(top.table("climate")) if top.has("climate") else None
    bracings = _bracings(top, bodies)
    sensors, mounts = _sensors(top, bodies)
    booms, boom_sections = zip(*mounts, strict=True) if mounts else ((), ())
    panels, order = _panels(top.table("panels", optional=True), len(bodies))
    region = _region(top.table("field", optional=True))
    tolerances = _tolerances(top.table("uncertainty", optional=True), booms)
    wanted = _mounts(top.table("mounts"), bodies, sensors) if top.has("mounts") else None
    if top.has("record"):
        with _located(reading.file):
            read_settings(top.entries["record"], reading.by_bearing)
    top.close()
    return Case(
        file=os.fspath(path),
        entries=top.entries,
        title=title,
        length_unit=length_unit,
        speed=speed,
        speed_unit=speed_unit,
        by_bearing=reading.by_bearing,
        angles=angles,
        prevailing=prevailing,
        climate=climate,
        surroundings=reading.surroundings,
        bodies=bodies,
        bracings=bracings,
        sensors=sensors,
        booms=booms,
        boom_sections=boom_sections,
        panels=panels,
        order=order,
        region=region,
        tolerances=tolerances,
        mounts=wanted,
        text=text,
    )


def read_entries(path):
    """The text of a case file, and its bare TOML."""
    try:
        raw = path.read_bytes()
    except FileNotFoundError:
        raise InputError(f"{path}: no such case file{_neighbour(path)}") from None
    except OSError as error:
        raise InputError(f"{path}: cannot read the case file: {error.strerror}") from None
    try:
        text = raw.decode("utf-8-sig")
        return text, tomllib.loads(text)
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        raise InputError(f"{path}: line {line}: not UTF-8; save the file as UTF-8") from None
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"{path}: not valid TOML: {error}") from None


def _neighbour(path):
    """A hint at the file of nearly the same name beside a missing one, or nothing."""
    try:
        beside = [entry.name for entry in path.parent.iterdir()]
    except OSError:
        return ""
    close = difflib.get_close_matches(path.name, beside, n=1, cutoff=0.6)
    return f"; did you mean {str(path.parent / close[0])!r}?" if close else ""


@contextlib.contextmanager
def _located(place, worded=str):
    """Put the place in the case file in front of the library's own complaints."""
    try:
        yield
    except InputError as error:
        raise InputError(f"{place}: {worded(str(error))}") from None


def _strangers(value):
    """What is no number in a list, or in the lists within it."""
    if isinstance(value, list):
        for entry in value:
            yield from _strangers(entry)
    elif isinstance(value, bool) or not isinstance(value, (int, float)):
        yield value


class _Reading:
    """What the tables of one case share: its file, its surroundings, how its angles are said."""

    def __init__(self, file):
        self.file = file
        self.surroundings = None
        self.by_bearing = None
        self.first_angle = None

    def settle(self, place, by_bearing):
        """Note the first angle's convention, and refuse any later angle of the other one."""
        if self.by_bearing is None:
            self.by_bearing, self.first_angle = by_bearing, place
        elif self.by_bearing != by_bearing:
            words = "bearing", "direction"
            this, other = words if by_bearing else words[::-1]
            raise InputError(
                f"{self.file}: {place}: a {this} in a case that gives {self.first_angle}, a "
                f"{other}; say every angle of a case one way"
            )

    def directions(self, angles):
        """Directions of the stream for angles in the case's own convention."""
        return ob.from_bearing(angles) if self.by_bearing else angles

    def heading(self, angle):
        """The unit vector, as a complex number, that points along a bearing or direction."""
        return np.exp(1j * np.radians(90.0 - angle if self.by_bearing else angle))


class _Table:
    """One table of the case. It notes each key that is asked for, so the rest are unknown."""

    def __init__(self, reading, path, entries):
        self.reading = reading
        self.path = path
        self.entries = entries
        self.asked = set()

    def key_path(self, key):
        return f"{self.path}.{key}" if self.path else key

    def place(self, key):
        return f"{self.reading.file}: {self.key_path(key)}"

    def error(self, key, complaint):
        return InputError(f"{self.place(key)}: {complaint}")

    def located(self):
        """Library complaints inside this block are about this table."""
        return _located(f"{self.reading.file}: {self.path}")

    def has(self, key):
        self.asked.add(key)
        return key in self.entries

    def missing(self, expected, *keys):
        """The error for a missing key, or for the misspelt one that was meant for it."""
        for unread in self.entries.keys() - self.asked:
            if meant := difflib.get_close_matches(unread, keys, n=1, cutoff=0.75):
                return self.error(unread, f"unknown key; did you mean {meant[0]!r}?")
        return self.error(" or ".join(keys), f"missing; expected {expected}")

    def take(self, key, expected):
        if not self.has(key):
            raise self.missing(expected, key)
        return self.entries[key]

    def close(self):
        """Refuse what nobody asked for."""
        for key in self.entries:
            if key not in self.asked:
                raise self.error(key, f"unknown key; {nearest_name(key, self.asked)}")

    def number(self, key, *default, **limits):
        if default and not self.has(key):
            return default[0]
        return as_number(self.place(key), self.take(key, "a number"), **limits)

    def numbers(self, key, expected):
        """A list, or a list of lists, in which there are numbers and nothing else."""
        value = self.take(key, expected)
        for stranger in _strangers(value):
            raise self.error(key, f"expected {expected}, got {stranger!r}")
        return value

    def text(self, key, *default):
        if default and not self.has(key):
            return default[0]
        value = self.take(key, "a text in quotes")
        if not isinstance(value, str) or not value.strip():
            raise self.error(key, f"expected a text in quotes, got {value!r}")
        return value

    def choice(self, key, known, *default):
        if default and not self.has(key):
            return default[0]
        value = self.take(key, "one of " + ", ".join(repr(word) for word in known))
        if value not in known:
            raise self.error(key, f"{value!r} is not known; {nearest_name(value, known)}")
        return value

    def point(self, key, *default):
        if default and not self.has(key):
            return default[0]
        return as_point(self.place(key), self.numbers(key, "a point [x, y]"))

    def points(self, key):
        value = as_points(self.place(key), self.numbers(key, "points [[x, y], ...]"))
        if value.ndim != 2:
            raise self.error(key, "expected points [[x, y], ...]")
        return value

    def span(self, key):
        """A range [from, to] that runs upward."""
        value = as_reals(self.place(key), self.numbers(key, "a range [from, to]"))
        if value.shape != (2,) or value[0] >= value[1]:
            raise self.error(key, f"expected a range [from, to] that runs upward, got "
                                  f"{self.entries[key]!r}")
        return value

    def table(self, key, optional=False):
        """A sub-table; an empty one where it is optional and left out."""
        if optional and not self.has(key):
            return _Table(self.reading, self.key_path(key), {})
        value = self.take(key, f"a table [{key}]")
        if not isinstance(value, dict):
            raise self.error(key, f"expected a table, got {value!r}")
        return _Table(self.reading, self.key_path(key), value)

    def tables(self, key):
        """The sub-tables of an array of tables, counted from one in messages."""
        if not self.has(key):
            return []
        value = self.entries[key]
        if not isinstance(value, list) or not all(isinstance(entry, dict) for entry in value):
            raise self.error(key, f"expected an array of tables; write [[{key}]] above each")
        return [
            _Table(self.reading, f"{self.key_path(key)}[{number}]", entry)
            for number, entry in enumerate(value, start=1)
        ]

    def angle_key(self, pattern, expected, optional=False):
        """Whichever of the two names of an angle the case uses, or None if left out."""
        names = [pattern.format(word) for word in ("bearing", "direction")]
        given = [name for name in names if self.has(name)]
        if len(given) == 2:
            raise self.error(
                given[1], f"given beside {given[0]!r}; say every angle of a case one way"
            )
        if not given:
            if optional:
                return None
            raise self.missing(expected, *names)
        self.reading.settle(self.key_path(given[0]), by_bearing=given[0] == names[0])
        return given[0]

    def angle(self, pattern="{}", optional=False):
        """One angle in degrees, in the case's own convention."""
        key = self.angle_key(pattern, "an angle in degrees", optional)
        return None if key is None else self.number(key, least=-360.0, greatest=360.0)

    def wind(self, pattern, optional=False):
        """Angles of the stream, a list or one, which the surroundings must admit."""
        key = self.angle_key(pattern, "an angle in degrees, or a list", optional)
        if key is None:
            return None
        if isinstance(self.entries[key], list):
            return self.admitted(key, self.angle_list(key))
        return self.admitted(key, np.array([self.angle(pattern)]))

    def admitted(self, key, angles):
        """The same angles, if the surroundings admit a stream from there."""
        try:
            self.reading.surroundings.admit(self.reading.directions(angles))
        except InputError as error:
            mend = " (bearing 270 or 90)" if self.reading.by_bearing else ""
            raise self.error(key, f"{error}{mend}") from None
        return angles

    def angle_list(self, key):
        """A list of different angles in degrees."""
        value = as_reals(self.place(key), self.numbers(key, "a list of angles in degrees"))
        if value.ndim != 1 or not value.size:
            raise self.error(key, "expected a list of angles in degrees")
        if np.abs(value).max() > 360.0:
            raise self.error(key, f"angles run from -360 to 360 degrees, got {value.tolist()}")
        if len(np.unique(value % 360.0)) < value.size:
            raise self.error(key, "the same angle is given twice")
        return value


def _surroundings(section):
    kind = section.choice("kind", tuple(_SURROUNDINGS), "open")
    make, sizes = _SURROUNDINGS[kind]
    given = [section.number(key, *default) for key, *default in sizes]
    section.close()
    with section.located():
        return make(*given)


# By kind: what it makes, of which numbers, with what each is if left out.
_SURROUNDINGS = {
    "open": (ob.OpenStream, ()),
    "ground": (ob.Ground, (("y", 0.0),)),
    "duct": (ob.Duct, (("lower",), ("upper",))),
    "row": (ob.Row, (("pitch",),)),
}


def _stream(section):
    key = section.angle_key("{}s", 'angles: "all", a step, a list or { from, to, step }')
    angles = section.admitted(key, _angles(section, key))
    prevailing = section.wind("prevailing_{}", optional=True)
    speed = speed_unit = None
    if section.has("speed") or section.has("speed_unit"):
        speed = section.number("speed", positive=True)
        speed_unit = section.text("speed_unit")
    section.close()
    return angles, prevailing, speed, speed_unit


def _climate(section):
    """The middles of the sectors, and their shares."""
    key = section.angle_key("{}s", "a list of angles in degrees")
    angles = section.angle_list(key)
    given = section.numbers("frequencies", "a list of numbers")
    frequencies = as_reals(section.place("frequencies"), given)
    section.close()
    if frequencies.shape != angles.shape:
        raise section.error("frequencies", f"expected {angles.size} numbers, one for each of {key}")
    if frequencies.min() < 0 or frequencies.sum() == 0:
        raise section.error("frequencies", f"expected none below zero, and not all zero: {given}")
    return angles, frequencies / frequencies.sum()


def _angles(section, key):
    value = section.entries[key]
    if isinstance(value, str):
        section.choice(key, ("all",))
        directions = usual_directions(section.reading.surroundings)
        return np.sort(ob.to_bearing(directions)) if section.reading.by_bearing else directions
    if isinstance(value, dict):
        return _angle_range(section.table(key))
    if isinstance(value, list):
        return section.angle_list(key)
    step = section.number(key, positive=True)
    count = round(360.0 / step)
    if count < 1 or abs(count * step - 360.0) > 1e-9 * 360.0:
        raise section.error(key, f"a step must divide 360 degrees evenly, got {value!r}")
    return np.arange(count) * (360.0 / count)


def _angle_range(section):
    """From one angle to another, both included, the short way or over 360 as the step says."""
    start = section.number("from", least=-360.0, greatest=360.0)
    stop = section.number("to", least=-360.0, greatest=360.0)
    step = section.number("step", positive=True)
    section.close()
    sweep = stop - start if stop > start else stop - start + 360.0
    if sweep > 360.0:
        raise section.error("to", f"{start:g} to {stop:g} is more than a full turn")
    # The slack keeps the last angle where the step, not exact in binary, just overshoots it.
    angles = (start + np.arange(np.floor(sweep / step + 1e-9) + 1) * step) % 360.0
    return angles[:-1] if len(angles) > 1 and angles[-1] == angles[0] else angles


def _bodies(top):
    sections = top.tables("body")
    if not sections:
        raise top.missing("at least one [[body]]", "body")
    bodies = tuple(_body(section, number) for number, section in enumerate(sections, start=1))
    _refuse_namesakes(sections, [body.name for body in bodies])
    return bodies


def _refuse_namesakes(sections, names):
    for place, (section, name) in enumerate(zip(sections, names, strict=True)):
        if name in names[:place]:
            raise section.error("name", f"{name!r} is given twice; names must differ")


def _body(section, number):
    shape = section.choice("shape", tuple(_SHAPES))
    name = section.text("name", f"body {number}")
    axis = section.point("axis", None)
    circulation = section.number("circulation", None)
    wake = _wake(section)
    outline, middle = _SHAPES[shape](section)
    if axis is None:
        axis = _centroid(outline) if middle is None else middle
    return Body(name, outline, complex(*axis), wake, circulation)


def _wake(section):
    if not section.has("drag_coefficient"):
        if section.has("drag_reference"):
            raise section.missing("a number, beside drag_reference", "drag_coefficient")
        return None
    reference = section.number("drag_reference", None, positive=True)
    value = section.entries["drag_coefficient"]
    if isinstance(value, dict):
        drag_coefficient = _drag_table(section.table("drag_coefficient"))
    else:
        drag_coefficient = section.number("drag_coefficient", least=0.0)
    with section.located():
        return ob.Wake(drag_coefficient, reference=reference)


def _drag_table(section):
    """The drag coefficients as ``ob.Wake`` takes them, against the stream's direction."""
    key = section.angle_key("{}s", "a list of angles in degrees")
    angles = section.angle_list(key)
    values = as_reals(section.place("values"), section.numbers("values", "a list of numbers"))
    section.close()
    if values.shape != angles.shape:
        raise section.error("values", f"expected {angles.size} numbers, one for each of {key}")
    return dict(zip(section.reading.directions(angles).tolist(), values.tolist(), strict=True))


def _placed(section, key="centre"):
    """Where a shape stands and how it is turned there, once nothing unknown is left over."""
    place, turned = section.point(key, np.zeros(2)), section.number("turned", 0.0)
    section.close()
    return place, turned


def _circle(section):
    diameter = section.number("diameter", positive=True)
    centre = section.point("centre", np.zeros(2))
    section.close()
    with section.located():
        return ob.circle(diameter, centre), centre


def _ellipse(section):
    length = section.number("length", positive=True)
    thickness = section.number("thickness", positive=True)
    centre, turned = _placed(section)
    with section.located():
        return ob.ellipse(length, thickness, centre, turned), centre


def _rectangle(section):
    width = section.number("width", positive=True)
    depth = section.number("depth", positive=True)
    corner_radius = section.number("corner_radius", positive=True)
    centre, turned = _placed(section)
    corners = np.array([[-width, -depth], [width, -depth], [width, depth], [-width, depth]]) / 2
    with section.located():
        drawn = ob.polygon(corners, corner_radius)
    kind = f"rectangle {width:g} by {depth:g} with corner radius {corner_radius:g}"
    return replace(drawn, kind=kind).turned(turned).moved(*centre), centre


def _polygon(section):
    points = section.points("points")
    corner_radius = section.number("corner_radius", positive=True)
    place, turned = _placed(section, "moved")
    with section.located():
        return ob.polygon(points, corner_radius).turned(turned).moved(*place), None


def _section(section):
    code = section.text("code")
    chord = section.number("chord", positive=True)
    nose, turned = _placed(section, "nose")
    with section.located():
        return ob.four_digit(code, chord).turned(turned).moved(*nose), None


def _points(section):
    path = _outline_file(section) if section.has("file") else None
    points = None if path else section.points("points")
    corner_radius = section.number("corner_radius", None, positive=True)
    sharp = as_count(section.place("sharp"), section.entries["sharp"], least=0) if (
        section.has("sharp")) else None
    scaled = section.number("scaled", 1.0, positive=True)
    place, turned = _placed(section, "moved")
    if corner_radius is not None and sharp is not None:
        raise section.error("sharp", "given beside 'corner_radius'; an outline has one or none")
    with section.located():
        if path:
            drawn = ob.read_outline(path, corner_radius=corner_radius, sharp=sharp)
        elif corner_radius is not None:
            drawn = ob.polygon(points, corner_radius)
        else:
            drawn = ob.outline(points, sharp=sharp)
        return drawn.scaled(scaled).turned(turned).moved(*place), None


def _outline_file(section):
    """The path of a file of points, which the case names relative to itself."""
    if section.has("points"):
        raise section.error("points", "given beside 'file'; give the one or the other")
    path = section.reading.file.parent / section.text("file")
    if not path.is_file():
        raise section.error("file", f"no such file {str(path)!r}{_neighbour(path)}")
    return path


_SHAPES = {
    "circle": _circle,
    "ellipse": _ellipse,
    "rectangle": _rectangle,
    "polygon": _polygon,
    "section": _section,
    "points": _points,
}


def _centroid(outline):
    """The centre of the area, to about a millionth of the size: a polygon's own formula."""
    x, y = outline.points(4000).T
    next_x, next_y = np.roll(x, -1), np.roll(y, -1)
    cross = x * next_y - next_x * y
    return np.array([np.sum((x + next_x) * cross), np.sum((y + next_y) * cross)]) / (
        3.0 * np.sum(cross)
    )


def _bracings(top, bodies):
    """{name: bracing} of all faces."""
    sections = top.tables("bracing")
    names = [section.text("name", f"bracing {n}") for n, section in enumerate(sections, start=1)]
    _refuse_namesakes(sections, names)
    faces = [_bracing(section, bodies) for section in sections]
    return dict(zip(names, faces, strict=True))


def _bracing(section, bodies):
    drag_coefficient = section.number("drag_coefficient", least=0.0)
    if section.has("between"):
        start, end = _between(section, bodies)
    else:
        start, end = section.point("start"), section.point("end")
    section.close()
    with section.located():
        return ob.Bracing(start, end, drag_coefficient)


def _between(section, bodies):
    """The places on two walls where the line that joins the axes leaves the bodies."""
    names = [body.name for body in bodies]
    pair = section.entries["between"]
    if not isinstance(pair, list) or len(pair) != 2 or pair[0] == pair[1]:
        raise section.error("between", f"expected the names of two bodies, got {pair!r}")
    for name in pair:
        if name not in names:
            raise section.error("between", f"{name!r} is no body; {nearest_name(name, names)}")
    one, other = (bodies[names.index(name)] for name in pair)
    heading = (other.axis - one.axis) / abs(other.axis - one.axis)
    start = one.axis + heading * _depth_of_wall(section, "between", one, heading)
    end = other.axis - heading * _depth_of_wall(section, "between", other, -heading)
    return (start.real, start.imag), (end.real, end.imag)


def _sensors(top, bodies):
    sections = top.tables("sensor")
    mounted = [_sensor(section, bodies, n) for n, section in enumerate(sections, start=1)]
    _refuse_namesakes(sections, [sensor.name for sensor, _ in mounted])
    return tuple(sensor for sensor, _ in mounted), [mount for _, mount in mounted]


def _sensor(section, bodies, number):
    """A sensor, and its mount: the polyline of its boom and the boom's section, or None each."""
    kind = section.choice("kind", tuple(_KINDS))
    name = section.text("name", f"sensor {number}")
    return _KINDS[kind](section, bodies, name)


def _point_sensor(section, bodies, name):
    reads = section.choice("reads", READINGS)
    (x, y), boom = _position(section, bodies)
    section.close()
    with section.located():
        return ob.PointSensor(x, y, name=name, reads=reads), boom


def _disc_sensor(section, bodies, name):
    reads = section.choice("reads", READINGS)
    radius = section.number("radius", positive=True)
    centre, boom = _position(section, bodies)
    section.close()
    with section.located():
        return ob.DiscSensor(centre, radius, name=name, reads=reads), boom


def _path_sensor(section, bodies, name):
    if section.has("start") or section.has("end"):
        start, end = section.point("start"), section.point("end")
        section.close()
        with section.located():
            return ob.PathSensor(start, end, name=name), UNMOUNTED
    length = section.number("path_length", positive=True)
    angle = section.angle("path_{}")
    middle, boom = _position(section, bodies)
    section.close()
    with section.located():
        return ob.PathSensor(*_path(section, middle, length, angle), name=name), boom


def _crossed_paths(section, bodies, name):
    if section.has("paths"):
        ends = []
        for path in section.tables("paths"):
            ends.append((path.point("start"), path.point("end")))
            path.close()
        boom = UNMOUNTED
    else:
        length = section.number("path_length", positive=True)
        angles = section.angle_list(section.angle_key("path_{}s", "a list of angles in degrees"))
        middle, boom = _position(section, bodies)
        ends = [_path(section, middle, length, angle) for angle in angles]
    section.close()
    with section.located():
        return ob.CrossedPaths([ob.PathSensor(*pair) for pair in ends], name=name), boom


def _path(section, middle, length, angle):
    heading = section.reading.heading(angle)
    half = np.array([heading.real, heading.imag]) * length / 2.0
    return middle - half, middle + half


def _cup_and_vane(section, bodies, name):
    cup, cup_mount = _half_of_pair(section.table("cup"), bodies)
    vane, vane_mount = _half_of_pair(section.table("vane"), bodies)
    section.close()
    if vane_mount.section is not None:
        raise section.error(
            "vane.boom.diameter", "the boom's own part counts for the cup; leave it out here"
        )
    lines = [mount.line for mount in (cup_mount, vane_mount) if mount.line is not None]
    if len(lines) == 2:
        lines.insert(1, lines[0][::-1])  # one line: out to the cup, back, and out to the vane
    line = np.concatenate(lines) if lines else None
    with section.located():
        return ob.CupAndVane(cup, vane, name=name), Mount(line, cup_mount.section)


def _half_of_pair(section, bodies):
    radius = section.number("radius", None, positive=True)
    place, mount = _position(section, bodies)
    section.close()
    with section.located():
        return ob.PointSensor(*place) if radius is None else ob.DiscSensor(place, radius), mount


def _pitot_tube(section, bodies, name):
    axis = section.reading.directions(section.angle("nose_{}"))
    behind = section.number("static_behind", 0.0, least=0.0)
    yaw = {"greatest_yaw": section.number("greatest_yaw", positive=True, greatest=90.0)} if (
        section.has("greatest_yaw")) else {}
    (x, y), mount = _position(section, bodies)
    section.close()
    with section.located():
        return ob.PitotTube(x, y, float(axis), behind, name=name, **yaw), mount


def _multi_hole_probe(section, bodies, name):
    axis = section.reading.directions(section.angle("nose_{}"))
    hole_angles = section.numbers("hole_angles", "a list of angles in degrees")
    (x, y), mount = _position(section, bodies)
    section.close()
    with section.located():
        return ob.MultiHoleProbe(x, y, float(axis), hole_angles, name=name), mount


def _wall_port(section, bodies, name):
    body = _index_of_body(section, bodies)
    arc_fraction = section.number("arc_fraction", least=0.0, greatest=1.0)
    section.close()
    with section.located():
        return ob.WallPort(body, arc_fraction, name=name), UNMOUNTED


_KINDS = {
    "point": _point_sensor,
    "disc": _disc_sensor,
    "path": _path_sensor,
    "crossed_paths": _crossed_paths,
    "cup_and_vane": _cup_and_vane,
    "pitot_tube": _pitot_tube,
    "multi_hole_probe": _multi_hole_probe,
    "wall_port": _wall_port,
}


def _index_of_body(section, bodies):
    names = [body.name for body in bodies]
    if len(names) == 1 and not section.has("body"):
        return 0
    return names.index(section.choice("body", names))


def _position(section, bodies):
    """Where a sensor stands, and its mount."""
    if not section.has("boom"):
        if not (section.has("x") or section.has("y")):
            raise section.missing("a position: x and y, or a boom", "boom", "x", "y")
        return np.array([section.number("x"), section.number("y")]), UNMOUNTED
    for key in ("x", "y"):
        if section.has(key):
            raise section.error(key, "given beside 'boom'; a position is said one way")
    boom = section.table("boom")
    body = bodies[_index_of_body(boom, bodies)]
    angle = boom.angle()
    heading = section.reading.heading(angle)
    length = boom.number("length", positive=True)
    origin = boom.choice("from", ("axis", "face"))
    offset = boom.number("offset", 0.0)
    across = _boom_section(boom, angle)
    boom.close()
    if origin == "face":
        length += _depth_of_wall(boom, "from", body, heading)
    tip = body.axis + length * heading
    place = tip + 1j * heading * offset
    line = np.array([body.axis, tip, place])
    return (
        np.array([place.real, place.imag]),
        Mount(np.stack([line.real, line.imag], axis=-1), across),
    )


def _boom_section(boom, angle):
    """The boom's own section, or None where the case does not give its diameter."""
    if not boom.has("diameter"):
        for key in ("height", "drag_coefficient"):
            if boom.has(key):
                raise boom.missing(f"a number, beside {key}", "diameter")
        return None
    diameter, height = (boom.number(key, positive=True) for key in ("diameter", "height"))
    drag_coefficient = boom.number("drag_coefficient", None, least=0.0)
    wake = None if drag_coefficient is None else ob.Wake(drag_coefficient)
    direction = 90.0 - angle if boom.reading.by_bearing else angle
    with boom.located():
        return ob.Boom(direction, height, diameter, wake)


def _depth_of_wall(section, key, body, heading):
    """How far from its axis a ray leaves a body."""

    def along(s):
        return (body.outline.position(np.asarray(s) % 1.0) - body.axis) / heading

    s = np.linspace(0.0, 1.0, 2001)
    below = along(s).imag < 0
    roots = [
        brentq(lambda s: along(s).imag, s[k], s[k + 1], xtol=1e-15)
        for k in np.flatnonzero(below[:-1] != below[1:])
    ]
    depths = [depth for depth in (float(along(root).real) for root in roots) if depth > 0]
    if len(depths) % 2 == 0:
        raise section.error(
            key,
            f'"{"face" if key == "from" else key}" needs an axis inside the body, and '
            f"({body.axis.real:g}, {body.axis.imag:g}) is outside {body.name!r}; give the body an "
            "axis, or count from elsewhere",
        )
    return min(depths)


def _panels(section, bodies):
    count = order = None
    if section.has("count"):
        value = section.entries["count"]
        if isinstance(value, list):
            if len(value) != bodies:
                raise section.error("count", f"expected one number per body, {bodies} in all")
            count = [as_count(section.place("count"), each, least=2) for each in value]
        else:
            count = as_count(section.place("count"), value, least=2)
    if section.has("order"):
        order = as_count(section.place("order"), section.entries["order"], least=1, greatest=16)
    section.close()
    return count, order


def _region(section):
    x = y = spacing = points = None
    if section.has("x") or section.has("y"):
        x, y = section.span("x"), section.span("y")
    if section.has("points"):
        if section.has("spacing"):
            raise section.error("points", "given beside 'spacing'; give the one or the other")
        value = section.entries["points"]
        if not isinstance(value, list) or len(value) != 2:
            raise section.error("points", f"expected [along x, along y], got {value!r}")
        points = tuple(as_count(section.place("points"), each, least=2) for each in value)
    else:
        spacing = section.number("spacing", None, positive=True)
    angles = section.wind("{}", optional=True)
    section.close()
    return Region(x, y, spacing, points, angles)


def _tolerances(section, booms):
    """The distributions by the names that ``ob.uncertainty`` has for them."""
    found = {
        name: _tolerance(section.table(name), *unit)
        for name, unit in _TOLERANCES.items()
        if section.has(name)
    }
    for name in _OF_BOOMS & found.keys():
        if not any(boom is not None for boom in booms):
            raise section.error(name, "no sensor has a boom; say 'position' in its place")
    section.close()
    return found


def _tolerance(section, unit, size):
    keys = {f"within{unit}": ob.Rectangular, f"standard{unit}": ob.Normal}
    given = [key for key in keys if section.has(key)]
    if not given:
        raise section.missing("a number", *keys)
    if len(given) == 2:
        raise section.error(given[1], f"given beside {given[0]!r}; a tolerance is said one way")
    value = section.number(given[0], least=0.0)
    section.close()
    return keys[given[0]](value * size)


# The unit that a tolerance's keys name, and the size of it in ob.uncertainty's own.
_LENGTH, _DEGREES, _PERCENT = ("", 1.0), ("_degrees", 1.0), ("_percent", 0.01)
_TOLERANCES = {
    "boom_length": _LENGTH,
    "boom_angle": _DEGREES,
    "position": _LENGTH,
    "alignment": _DEGREES,
    "speed_calibration": _PERCENT,
    "direction_calibration": _DEGREES,
    "model_speed": _PERCENT,
    "model_direction": _DEGREES,
}
_OF_BOOMS = {"boom_length", "boom_angle"}


def _mounts(section, bodies, sensors):
    """The arguments of ``ob.best_mounts``."""
    asked = {"where": _where(section, bodies)}
    if section.has("carries"):
        asked["sensors"] = _carried(section, sensors)
    for key, least in (("count", 1), ("choices", 1)):
        if section.has(key):
            asked[key] = as_count(section.place(key), section.entries[key], least=least)
    if key := section.angle_key("{}s", "the winds", optional=True):
        asked[key] = section.admitted(key, _angles(section, key))
    if section.has("limit"):
        word = isinstance(section.entries["limit"], str)
        asked["limit"] = section.choice("limit", ("mast", "boom")) if word else (
            section.number("limit", positive=True))
    for key in ("direction_limit", "spacing", "clearance"):
        if section.has(key):
            asked[key] = section.number(key, least=0.0)
    if section.has("keep_out"):
        asked["keep_out"] = _keep_out(section)
    section.close()
    return asked


def _where(section, bodies):
    """The region of a search: a reach, an area or a stretch."""
    kinds = {"reach": _reach, "area": _area, "stretch": _stretch}
    given = [kind for kind in kinds if section.has(kind)]
    if not given:
        raise section.missing("where to seek", *kinds)
    if len(given) > 1:
        raise section.error(given[1], f"given beside {given[0]!r}; give the one or the other")
    region = section.table(given[0])
    found = kinds[given[0]](region, bodies)
    region.close()
    return found


def _reach(section, bodies):
    body = bodies[_index_of_body(section, bodies)]
    greatest, least = section.number("greatest", positive=True), section.number("least", 0.0)
    sector = None
    if key := section.angle_key("{}s", "[from, to]", optional=True):
        sector = as_reals(section.place(key), section.numbers(key, "[from, to]"))
    with section.located():
        return ob.Reach(greatest, (body.axis.real, body.axis.imag), sector, least)


def _area(section, bodies):
    return _polygon_of(section, section.points("points"), section.number("corner_radius", None))


def _stretch(section, bodies):
    body = _index_of_body(section, bodies)
    with section.located():
        return ob.Stretch(body, section.number("first", 0.0), section.number("last", 1.0))


def _carried(section, sensors):
    """The sensors named, moved so that each stands in the mount's place."""
    names, known = section.entries["carries"], {sensor.name: sensor for sensor in sensors}
    if not isinstance(names, list) or not names:
        raise section.error("carries", f"expected a list of sensors' names, got {names!r}")
    for name in names:
        if name not in known:
            raise section.error("carries", f"{name!r} is no sensor; {nearest_name(name, known)}")
        if known[name].kind == "port":
            raise section.error("carries", f"{name!r} is a port, which no mount carries")
    return [known[name].moved(*(-np.asarray(known[name].centre))) for name in names]


def _keep_out(section):
    expected = "polygons [[[x, y], ...], ...]"
    rings = section.numbers("keep_out", expected)
    if not isinstance(rings, list) or not all(isinstance(ring, list) for ring in rings):
        raise section.error("keep_out", f"expected {expected}")
    polygons = [as_points(section.place("keep_out"), ring) for ring in rings]
    if any(points.ndim != 2 for points in polygons):
        raise section.error("keep_out", f"expected {expected}")
    return [_polygon_of(section, points) for points in polygons]


def _polygon_of(section, points, corner_radius=None):
    """A polygon whose corners are rounded by next to nothing, unless it is said by how much."""
    with section.located():
        if corner_radius is None:
            corner_radius = 1e-4 * float(np.ptp(points, axis=0).max())
        return ob.polygon(points, corner_radius)
