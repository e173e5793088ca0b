"""Corrections: from what sensors read back to the undisturbed stream, by inverting a survey.

A record is corrected in two steps. Each sensor that reads direction has a curve in the survey,
sensed against undisturbed direction; where it runs one way its inverse gives the undisturbed
direction. At that direction each sensor that reads speed has a ratio, and the sensed speed over
the ratio is the undisturbed speed. A cup and a vane thus correct each other without being paired.

The curves are piecewise linear on a regular turn of steps of a degree or less. Against the exact
flow at ten radii from a circle, a survey every degree is good to 2e-6 of the speed and every ten
degrees to 2e-4.
"""

import contextlib
import json
import os
from collections.abc import Mapping
from dataclasses import dataclass, field, fields, replace
from enum import IntEnum
from functools import cached_property
from pathlib import Path
from typing import ClassVar

import numpy as np

from offbody._version import __version__
from offbody.bearings import within_turn
from offbody.checks import as_number, as_reals, nearest_name
from offbody.errors import InputError
from offbody.surveys import WIDEST_STEP

# Rules of this project, not of the trade.
LEAST_TRUSTED = 0.95  # share of a spread that must lie in trusted sectors
LEAST_DOUBT = 1e-9  # of the speed, or degrees: what is said to be surer weighs no more in a mean
COARSEST, FINEST = 1.0, 0.1  # degrees: steps of the turn on which the curves are kept

# The effect of a spread changes by less than 1e-4 of the speed over half this step, at ten radii
# from a circle: the nearest of the ready-made curves will do.
SPREAD_STEP = 0.5
WIDEST_SPREAD = 104.0  # degrees; of directions spread evenly over the whole turn, 360 / sqrt(12)

# Common practice: vanes whose range overlaps itself read up to 540 degrees; 999 is no reading.
LEAST_READING, GREATEST_READING = -360.0, 540.0

BLOCK = 1 << 15  # records at a time: what is in between stays in the cache

CALMS = ("keep", "blank")
CHOICES = ("best", "first", "mean")


class Reason(IntEnum):
    """Why a corrected value is there or not; of several sensors, the smallest number speaks."""

    OK = 0
    CALM = 1
    UNTRUSTED = 2
    NOT_UNIQUE = 3
    OUT_OF_TABLE = 4
    IMPOSSIBLE = 5
    MISSING = 6

    @property
    def words(self):
        """The reason as tables show it."""
        return self.name.lower().replace("_", " ")


@dataclass(frozen=True, eq=False)
class Corrected:
    """A corrected record. Everything has the shape of what was given, and its index if it had one.

    Attributes
    ----------
    speed : array
        Undisturbed speed, in the record's own unit; NaN where the reason says why.
    direction : array
        Undisturbed direction, degrees in [0, 360), a bearing if the survey was made for bearings.
    reason, direction_reason : array of int8
        For the speed and for the direction: see ``ob.Reason``.
    speed_sensor, direction_sensor : array of int8
        Which sensor was taken, as a place in ``Correction.names``; -1 for none, or for a mean.
    speed_uncertainty, direction_uncertainty : array or None
        Standard uncertainties in the record's unit and in degrees, if the correction has them.
    speed_change_by_spread, direction_change_by_spread : array or None
        What the direction's spread changed, against a correction by the same sensors that ignores
        it (NaN where that would be refused); None without a spread.
    by_bearing : bool
        Whether ``direction`` holds bearings.
    """

    speed: object
    direction: object
    reason: object
    direction_reason: object
    speed_sensor: object
    direction_sensor: object
    speed_uncertainty: object = None
    direction_uncertainty: object = None
    speed_change_by_spread: object = None
    direction_change_by_spread: object = None
    by_bearing: bool = False

    def columns(self):
        """The arrays that are there, by name; ``direction`` is named ``bearing`` if it is one."""
        word = "bearing" if self.by_bearing else "direction"
        return {
            one.name.replace("direction", word): getattr(self, one.name)
            for one in fields(self)
            if one.name != "by_bearing" and getattr(self, one.name) is not None
        }

    def counts(self):
        """How many speeds have each reason, as {words: number}, those with none left out."""
        found = np.bincount(np.ravel(np.asarray(self.reason)), minlength=len(Reason))
        return {reason.words: int(found[reason]) for reason in Reason if found[reason]}


@dataclass(frozen=True, eq=False, repr=False)
class Correction:
    """What turns sensed speeds and directions into undisturbed ones; ``from_survey`` makes it.

    Attributes
    ----------
    names : tuple of str
        Of the sensors, k of them.
    by_bearing : bool
        Whether angles are bearings, clockwise from north, or directions, as in the survey.
    angles : (n,) array
        Of the survey, growing within [0, 360).
    speed_ratio, direction_error, trust : (n, k) array
        As in the survey.
    north_offset : (k,) array
        Degrees added to each sensor's recorded direction.
    calm_below : float
        Sensed speed, in the record's unit, below which a record is a calm.
    calms : {"keep", "blank"}
    choose : {"best", "first", "mean"}
    speed_uncertainty : (n, k, k) array or None
        Relative standard uncertainty of the speed by sensor and by the sensor of its direction.
    direction_uncertainty : (n, k) array or None
        Standard uncertainty of the direction, degrees.
    case : dict
        What was surveyed.
    version : str
        Of offbody, that made the correction.

    Examples
    --------
    >>> import offbody as ob
    >>> table = ob.survey(ob.solve(ob.circle(0.3)), ob.PointSensor(0.0, 1.5), bearings=range(360))
    >>> ob.Correction.from_survey(table)
    Correction(bearings: 360, sensors: point 1)
    """

    names: tuple
    by_bearing: bool
    angles: np.ndarray
    speed_ratio: np.ndarray
    direction_error: np.ndarray
    trust: np.ndarray
    north_offset: np.ndarray
    calm_below: float = 0.0
    calms: str = "keep"
    choose: str = "best"
    speed_uncertainty: np.ndarray | None = None
    direction_uncertainty: np.ndarray | None = None
    case: dict = field(default_factory=dict)
    version: str = __version__

    units: ClassVar[dict] = {
        "angles": "degrees",
        "speed_ratio": "1",
        "direction_error": "degrees",
        "north_offset": "degrees",
        "calm_below": "unit of the record's speeds",
        "speed_uncertainty": "1, share of the speed",
        "direction_uncertainty": "degrees",
    }

    def __repr__(self):
        kind = "bearings" if self.by_bearing else "directions"
        return f"Correction({kind}: {len(self.angles)}, sensors: {', '.join(self.names)})"

    @classmethod
    def from_survey(
        cls, table, sensors=None, *, north_offset=0.0, calm_below=0.0, calms="keep",
        choose="best", uncertainty=None, case=None,
    ):
        """The correction that a survey allows.

        Parameters
        ----------
        table : Survey, str or path-like
            What ``ob.survey`` returned, or the survey.json that ``offbody survey`` wrote.
        sensors : sequence of str, optional
            Names of the sensors to use, the preferred first; by default all that read speed or
            direction, in the table's order. A path reads one component and a port a pressure:
            neither can be corrected alone (crossed paths can).
        north_offset : float or mapping of sensor name to float
            Degrees to ADD to a recorded direction, so that it counts from the survey's north (for
            bearings, clockwise) or +x (for directions, counter-clockwise).
        calm_below : float
            Where the greatest sensed speed of a record, in the record's own unit, is below this,
            its direction is meaningless: the record is a calm. 0: none is.
        calms : {"keep", "blank"}
            What a calm's speed shall be: the greatest sensed speed, not corrected; or NaN. Its
            direction is NaN. Blank calms make a mean speed too high.
        choose : {"best", "first", "mean"}
            Of several sensors that can be used in a record: the one with the least standard
            uncertainty there, or, if no uncertainties are given, with the least distortion
            (speed ratio nearest 1, direction error nearest 0); or the first in order; or the mean,
            weighted by the inverse squares of the uncertainties, or plain if none are given.
        uncertainty : Uncertainty, optional
            What ``ob.uncertainty`` returned for the same table.
        case : dict, optional
            What was surveyed, to be kept with the correction; by default the case in survey.json,
            or the names of bodies and sensors.

        Returns
        -------
        Correction

        Raises
        ------
        ob.InputError
            If a sensor is unknown or can not be corrected, no two angles of the table are
            neighbours, or another argument cannot be used.

        Examples
        --------
        >>> import offbody as ob
        >>> mast = ob.solve(ob.circle(0.3))
        >>> cup = ob.PointSensor(0.0, 1.5, name="cup", reads="speed")
        >>> vane = ob.PointSensor(1.5, 0.0, name="vane", reads="direction")
        >>> table = ob.survey(mast, [cup, vane], bearings=range(360))
        >>> correction = ob.Correction.from_survey(table, north_offset={"vane": 2.0})
        >>> corrected = correction.correct({"cup": [7.92, 5.0]}, {"vane": [-2.0, 268.0]})
        >>> corrected.speed.round(2), [ob.Reason(code).words for code in corrected.reason]
        (array([ 8., nan]), ['ok', 'untrusted'])
        """
        stored = table
        if isinstance(table, str | os.PathLike):
            stored = _StoredSurvey.read(table)
        elif not hasattr(table, "direction_error"):
            raise InputError(f"table must be what ob.survey returned, got {table!r}")
        places = _usable(stored, sensors)
        order, angles = _sorted_turn(stored.angles)
        return cls._made(
            names=tuple(stored.names[place] for place in places),
            by_bearing=stored.by_bearing,
            angles=angles,
            speed_ratio=stored.speed_ratio[order][:, places],
            direction_error=stored.direction_error[order][:, places],
            trust=stored.trust[order][:, places],
            north_offset=north_offset,
            calm_below=as_number("calm_below", calm_below, least=0.0),
            calms=_as_word("calms", calms, CALMS),
            choose=_as_word("choose", choose, CHOICES),
            case=_described(stored) if case is None else case,
            **_uncertainties(uncertainty, stored, order, places),
        )

    @classmethod
    def _made(cls, **parts):
        """A correction whose offsets are one per sensor and whose curves can be read."""
        correction = cls(**parts)
        if not correction._turn_of_table.joined.any():
            raise InputError(
                f"table has no two angles within {WIDEST_STEP:g} degrees of each other, and "
                "nothing is read in between: survey more angles, or divide by the speed_ratio of "
                "the one direction that there is"
            )
        offset = correction.north_offset
        offsets = _per_sensor("north_offset", offset, correction.names)
        for name, reads in zip(correction.names, correction.reads_direction, strict=True):
            if isinstance(offset, Mapping) and name in offset and not reads:
                raise InputError(f"north_offset: {name!r} reads no direction: leave it out")
        return replace(correction, north_offset=offsets)

    @property
    def reads_speed(self):
        """(k,) bool: which sensors have a speed ratio."""
        return np.isfinite(self.speed_ratio).any(axis=0)

    @property
    def reads_direction(self):
        """(k,) bool: which sensors have a direction error."""
        return np.isfinite(self.direction_error).any(axis=0)

    def correct(self, speed=None, direction=None, spread=None):
        """The undisturbed speed and direction of every record.

        Parameters
        ----------
        speed : array_like or mapping of sensor name to array_like, optional
            Sensed speeds, in any unit, which is kept. A bare array where only one sensor of the
            correction reads speed. NaN is missing; a negative or infinite speed is impossible.
            Without it only directions are corrected.
        direction : array_like or mapping of sensor name to array_like
            Sensed directions in degrees, as in the survey: bearings if it was made for bearings. A
            bare array where only one sensor reads direction. Below -360 and beyond 540 they are
            impossible.
        spread : array_like, optional
            Of averaged records: standard deviation of the direction within each, degrees, taken as
            that of the undisturbed direction. The survey is smeared over a normal distribution of
            that width, and 95 percent of it must lie in trusted sectors. Beyond 104 degrees, an
            even spread over the whole turn, it is impossible.

        Returns
        -------
        Corrected
            Arrays of the shape given; a pandas index is kept. Scalars in, scalars out.

        Raises
        ------
        ob.InputError
            If a sensor is unknown or does not read the quantity, or shapes or indices differ.

        Examples
        --------
        >>> import offbody as ob
        >>> mast = ob.solve(ob.circle(0.3))
        >>> table = ob.survey(mast, ob.PointSensor(0.0, 1.5), bearings=range(360))
        >>> corrected = ob.Correction.from_survey(table).correct(7.92, 0.0)
        >>> round(corrected.speed, 3), corrected.direction, corrected.reason
        (8.0, 0.0, 0)
        """
        record = _Record.of(self, speed, direction, spread)
        result = self._corrected(record)
        result = {name: record.shaped(values) for name, values in result.items()}
        return Corrected(**result, by_bearing=self.by_bearing)

    def _corrected(self, record):
        """The columns of a flat record, by blocks of it."""
        size = record.size
        result = {
            "speed": np.empty(size),
            "direction": np.empty(size),
            "reason": np.empty(size, np.int8),
            "direction_reason": np.empty(size, np.int8),
            "speed_sensor": np.empty(size, np.int8),
            "direction_sensor": np.empty(size, np.int8),
        }
        if self.direction_uncertainty is not None:
            result |= {"speed_uncertainty": np.empty(size), "direction_uncertainty": np.empty(size)}
        if record.spread is not None:
            for quantity in ("speed", "direction"):
                result[f"{quantity}_change_by_spread"] = np.empty(size)
        for first in range(0, size, BLOCK):
            here = slice(first, first + BLOCK)
            for name, values in self._block(record.part(here)).items():
                result[name][here] = values
        return result

    def _block(self, record):
        """The columns of one block of a record."""
        spread_reason = np.zeros(record.size, np.int8)
        level = 0
        curves = self._sharp
        if record.spread is not None:
            curves = self._smeared
            spread_reason = _faults(record.spread, 0.0, WIDEST_SPREAD)
            level = np.where(spread_reason, 0, record.spread) / SPREAD_STEP
            level = np.rint(level).astype(np.intp)
        towards = self._directions(record, curves, level, spread_reason)
        speed = self._speeds(record, curves, level, towards)
        self._settle_calms(record, speed, towards)
        result = {
            "speed": speed.value,
            "direction": np.where(towards.reason == Reason.OK, within_turn(towards.value), np.nan),
            "reason": speed.reason,
            "direction_reason": towards.reason,
            "speed_sensor": speed.sensor,
            "direction_sensor": towards.sensor,
        }
        if self.direction_uncertainty is not None:
            result["speed_uncertainty"] = speed.doubt * speed.value
            result["direction_uncertainty"] = towards.doubt
        if record.spread is not None:
            result["speed_change_by_spread"] = speed.change
            result["direction_change_by_spread"] = towards.change
        return result

    def _directions(self, record, curves, level, spread_reason):
        """The undisturbed direction, chosen from all sensors that read one."""
        chosen = _Chosen(record.size, self.choose, circular=True)
        for sensor, recorded in record.direction.items():
            reason = _faults(recorded, LEAST_READING, GREATEST_READING)
            reason = np.where(spread_reason, spread_reason, reason)
            sensed = np.where(reason, 0.0, recorded) + self.north_offset[sensor]
            value, found = curves.undisturbed(sensor, sensed, level)
            reason = np.where(reason, reason, found)
            doubt = merit = None
            if self.direction_uncertainty is not None:
                cell, _ = self._turn.place(value)
                doubt = merit = self._direction_doubts[sensor][cell]
            elif len(record.direction) > 1:
                merit = np.abs(within_half_turn(sensed - value))
            change = None
            if record.spread is not None:
                plain, found = self._sharp.undisturbed(sensor, sensed, 0)
                change = np.where(found == Reason.OK, within_half_turn(value - plain), np.nan)
            chosen.offer(sensor, value, reason, merit, doubt, change)
        return chosen.settled()

    def _speeds(self, record, curves, level, towards):
        """The undisturbed speed, chosen from all sensors that read one, at known directions."""
        known = towards.reason == Reason.OK
        cell, share = self._turn.place(np.where(known, towards.value, self._turn.first))
        chosen = _Chosen(record.size, self.choose)
        if record.spread is not None:
            plain = known & np.isfinite(towards.change)
            plain = np.where(plain, towards.value - towards.change, self._turn.first)
            plain = self._turn.place(plain)
        for sensor, recorded in record.speed.items():
            reason = _faults(recorded, 0.0, np.finfo(float).max)
            ratio, found = curves.ratio(sensor, cell, share, level)
            reason = np.where(reason, reason, found)
            doubt = merit = None
            if self.speed_uncertainty is not None:
                doubt = merit = self._speed_doubt(sensor, towards, cell)
            elif len(record.speed) > 1:
                merit = np.abs(ratio - 1.0)
            change = None
            with np.errstate(divide="ignore", invalid="ignore"):
                value = recorded / ratio
                if record.spread is not None:
                    # Of the same sensor: another choice is no effect of the spread.
                    sharp, found = self._sharp.ratio(sensor, *plain, 0)
                    change = np.where(found == Reason.OK, value - recorded / sharp, np.nan)
                    change[np.isnan(towards.change)] = np.nan
            chosen.offer(sensor, value, reason, merit, doubt, change)
        speed = chosen.settled()
        # Where there is no speed to correct, that is the reason, whatever the direction's is.
        speed.refuse(~known & (speed.reason < Reason.IMPOSSIBLE), towards.reason)
        return speed

    def _speed_doubt(self, sensor, towards, cell):
        """Relative standard uncertainty; after a mean of directions, the greatest it may be."""
        table = self._speed_doubts[sensor]
        if self.choose == "mean":
            return np.fmax.reduce(table[towards.offered])[cell]
        return table[np.maximum(towards.sensor, 0), cell]

    def _settle_calms(self, record, speed, towards):
        """Give calms their name; their greatest sensed speed is kept, or not."""
        if not self.calm_below:
            return
        greatest, sensor = np.full(record.size, -1.0), np.full(record.size, -1, np.int8)
        for place, recorded in record.speed.items():
            greater = np.isfinite(recorded) & (recorded > greatest)
            greatest[greater], sensor[greater] = recorded[greater], place
        calm = (greatest >= 0) & (greatest < self.calm_below)
        speed.refuse(calm, np.int8(Reason.CALM))
        towards.refuse(calm, np.int8(Reason.CALM))
        if self.calms == "keep":
            speed.value[calm], speed.sensor[calm] = greatest[calm], sensor[calm]

    # --- the curves ---------------------------------------------------------------------------

    @cached_property
    def _turn_of_table(self):
        return _TableTurn(self.angles, self.trust)

    @cached_property
    def _turn(self):
        return self._turn_of_table.regular()

    @cached_property
    def _sharp(self):
        """The curves as surveyed."""
        table, turn = self._turn_of_table, self._turn
        return _Curves(
            turn,
            table.onto(turn, self.speed_ratio)[None],
            table.onto(turn, self.direction_error, circular=True)[None],
            table.reasons(turn)[None],
        )

    @cached_property
    def _smeared(self):
        """The curves for every spread, in steps."""
        spreads = np.arange(0.0, WIDEST_SPREAD + SPREAD_STEP, SPREAD_STEP)
        return self._sharp.smeared(spreads)

    @cached_property
    def _direction_doubts(self):
        return self._turn_of_table.onto(self._turn, self.direction_uncertainty).T

    @cached_property
    def _speed_doubts(self):
        """(k, k, cells): by sensor and by sensor of the direction."""
        flat = self.speed_uncertainty.reshape(len(self.angles), -1)
        sensors = len(self.names)
        return self._turn_of_table.onto(self._turn, flat).T.reshape(sensors, sensors, -1)

    # --- on file --------------------------------------------------------------------------------

    def save(self, path):
        """Write the correction as JSON, with its version, units and case.

        Parameters
        ----------
        path : str or path-like
            A file that stands there is replaced.

        Examples
        --------
        >>> import offbody as ob, tempfile, pathlib
        >>> table = ob.survey(ob.solve(ob.circle(0.3)), ob.PointSensor(0.0, 1.5))
        >>> with tempfile.TemporaryDirectory() as folder:
        ...     path = pathlib.Path(folder) / "mast.json"
        ...     ob.Correction.from_survey(table).save(path)
        ...     ob.Correction.load(path)
        Correction(directions: 360, sensors: point 1)
        """
        document = {
            "offbody": self.version,
            "kind": "correction",
            "angles": "bearings" if self.by_bearing else "directions",
            "units": self.units,
            "case": self.case,
            "sensors": list(self.names),
            "calm_below": self.calm_below,
            "calms": self.calms,
            "choose": self.choose,
            "north_offset": self.north_offset.tolist(),
            "data": {name: _listed(getattr(self, name)) for name in _DATA},
        }
        Path(path).write_text(json.dumps(document, indent=1, allow_nan=False), encoding="utf-8")

    @classmethod
    def load(cls, path):
        """The correction that ``save`` wrote.

        Parameters
        ----------
        path : str or path-like

        Returns
        -------
        Correction

        Raises
        ------
        ob.InputError
            If the file is missing or does not hold a correction.
        """
        document = read_document(path)
        if document.get("kind") != "correction":
            raise InputError(f"{path}: not a correction that offbody saved")
        with _complaints_about(path):
            data = {name: _unlisted(document["data"][name]) for name in _DATA}
            data["trust"] = data["trust"].astype(bool)
            return cls._made(
                names=tuple(document["sensors"]),
                by_bearing=_is_by_bearing(document),
                north_offset=np.array(document["north_offset"], dtype=float),
                calm_below=as_number("calm_below", document["calm_below"], least=0.0),
                calms=_as_word("calms", document["calms"], CALMS),
                choose=_as_word("choose", document["choose"], CHOICES),
                case=document["case"],
                version=document["offbody"],
                **data,
            )


_DATA = (
    "angles", "speed_ratio", "direction_error", "trust", "speed_uncertainty",
    "direction_uncertainty",
)


def read_document(path):
    """The JSON object in a file, or an InputError."""
    try:
        document = json.loads(Path(path).read_text(encoding="utf-8"))
    except OSError as error:
        raise InputError(f"{path}: cannot read it: {error.strerror}") from None
    except ValueError as error:
        raise InputError(f"{path}: not JSON: {error}") from None
    if not isinstance(document, dict):
        raise InputError(f"{path}: holds no JSON object")
    return document


@contextlib.contextmanager
def _complaints_about(path):
    """What a damaged document brings about, as an InputError that names the file."""
    try:
        yield
    except KeyError as error:
        raise InputError(f"{path}: has no entry {error}; write it anew") from None
    except (TypeError, ValueError, AttributeError) as error:
        raise InputError(f"{path}: damaged: {error}; write it anew") from None


def _is_by_bearing(document):
    return _as_word("angles", document["angles"], ("bearings", "directions")) == "bearings"


def _listed(array):
    """Nested lists, in which NaN is None."""
    if array is None:
        return None
    if array.dtype == bool:
        return array.tolist()
    return np.where(np.isnan(array), None, array).tolist()


def _unlisted(lists):
    return None if lists is None else np.array(lists, dtype=float)


@dataclass(frozen=True, eq=False)
class _StoredSurvey:
    """What a correction needs of a survey, from the survey.json of the command."""

    names: tuple
    by_bearing: bool
    angles: np.ndarray
    speed_ratio: np.ndarray
    direction_error: np.ndarray
    component_error: np.ndarray
    trust: np.ndarray
    case: dict

    @classmethod
    def read(cls, path):
        document = read_document(path)
        with _complaints_about(path):
            data = document["data"]
            names = tuple(dict.fromkeys(data["sensor"]))
            by_bearing = _is_by_bearing(document)

            def column(name):
                return np.array(data[name], dtype=float).reshape(-1, len(names))

            return cls(
                names=names,
                by_bearing=by_bearing,
                angles=column("bearing" if by_bearing else "direction")[:, 0],
                speed_ratio=column("speed_ratio"),
                direction_error=column("direction_error"),
                component_error=column("component_error"),
                trust=column("trust").astype(bool),
                case=document["case"],
            )


def _described(table):
    """What a table says of what was surveyed."""
    if isinstance(table, _StoredSurvey):
        return table.case
    return {
        "surroundings": repr(table.model.surroundings),
        "bodies": [outline.name for outline in table.model.outlines],
        "sensors": [repr(sensor) for sensor in table.sensors],
    }


def _usable(table, sensors):
    """Places of the sensors to use, or an InputError."""
    component = np.isfinite(table.component_error).any(axis=0)
    reads = np.isfinite(table.speed_ratio) | np.isfinite(table.direction_error)
    usable = reads.any(axis=0) & ~component
    if sensors is None:
        if not usable.any():
            raise InputError(
                "table holds no sensor that reads a speed or a direction; a path reads a "
                "component and a port a pressure: survey crossed paths, a disc or a point"
            )
        return np.flatnonzero(usable).tolist()
    given = [sensors] if isinstance(sensors, str) else list(sensors)
    if not given:
        raise InputError("sensors is empty: name at least one sensor, or leave it out")
    places = []
    for name in given:
        if name not in table.names:
            raise InputError(f"sensors: {name!r} is unknown; {nearest_name(name, table.names)}")
        place = table.names.index(name)
        if place in places:
            raise InputError(f"sensors: {name!r} is given twice; name each sensor once")
        if not usable[place]:
            raise InputError(
                f"sensors: {name!r} reads neither a speed nor a direction; take crossed paths, "
                "a disc or a point"
            )
        places.append(place)
    return places


def _sorted_turn(angles):
    """Which rows to take, and their angles growing within [0, 360), each once."""
    angles, order = np.unique(within_turn(angles), return_index=True)
    return order, angles


def _uncertainties(uncertainty, table, order, places):
    """The uncertainties of the sensors in use, once they are found to belong to the table."""
    if uncertainty is None:
        return {}
    if not hasattr(uncertainty, "speed_with"):
        raise InputError(f"uncertainty must be what ob.uncertainty returned, got {uncertainty!r}")
    same = uncertainty.names == table.names and np.array_equal(uncertainty.angles, table.angles)
    if not same or uncertainty.by_bearing != table.by_bearing:
        raise InputError("uncertainty belongs to another table: make it of this one")
    pairs = [[uncertainty.speed_with(one, other) for other in places] for one in places]
    return {
        "speed_uncertainty": np.moveaxis(np.array(pairs), -1, 0)[order],
        "direction_uncertainty": uncertainty.direction[order][:, places],
    }


def _as_word(name, value, known):
    if value not in known:
        raise InputError(f"{name} = {value!r} is not known; {nearest_name(value, known)}")
    return value


def _per_sensor(name, value, names):
    """One number per sensor from one for all, a mapping by name, or the array itself."""
    if isinstance(value, np.ndarray) and value.shape == (len(names),):
        return as_reals(name, value)
    if not isinstance(value, Mapping):
        return np.full(len(names), as_number(name, value))
    for sensor in value:
        if sensor not in names:
            raise InputError(f"{name}: {sensor!r} is unknown; {nearest_name(sensor, names)}")
    return np.array([as_number(f"{name}[{one!r}]", value.get(one, 0.0)) for one in names])


def within_half_turn(degrees):
    """The same angles within [-180, 180)."""
    return degrees - 360.0 * np.floor((degrees + 180.0) / 360.0)


def _faults(values, least, greatest):
    """MISSING for NaN, IMPOSSIBLE outside what a sensor can read, else OK; int8."""
    outside = (values < least) | (values > greatest)
    reason = np.where(outside, np.int8(Reason.IMPOSSIBLE), np.int8(Reason.OK))
    return np.where(np.isnan(values), np.int8(Reason.MISSING), reason)


# --- records as given -----------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class _Record:
    """Flat columns by the sensor's place, and how to give results the caller's form."""

    speed: dict
    direction: dict
    spread: np.ndarray | None
    shape: tuple
    like: object = None  # a pandas column whose index the results shall have

    @classmethod
    def of(cls, correction, speed, direction, spread):
        if direction is None:
            raise InputError("direction is missing: without it no ratio can be looked up")
        given = {"speed": _by_sensor(correction, "speed", speed)}
        given["direction"] = _by_sensor(correction, "direction", direction)
        every = {
            f"{quantity} of {correction.names[place]!r}": values
            for quantity, columns in given.items()
            for place, values in columns.items()
        }
        if spread is not None:
            every["spread"] = spread
        flat = {name: _as_readings(name, values) for name, values in every.items()}
        (first, leader), *others = flat.items()
        for name, values in others:
            if values.shape != leader.shape:
                raise InputError(
                    f"{name} has shape {values.shape} and {first} {leader.shape}: give columns of "
                    "one record"
                )
        like = _common_index(every)
        columns = iter(flat.values())
        speeds = {place: np.ravel(next(columns)) for place in given["speed"]}
        directions = {place: np.ravel(next(columns)) for place in given["direction"]}
        spreads = None if spread is None else np.ravel(next(columns))
        return cls(speeds, directions, spreads, leader.shape, like)

    @property
    def size(self):
        return next(iter(self.direction.values())).size

    def part(self, here):
        """The same of a slice of the record."""
        return _Record(
            {place: values[here] for place, values in self.speed.items()},
            {place: values[here] for place, values in self.direction.items()},
            None if self.spread is None else self.spread[here],
            self.shape,
        )

    def shaped(self, values):
        """Flat results in the caller's form."""
        if self.like is not None:
            return type(self.like)(values, index=self.like.index)
        values = values.reshape(self.shape)
        return values.item() if self.shape == () else values


def _by_sensor(correction, quantity, given):
    """Columns as given, by the place of the sensor, or an InputError."""
    if given is None:
        return {}
    reads = correction.reads_speed if quantity == "speed" else correction.reads_direction
    known = [name for name, can in zip(correction.names, reads, strict=True) if can]
    if not known:
        raise InputError(f"{quantity}: no sensor of the correction reads it ({correction!r})")
    if not (isinstance(given, Mapping) or hasattr(given, "columns")):
        if len(known) > 1:
            raise InputError(
                f"{quantity} must be a mapping of sensor name to array, as {len(known)} sensors "
                f"read it: {', '.join(known)}"
            )
        given = {known[0]: given}
    names = list(given)
    if not names:
        raise InputError(f"{quantity} is empty: give a column of one of {', '.join(known)}")
    for name in names:
        if name not in known:
            raise InputError(
                f"{quantity}: {name!r} is no sensor that reads it; {nearest_name(name, known)}"
            )
    # The correction's own order: its first sensor is the preferred one.
    places = sorted(correction.names.index(name) for name in names)
    return {place: given[correction.names[place]] for place in places}


def _as_readings(name, value):
    """Real numbers, NaN where missing, or an InputError."""
    if hasattr(value, "to_numpy"):
        try:
            return value.to_numpy(dtype=float, na_value=np.nan)
        except (TypeError, ValueError) as error:
            raise InputError(f"{name} must hold real numbers: {error}") from None
    if isinstance(value, np.ma.MaskedArray):
        value = value.astype(float).filled(np.nan)
    array = np.asarray(value)
    if array.dtype.kind not in "iuf" and array.size:
        raise InputError(f"{name} must hold real numbers, got dtype {array.dtype}")
    return array.astype(float, copy=False)


def _common_index(columns):
    """A pandas column among those given, whose index all others share; None without."""
    indexed = {
        name: values for name, values in columns.items()
        if hasattr(values, "to_numpy") and hasattr(values, "index")
    }
    if not indexed:
        return None
    (first, leader), *others = indexed.items()
    for name, values in others:
        if not leader.index.equals(values.index):
            raise InputError(f"{name} and {first} have different indices: align them first")
    return leader


# --- choosing among sensors -----------------------------------------------------------------------


class _Chosen:
    """A value per record, from the sensors that offer one."""

    def __init__(self, size, choose, circular=False):
        self.choose, self.circular = choose, circular
        self.offered = []
        self.value = np.full(size, np.nan)
        self.doubt = np.full(size, np.nan)
        self.change = np.full(size, np.nan)  # by the spread
        self.reason = np.full(size, np.int8(Reason.MISSING))
        self.sensor = np.full(size, -1, np.int8)
        self._merit = np.full(size, np.inf)
        if choose == "mean":
            self._sum = np.zeros(size, complex if circular else float)
            self._doubts, self._changes, self._weight, self._count = np.zeros((4, size))

    def offer(self, sensor, value, reason, merit, doubt, change):
        """Weigh what one more sensor says; small merits are better."""
        self.offered.append(sensor)
        ok = reason == Reason.OK
        if self.choose == "mean":
            self._add(sensor, value, ok, doubt, change)
        else:
            if self.choose == "first" or merit is None:
                take = ok & (self.reason != Reason.OK)
            else:
                # A sensor without a figure of merit still beats none at all.
                merit = np.where(np.isnan(merit), np.finfo(float).max, merit)
                take = ok & (merit < self._merit)
                self._merit[take] = merit[take]
            self._take(take, sensor, value, doubt, change)
        np.minimum(self.reason, reason, out=self.reason, casting="unsafe")

    def _take(self, take, sensor, value, doubt, change):
        if len(self.offered) == 1:
            self.value = np.where(take, value, np.nan)
        else:
            np.copyto(self.value, value, where=take)
        self.sensor[take] = sensor
        for kept, offered in ((self.doubt, doubt), (self.change, change)):
            if offered is not None:
                np.copyto(kept, offered, where=take)

    def _add(self, sensor, value, ok, doubt, change):
        weight = np.ones(len(value))
        if doubt is not None:
            # Without a figure a sensor counts for next to nothing beside one that has it.
            weight = np.where(np.isnan(doubt), 1e-12, np.maximum(doubt, LEAST_DOUBT) ** -2.0)
        weight = np.where(ok, weight, 0.0)
        value = np.exp(1j * np.radians(value)) if self.circular else value
        self._sum += weight * np.where(ok, value, 0.0)
        self._weight += weight
        self._count += ok
        # As if fully correlated, which is the most that the mean's uncertainty can be.
        self._doubts += weight * np.where(ok, 0.0 if doubt is None else doubt, 0.0)
        self._changes += weight * np.where(ok, np.nan if change is None else change, 0.0)
        self.sensor[ok] = sensor

    def settled(self):
        """The choice, once every sensor has been offered."""
        if self.choose == "mean":
            with np.errstate(invalid="ignore"):
                mean = self._sum / self._weight
                self.doubt = self._doubts / self._weight
                self.change = self._changes / self._weight
            self.value = np.angle(mean, deg=True) if self.circular else mean
            self.sensor[self._count > 1] = -1
        return self

    def refuse(self, where, reason):
        """Take back the value of some records, for a reason."""
        self.value[where] = self.doubt[where] = self.change[where] = np.nan
        self.sensor[where] = -1
        self.reason[where] = reason[where] if np.ndim(reason) else reason


# --- curves on a turn -----------------------------------------------------------------------------


@dataclass(frozen=True)
class _Turn:
    """A whole turn in equal cells."""

    first: float
    count: int

    @property
    def step(self):
        return 360.0 / self.count

    @property
    def angles(self):
        return self.first + self.step * np.arange(self.count)

    def place(self, angles):
        """The cell of each angle, and how far into it as a share."""
        place = (angles - self.first) / self.step
        place -= self.count * np.floor(place / self.count)
        cell = np.minimum(place.astype(np.intp), self.count - 1)
        return cell, place - cell


class _TableTurn:
    """The survey's own angles round the turn, and which neighbours are joined."""

    def __init__(self, angles, trust):
        self.first = angles[0]
        self.ends = np.append(angles - self.first, 360.0)
        self.widths = np.diff(self.ends)
        self.joined = self.widths <= WIDEST_STEP
        self.trusted = trust & np.roll(trust, -1, axis=0)

    def regular(self):
        """Equal cells that keep a regular table's angles among their ends."""
        widths = self.widths[self.joined] if self.joined.any() else self.widths
        step = widths.min()
        cells = np.rint(self.ends / step)
        if np.allclose(cells * step, self.ends, rtol=0, atol=1e-9):
            finer = int(np.ceil(step / COARSEST - 1e-9))
            return _Turn(self.first, int(cells[-1]) * finer)
        return _Turn(self.first, int(np.ceil(360.0 / np.clip(step, FINEST, COARSEST))))

    def _intervals(self, places):
        """Which interval of the table each place, counted from the first angle, lies in."""
        found = np.searchsorted(self.ends, places, side="right") - 1
        return np.clip(found, 0, len(self.widths) - 1)

    def onto(self, turn, values, circular=False):
        """Values (n, k) at the ends of the cells, linear in between; NaN in gaps."""
        places = np.arange(turn.count) * turn.step
        interval = self._intervals(places + 1e-9)
        share = np.clip((places - self.ends[interval]) / self.widths[interval], 0.0, 1.0)
        share = np.where(share * self.widths[interval] < 1e-8, 0.0, share)[:, None]
        rise = np.roll(values, -1, axis=0) - values
        rise = (within_half_turn(rise) if circular else rise)[interval]
        between = np.where(self.joined[interval][:, None], share * rise, np.nan)
        return values[interval] + np.where(share == 0, 0.0, between)

    def reasons(self, turn):
        """(cells, k) OK, UNTRUSTED or OUT_OF_TABLE: the worse of both ends of each cell."""
        places = np.arange(turn.count) * turn.step
        ends = [self._intervals(places + 1e-6), self._intervals(places + turn.step - 1e-6)]
        joined = np.logical_and(*(self.joined[end] for end in ends))[:, None]
        trusted = np.logical_and(*(self.trusted[end] for end in ends))
        reason = np.where(trusted, np.int8(Reason.OK), np.int8(Reason.UNTRUSTED))
        return np.where(joined, reason, np.int8(Reason.OUT_OF_TABLE))


class _Curves:
    """Ratio and direction curves on a turn, at one spread (level) after the other.

    ``ratios``, ``errors`` and ``reasons`` are (levels, cells, k); the first two at the cells'
    beginnings, the last for whole cells.
    """

    def __init__(self, turn, ratios, errors, reasons):
        self.turn, self.ratios, self.errors, self.reasons = turn, ratios, errors, reasons
        self._inverses = {}
        flat = ratios.reshape(-1, ratios.shape[-1]).T
        rises = (np.roll(ratios, -1, axis=1) - ratios).reshape(-1, ratios.shape[-1]).T
        self._flat, self._rises = np.ascontiguousarray(flat), np.ascontiguousarray(rises)
        self._codes = np.ascontiguousarray(reasons.reshape(-1, reasons.shape[-1]).T)

    def ratio(self, sensor, cell, share, level):
        """Speed ratios, and the reason in place of each that cannot be used."""
        place = cell + level * self.turn.count
        ratio = self._flat[sensor][place] + share * self._rises[sensor][place]
        reason = self._codes[sensor][place]
        unknown = ~(ratio > 0) & (reason == Reason.OK)
        return ratio, np.where(unknown, np.int8(Reason.OUT_OF_TABLE), reason)

    def undisturbed(self, sensor, sensed, level):
        """Undisturbed directions of sensed ones, and the reason where there is none."""
        if sensor not in self._inverses:
            self._inverses[sensor] = _Inverse.of(
                self.turn, self.errors[..., sensor], self.reasons[..., sensor]
            )
        return self._inverses[sensor](sensed, level)

    def smeared(self, spreads):
        """The same curves, the first level of these, smeared over normal spreads in degrees."""
        turn = self.turn
        offset = within_half_turn(turn.step * np.arange(turn.count))
        # A sampled kernel is nowhere negative, as a truncated spectrum would be; the whole turn is
        # reached from both sides.
        with np.errstate(divide="ignore", invalid="ignore"):
            kernels = sum(
                np.exp(-0.5 * ((offset + shift) / spreads[:, None]) ** 2)
                for shift in (-360.0, 0.0, 360.0)
            )
        kernels[spreads == 0] = offset == 0
        kernels = np.fft.rfft(kernels / kernels.sum(axis=1, keepdims=True), axis=1)[..., None]

        def over(values):
            spectrum = np.fft.rfft(values, axis=0) * kernels
            return np.fft.irfft(spectrum, turn.count, axis=1)

        def mean(values):
            known = np.isfinite(values)
            share = over(known.astype(float))
            return np.where(
                share > 1 - LEAST_TRUSTED,
                over(np.where(known, values, 0.0)) / np.maximum(share, 1e-9), np.nan
            )

        reasons = self.reasons[0]
        ok = over((reasons == Reason.OK).astype(float))
        ok = np.minimum(ok, np.roll(ok, -1, axis=1)) >= LEAST_TRUSTED - 1e-9
        worst = np.where(reasons == Reason.OK, np.int8(Reason.UNTRUSTED), reasons)
        smeared = np.where(ok, np.int8(Reason.OK), worst)
        ratios, errors = mean(self.ratios[0]), mean(self.errors[0])
        # No spread at all is the survey as it stands.
        sharp = spreads == 0
        smeared[sharp], ratios[sharp], errors[sharp] = reasons, self.ratios[0], self.errors[0]
        return _Curves(turn, ratios, errors, smeared)


@dataclass(frozen=True, eq=False)
class _Inverse:
    """The inverse of sensed against undisturbed direction: one straight piece between breaks.

    Levels stand end to end in one sorted array of breaks, 1000 apart, so that one search finds
    every record's piece.
    """

    breaks: np.ndarray
    values: np.ndarray
    slopes: np.ndarray
    codes: np.ndarray

    APART: ClassVar[float] = 1000.0

    @classmethod
    def of(cls, turn, errors, reasons):
        levels = [
            _pieces(turn, error, reason) for error, reason in zip(errors, reasons, strict=True)
        ]
        starts = [level * cls.APART + pieces[0] for level, pieces in enumerate(levels)]
        rest = (np.concatenate(parts) for parts in list(zip(*levels, strict=True))[1:])
        return cls(np.concatenate(starts), *rest)

    def __call__(self, sensed, level):
        turned = sensed - 360.0 * np.floor(sensed / 360.0) + level * self.APART
        piece = np.searchsorted(self.breaks, turned, side="right") - 1
        value = self.values[piece] + self.slopes[piece] * (turned - self.breaks[piece])
        return value, self.codes[piece]


def _pieces(turn, errors, reasons):
    """Breaks within [0, 360), and between them the undisturbed direction, its slope and a reason.

    Every cell of the turn covers a stretch of sensed directions. Between two neighbouring ends of
    such stretches the same cells cover: none, one, which is the inverse, or more, of which nothing
    tells the right one.
    """
    sensed = within_turn(turn.angles + errors)
    advance = turn.step + within_half_turn(np.roll(errors, -1) - errors)
    cells = np.flatnonzero(np.isfinite(advance) & (reasons != Reason.OUT_OF_TABLE))
    begin, end = sensed[cells], np.roll(sensed, -1)[cells]
    low = np.where(advance[cells] >= 0, begin, end)
    high = np.where(advance[cells] >= 0, end, begin)
    breaks = np.unique(np.concatenate([[0.0], low, high]))

    def covering(weights):
        """Sums of the weights of the cells that cover each stretch."""
        opened = np.bincount(np.searchsorted(breaks, low), weights, len(breaks))
        closed = np.bincount(np.searchsorted(breaks, high), weights, len(breaks))
        return np.rint(weights[low > high].sum() + np.cumsum(opened - closed)).astype(np.intp)

    count = covering(np.ones(len(cells)))
    only = np.where(count == 1, covering(cells.astype(float)), 0)
    with np.errstate(divide="ignore", invalid="ignore"):
        slopes = np.where(count == 1, turn.step / advance[only], np.nan)
        values = turn.angles[only] + slopes * within_half_turn(breaks - sensed[only])
    codes = np.where(count > 1, np.int8(Reason.NOT_UNIQUE), np.int8(Reason.OUT_OF_TABLE))
    return breaks, values, slopes, np.where(count == 1, reasons[only], codes)
