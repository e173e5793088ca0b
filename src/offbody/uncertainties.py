"""Uncertainties of corrected speeds and directions: budgets, and the Monte Carlo that checks them.

The corrected speed is V = S / ratio(theta), and theta solves theta + error(theta) = sensed. To
first order an input x that shifts the sensed speed by the share s and the sensed direction by d
degrees, per unit, shifts the corrected ones by

    d theta = d / (1 + error'),        d V / V = s - (ratio' / ratio) d theta,

with the slopes ' against theta. JCGM 100 (GUM) combines the products of these sensitivities with
the inputs' standard uncertainties by the root sum of squares, once the shifts of one input on both
paths are added with their signs. JCGM 101 draws the inputs instead: the sensor is moved, surveyed
anew and its readings are corrected by the table in hand.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from functools import cached_property
from typing import ClassVar

import numpy as np

from offbody.bearings import within_turn
from offbody.checks import as_count, as_number, as_point, as_reals, nearest_name
from offbody.corrections import Correction, within_half_turn
from offbody.errors import InputError
from offbody.surveys import WIDEST_STEP, survey

COVERAGE_FACTOR = 2.0  # of expanded uncertainties: about 95 percent of a normal distribution
NORMAL_95 = 1.959964  # coverage factor of 95 percent of a normal distribution
SENSORS_AT_ONCE = 500  # drawn places surveyed together


@dataclass(frozen=True)
class Rectangular:
    """A quantity anywhere within limits, all places alike: the usual tolerance.

    Parameters
    ----------
    half_width : float
        From the middle to either limit; the standard uncertainty is half_width / sqrt(3).

    Raises
    ------
    ob.InputError
        If the half-width is negative or not a finite number.

    References
    ----------
    JCGM 100:2008 (GUM), 4.3.7.

    Examples
    --------
    >>> import offbody as ob
    >>> round(ob.Rectangular(1.0).standard, 4)
    0.5774
    """

    half_width: float

    word: ClassVar[str] = "rectangular"

    def __post_init__(self):
        number = as_number("half_width", self.half_width, least=0.0)
        object.__setattr__(self, "half_width", number)

    @property
    def standard(self):
        """Standard uncertainty."""
        return self.half_width / math.sqrt(3.0)

    def draw(self, generator, count):
        """Random deviations from the middle, (count,)."""
        return generator.uniform(-self.half_width, self.half_width, count)


@dataclass(frozen=True)
class Normal:
    """A normally distributed quantity, as a calibration certificate states it.

    Parameters
    ----------
    standard : float
        Standard uncertainty; for an expanded uncertainty divide it by its coverage factor.

    Raises
    ------
    ob.InputError
        If the standard uncertainty is negative or not a finite number.

    Examples
    --------
    >>> import offbody as ob
    >>> ob.Normal(0.01 / 2)                         # one percent, k = 2
    Normal(standard=0.005)
    """

    standard: float

    word: ClassVar[str] = "normal"

    def __post_init__(self):
        object.__setattr__(self, "standard", as_number("standard", self.standard, least=0.0))

    def draw(self, generator, count):
        """Random deviations from the middle, (count,)."""
        return generator.normal(0.0, self.standard, count)


DISTRIBUTIONS = (Rectangular, Normal)


@dataclass(frozen=True, eq=False)
class InfluenceQuantity:
    """Something else that the readings depend on, such as a body's size, by its derivatives.

    Parameters
    ----------
    name : str
        What budgets call it.
    distribution : Rectangular or Normal
        Of the quantity, in its own unit.
    speed_ratio, direction_error : array_like of shape (n, k)
        Change of the table's columns per unit of the quantity.

    Raises
    ------
    ob.InputError
        If the name is blank, the distribution is none, or the derivatives are not numbers.

    Examples
    --------
    >>> import offbody as ob
    >>> def table(diameter):
    ...     return ob.survey(ob.solve(ob.circle(diameter)), ob.PointSensor(0.0, 1.5))
    >>> size = ob.InfluenceQuantity.from_surveys(
    ...     "mast diameter", ob.Rectangular(0.002), table(0.300), table(0.301), 0.001)
    >>> float(size.speed_ratio[0, 0].round(4))      # 2 a / r^2 over 2, for the radius a
    0.0668
    """

    name: str
    distribution: object
    speed_ratio: np.ndarray
    direction_error: np.ndarray

    def __post_init__(self):
        if not isinstance(self.name, str) or not self.name.strip():
            raise InputError(f"name must be a text that is not blank, got {self.name!r}")
        _as_distribution(f"distribution of {self.name!r}", self.distribution)
        for column in ("speed_ratio", "direction_error"):
            array = np.array(getattr(self, column), dtype=float)
            object.__setattr__(self, column, array)

    @classmethod
    def from_surveys(cls, name, distribution, table, changed, step):
        """The influence quantity whose derivatives two surveys show.

        Parameters
        ----------
        name, distribution
            As above.
        table, changed : Survey
            Of the same sensors and angles, before and after the quantity has grown by ``step``.
        step : float
            In the quantity's own unit; small enough for the readings to change in proportion.

        Returns
        -------
        InfluenceQuantity

        Raises
        ------
        ob.InputError
            If the surveys differ in their angles or sensors, or the step is zero.
        """
        step = as_number("step", step)
        if step == 0:
            raise InputError("step is zero: give that by which the quantity has grown")
        if changed.names != table.names or not np.array_equal(changed.angles, table.angles):
            raise InputError("changed is a survey of other sensors or angles than table")
        turned = within_half_turn(changed.direction_error - table.direction_error)
        return cls(
            name, distribution, (changed.speed_ratio - table.speed_ratio) / step, turned / step
        )


def uncertainty(
    table, *, boom_foot=None, boom_length=None, boom_angle=None, position=None, alignment=None,
    speed_calibration=None, direction_calibration=None, model_speed=None, model_direction=None,
    influences=(), direction_from=None,
):
    """Uncertainty of the speeds and directions that a survey corrects, per direction and sensor.

    Each source is a distribution, ``ob.Rectangular`` or ``ob.Normal``, for every sensor alike but
    independent from one to the other, or a mapping of sensor name to distribution.

    Parameters
    ----------
    table : Survey
        What ``ob.survey`` returned, n directions by k sensors.
    boom_foot : array_like of shape (2,) or mapping of sensor name to it, optional
        Where booms count from; needed with ``boom_length`` and ``boom_angle``.
    boom_length : distribution, optional
        Of the distance from foot to sensor, in the unit of length.
    boom_angle : distribution, optional
        Of the angle by which the boom is turned about its foot, degrees. The sensor moves; it does
        not turn: see ``alignment``.
    position : distribution, optional
        Of the sensor's place in x and, independently, in y.
    alignment : distribution, optional
        Of the zero of the sensor's direction, degrees.
    speed_calibration : distribution, optional
        Of the sensor's own calibration, as a share of the speed.
    direction_calibration : distribution, optional
        Of the sensor's own calibration, degrees.
    model_speed : distribution, optional
        Stated doubt in the model's speed ratio, as a share of the undisturbed speed.
    model_direction : distribution, optional
        Stated doubt in the model's direction error, degrees.
    influences : sequence of InfluenceQuantity
        Whatever else matters; each acts on all sensors together.
    direction_from : mapping of sensor name to sensor name, optional
        Whose direction the speed of each sensor is corrected with. By default its own, else that
        of the first sensor of the table that reads one.

    Returns
    -------
    Uncertainty

    Raises
    ------
    ob.InputError
        If a source is no distribution or names an unknown sensor, or a foot is missing.

    Notes
    -----
    Two sources need no word: the table's numerical error, if it states one, and the linear
    interpolation between its angles, as a quarter of the distance by which each angle's value
    departs from the line between its neighbours. Both are taken as half-widths of rectangular
    distributions. The scatter of the record itself is no part of this.

    At an angle that has no neighbour within 15 degrees, as over a ground, the direction of the
    stream is taken as known.

    References
    ----------
    JCGM 100:2008 (GUM), 5.1; JCGM 101:2008.

    Examples
    --------
    >>> import offbody as ob
    >>> mast = ob.solve(ob.circle(0.3))
    >>> table = ob.survey(mast, ob.PointSensor(0.0, 1.5, name="sonic"), bearings=range(360))
    >>> result = ob.uncertainty(table, boom_foot=(0, 0), boom_length=ob.Rectangular(0.02),
    ...     alignment=ob.Rectangular(1.0), speed_calibration=ob.Normal(0.005))
    >>> result.expanded_speed[0].round(4), result.expanded_direction[0].round(2)
    (array([0.01]), array([1.13]))
    >>> result.budget("sonic", 0.0)[0]["source"]
    'speed calibration'
    """
    if not hasattr(table, "speed_ratio_gradient"):
        raise InputError(f"table must be what ob.survey returned, got {table!r}")
    sources = _Sources(table)
    sources.add_booms(boom_foot, boom_length, boom_angle)
    sources.add_positions(position)
    sources.add_shares("speed_calibration", speed_calibration)
    sources.add_turns("alignment", alignment)
    sources.add_turns("direction_calibration", direction_calibration)
    sources.add_ratios("model_speed", model_speed)
    sources.add_turns("model_direction", model_direction)
    for quantity in influences:
        sources.add_influence(quantity)
    sources.add_numerical()
    sources.add_interpolation()
    return Uncertainty(table, tuple(sources.inputs), _paired(table, direction_from))


@dataclass(frozen=True, eq=False)
class _Input:
    """One input quantity: how it shifts what sensors read, per unit of it."""

    name: str
    unit: str
    distribution: object
    sensor: int | None  # None: acts on all together
    speed: np.ndarray  # (n, k) share of the sensed speed
    direction: np.ndarray  # (n, k) degrees of the sensed direction
    displacement: object = None  # of the sensor, complex, as a function of the quantity


@dataclass(frozen=True, eq=False, repr=False)
class Uncertainty:
    """What ``ob.uncertainty`` found, for n directions by k sensors.

    Values are NaN where the sensor, or the one that its direction comes from, is not trusted or
    does not read the quantity.

    Attributes
    ----------
    table : Survey
    names : tuple of str
        Of the sensors.
    angles : (n,) array
        The table's own angles.
    by_bearing : bool
        Whether these are bearings.
    speed : (n, k) array
        Combined standard uncertainty of the corrected speed, as a share of it.
    direction : (n, k) array
        Combined standard uncertainty of the corrected direction, degrees.
    expanded_speed, expanded_direction : (n, k) array
        The same times the coverage factor k = 2: about 95 percent.
    sources : tuple of str
        The names of all sources.

    Examples
    --------
    >>> import offbody as ob
    >>> table = ob.survey(ob.solve(ob.circle(0.3)), ob.PointSensor(0.0, 1.5, name="sonic"))
    >>> ob.uncertainty(table, alignment=ob.Normal(0.5)).direction[0].round(2)
    array([0.51])
    """

    table: object
    inputs: tuple
    direction_sensor: tuple

    def __repr__(self):
        return f"Uncertainty(sensors: {', '.join(self.names)}; sources: {', '.join(self.sources)})"

    @property
    def names(self):
        return self.table.names

    @property
    def angles(self):
        return self.table.angles

    @property
    def by_bearing(self):
        return self.table.by_bearing

    @property
    def sources(self):
        return tuple(dict.fromkeys(one.name for one in self.inputs))

    @cached_property
    def speed(self):
        pairs = enumerate(self.direction_sensor)
        return np.stack([self._speed(one, other) for one, other in pairs], axis=1)

    @cached_property
    def direction(self):
        size = len(self.angles)
        columns = [_root_sum(self._direction_parts(j), size) for j in range(len(self.names))]
        return np.where(self._usable("direction"), np.stack(columns, axis=1), np.nan)

    @property
    def expanded_speed(self):
        return COVERAGE_FACTOR * self.speed

    @property
    def expanded_direction(self):
        return COVERAGE_FACTOR * self.direction

    def speed_with(self, sensor, direction_sensor):
        """Standard uncertainty (n,) of a sensor's speed, as a share, with another's direction.

        Parameters
        ----------
        sensor, direction_sensor : int or str
            Place or name in the table.

        Returns
        -------
        (n,) array
        """
        return self._speed(self._place(sensor), self._place(direction_sensor))

    def budget(self, sensor, angle, quantity="speed"):
        """What each source contributes at the table's angle nearest to one.

        Parameters
        ----------
        sensor : str
            Name of a sensor.
        angle : float
            Degrees, as in the table: a bearing if it was made for bearings.
        quantity : {"speed", "direction"}

        Returns
        -------
        list of dict
            The greatest first, with the keys ``source``, ``sensor`` (whose; "all" for an influence
            quantity), ``distribution``, ``standard_uncertainty`` (of the input), ``unit`` (of the
            input), ``sensitivity`` (per unit of the input), ``contribution`` (their product: share
            of the speed, or degrees) and ``share`` (of the combined variance).

        Raises
        ------
        ob.InputError
            If the sensor or the quantity is unknown.

        Examples
        --------
        >>> import offbody as ob
        >>> table = ob.survey(ob.solve(ob.circle(0.3)), ob.PointSensor(0.0, 1.5, name="sonic"))
        >>> result = ob.uncertainty(table, position=ob.Normal(0.01), alignment=ob.Normal(0.5))
        >>> [(line["source"], round(line["share"], 3)) for line in result.budget("sonic", 45.0)[:2]]
        [('alignment', 0.631), ('position x', 0.369)]
        """
        place = self._place(sensor)
        row = np.argmin(np.abs(within_half_turn(self.angles - as_number("angle", angle))))
        parts = self._parts(place, quantity)
        total = sum(part[row] ** 2 for _, part in parts)
        lines = []
        for one, part in parts:
            standard, contribution = float(one.distribution.standard), float(part[row])
            lines.append({
                "source": one.name,
                "sensor": "all" if one.sensor is None else self.names[one.sensor],
                "distribution": one.distribution.word,
                "standard_uncertainty": standard,
                "unit": one.unit,
                "sensitivity": contribution / standard if standard else 0.0,
                "contribution": contribution,
                "share": float(contribution**2 / total) if total else 0.0,
            })
        return sorted(lines, key=lambda line: -line["share"])

    def shares(self, sensor, quantity="speed"):
        """Share of the combined variance by source, as {source: (n,) array}.

        Parameters
        ----------
        sensor : str
            Name of a sensor.
        quantity : {"speed", "direction"}

        Returns
        -------
        dict
            The sources of several sensors of the same name together; NaN where there is no
            uncertainty.
        """
        place = self._place(sensor)
        sums = {}
        for one, part in self._parts(place, quantity):
            sums[one.name] = sums.get(one.name, 0.0) + part**2
        combined = (self.speed if quantity == "speed" else self.direction)[:, place]
        with np.errstate(divide="ignore", invalid="ignore"):
            return {name: part / combined**2 for name, part in sums.items()}

    def dominant(self, sensor, quantity="speed"):
        """Which source contributes most, (n,) of str; empty where there is no uncertainty.

        Parameters
        ----------
        sensor : str
            Name of a sensor.
        quantity : {"speed", "direction"}

        Returns
        -------
        (n,) array of str
        """
        shares = {"": np.zeros(len(self.angles))} | self.shares(sensor, quantity)
        table = np.nan_to_num(np.stack(list(shares.values())), nan=-1.0)
        names = np.array(list(shares), dtype=object)
        return np.where(table.max(axis=0) > 0, names[table.argmax(axis=0)], "")

    def monte_carlo(self, sensor, angles, draws=10_000, seed=0):
        """The same by drawing all inputs, surveying the moved sensors and correcting the readings.

        Parameters
        ----------
        sensor : str
            Name of a sensor that reads speed or direction.
        angles : float or array_like of shape (m,)
            Angles OF THE TABLE at which to draw, degrees.
        draws : int
            At least 100.
        seed : int
            Of the random numbers: the same seed gives the same result.

        Returns
        -------
        MonteCarlo

        Raises
        ------
        ob.InputError
            If an angle is not one of the table or not trusted, or a drawn place lies inside a
            body.

        Notes
        -----
        Places are drawn and surveyed anew with the model in hand. Influence quantities enter by
        their derivatives, as the model is not solved again.

        References
        ----------
        JCGM 101:2008, clauses 7 and 8.

        Examples
        --------
        >>> import offbody as ob
        >>> table = ob.survey(ob.solve(ob.circle(0.3)), ob.PointSensor(0.0, 1.5, name="sonic"))
        >>> result = ob.uncertainty(table, position=ob.Rectangular(0.02))
        >>> drawn = result.monte_carlo("sonic", 45.0, draws=2000)
        >>> bool(drawn.speed_agrees()), round(float(drawn.speed_standard / drawn.speed_first), 1)
        (True, 1.0)
        """
        place = self._place(sensor)
        draws = as_count("draws", draws, least=100)
        seed = as_count("seed", seed, least=0)
        rows = self._rows(angles)
        other = self.direction_sensor[place]
        first = self.speed[rows, place]
        turning = np.full(len(rows), np.nan) if other < 0 else self.direction[rows, other]
        for angle, *known in zip(self.angles[rows], first, turning, strict=True):
            if np.isnan(known).all():
                raise InputError(
                    f"angles: at {angle:g} {sensor!r} is not trusted; draw where there is an "
                    "uncertainty"
                )
        drawn = _Drawn(self, place, rows, draws, np.random.default_rng(seed))
        speed, direction = drawn.errors()
        shape = np.shape(angles)
        return MonteCarlo(
            angles=self.angles[rows].reshape(shape),
            speed_errors=speed.reshape(*shape, draws),
            direction_errors=direction.reshape(*shape, draws),
            speed_first=first.reshape(shape),
            direction_first=turning.reshape(shape),
        )

    # --- parts --------------------------------------------------------------------------------

    @cached_property
    def _slopes(self):
        """Slopes per degree of the direction error, and of the log of the speed ratio, (n, k)."""
        turn = _Neighbours(self.table.angles)
        error = turn.slope(self.table.direction_error, circular=True)
        with np.errstate(divide="ignore", invalid="ignore"):
            return error, turn.slope(self.table.speed_ratio) / self.table.speed_ratio

    def _usable(self, quantity):
        """(n, k) where a sensor is trusted and reads the quantity."""
        column = "speed_ratio" if quantity == "speed" else "direction_error"
        return self.table.trust & np.isfinite(getattr(self.table, column))

    def _turning(self, one, sensor):
        """Shift (n,) of the corrected direction by one standard uncertainty of an input."""
        steepness = 1.0 + self._slopes[0][:, sensor]
        return one.distribution.standard * one.direction[:, sensor] / steepness

    def _direction_parts(self, sensor):
        return [
            (one, self._turning(one, sensor))
            for one in self.inputs
            if one.sensor in (None, sensor) and one.direction[:, sensor].any()
        ]

    def _speed_parts(self, sensor, other):
        """Shifts of the corrected speed: both paths of one input are added with their signs."""
        parts = []
        for one in self.inputs:
            shift = np.zeros(len(self.angles))
            if one.sensor in (None, sensor):
                shift += one.distribution.standard * one.speed[:, sensor]
            if other >= 0 and one.sensor in (None, other):
                shift -= self._slopes[1][:, sensor] * self._turning(one, other)
            if shift.any():
                parts.append((one, shift))
        return parts

    def _parts(self, place, quantity):
        if quantity == "speed":
            return self._speed_parts(place, self.direction_sensor[place])
        if quantity == "direction":
            return self._direction_parts(place)
        raise InputError(f"quantity = {quantity!r} is not known; speed or direction")

    def _speed(self, sensor, other):
        usable = self._usable("speed")[:, sensor]
        if other >= 0:
            usable = usable & self._usable("direction")[:, other]
        combined = _root_sum(self._speed_parts(sensor, other), len(self.angles))
        return np.where(usable, combined, np.nan)

    def _place(self, sensor):
        if sensor in self.names:
            return self.names.index(sensor)
        if isinstance(sensor, int) and 0 <= sensor < len(self.names):
            return sensor
        raise InputError(f"sensor {sensor!r} is unknown; {nearest_name(sensor, self.names)}")

    def _rows(self, angles):
        """Rows of the table at its own angles, or an InputError."""
        asked = np.ravel(as_reals("angles", angles))
        away = np.abs(within_half_turn(self.angles - asked[:, None]))
        rows = away.argmin(axis=1)
        for angle, distance in zip(asked, away.min(axis=1), strict=True):
            if distance > 1e-9:
                raise InputError(f"angles: {angle:g} is not an angle of the table; take one of it")
        return rows


@dataclass(frozen=True, eq=False)
class MonteCarlo:
    """Errors of corrected values over all draws, beside the first-order uncertainties.

    Attributes
    ----------
    angles : (m,) array
        Where they were drawn.
    speed_errors : (m, draws) array
        Of the corrected speed, as a share of the undisturbed speed; NaN where the correction
        refuses a drawn reading.
    direction_errors : (m, draws) array
        Of the corrected direction, degrees.
    speed_first, direction_first : (m,) array
        Standard uncertainties to first order.
    """

    angles: np.ndarray
    speed_errors: np.ndarray
    direction_errors: np.ndarray
    speed_first: np.ndarray
    direction_first: np.ndarray

    @property
    def refused(self):
        """(m,) how many draws the correction refused."""
        unread = np.isnan(self.speed_errors).all(axis=-1, keepdims=True)
        errors = np.where(unread, self.direction_errors, self.speed_errors)
        return np.isnan(errors).sum(axis=-1)

    @property
    def speed_standard(self):
        """(m,) standard deviation of the speed's errors."""
        return np.nanstd(self.speed_errors, axis=-1, ddof=1)

    @property
    def direction_standard(self):
        """(m,) standard deviation of the direction's errors, degrees."""
        return np.nanstd(self.direction_errors, axis=-1, ddof=1)

    @property
    def speed_interval(self):
        """(2, m) limits of 95 percent of the speed's errors, as many beyond either."""
        return np.nanquantile(self.speed_errors, [0.025, 0.975], axis=-1)

    @property
    def direction_interval(self):
        """(2, m) the same for the direction, degrees."""
        return np.nanquantile(self.direction_errors, [0.025, 0.975], axis=-1)

    def speed_agrees(self, digits=1):
        """(m,) whether the 95 percent intervals of both ways agree to so many digits.

        Parameters
        ----------
        digits : int
            Significant digits of the standard uncertainty that are to hold (JCGM 101, 7.9.2).

        Returns
        -------
        (m,) array of bool
        """
        return intervals_agree(self.speed_interval, self.speed_first, digits)

    def direction_agrees(self, digits=1):
        """(m,) the same for the direction."""
        return intervals_agree(self.direction_interval, self.direction_first, digits)


def intervals_agree(interval, standard, digits=1):
    """Whether 95 percent intervals about zero agree, as JCGM 101, clause 8, compares them.

    Parameters
    ----------
    interval : (2, ...) array
        From draws.
    standard : (...) array
        Standard uncertainty to first order, of a normal distribution.
    digits : int
        Significant digits of the standard uncertainty that are to hold.

    Returns
    -------
    (...) array of bool
    """
    digits = as_count("digits", digits, least=1, greatest=3)
    # With the standard uncertainty written as a whole number of so many digits, times ten to a
    # power: half a unit of that number is what the limits may differ by.
    with np.errstate(divide="ignore"):
        power = np.floor(np.log10(standard)) - (digits - 1)
    tolerance = 0.5 * 10.0**power
    limits = NORMAL_95 * np.stack([-standard, standard])
    return (np.abs(interval - limits) <= tolerance).all(axis=0)


class _Drawn:
    """Draws of every input that bears on one sensor's corrected values, at rows of the table."""

    def __init__(self, result, sensor, rows, draws, generator):
        self.result, self.rows, self.draws = result, rows, draws
        self.sensor, self.other = sensor, result.direction_sensor[sensor]
        bearing = (None, sensor, self.other)
        self.values = [
            (one, one.distribution.draw(generator, draws))
            for one in result.inputs
            if one.sensor in bearing
        ]

    def errors(self):
        """Errors of the corrected speed (share) and direction (degrees), (rows, draws) each."""
        table = self.result.table
        angles = table.angles[self.rows][:, None]
        reads_speed = np.isfinite(table.speed_ratio[:, self.sensor]).any()
        speed = self._sensed_speed() if reads_speed else None
        if self.other < 0:
            assumed = table.speed_ratio[self.rows, self.sensor][:, None]
            return speed / assumed - 1.0, np.full_like(speed, np.nan)
        names = [table.names[place] for place in dict.fromkeys((self.sensor, self.other))]
        correction = Correction.from_survey(table, names)
        direction = angles + self._sensed_turn()
        corrected = correction.correct(
            None if speed is None else {names[0]: speed}, {names[-1]: within_turn(direction)}
        )
        return corrected.speed - 1.0, within_half_turn(corrected.direction - angles)

    def _sensed_speed(self):
        sensed = self._surveyed(self.sensor, "speed_ratio")
        for one, values in self.values:
            if one.displacement is None and one.sensor in (None, self.sensor):
                sensed = sensed * (1.0 + one.speed[self.rows, self.sensor][:, None] * values)
        return sensed

    def _sensed_turn(self):
        turn = self._surveyed(self.other, "direction_error")
        for one, values in self.values:
            if one.displacement is None and one.sensor in (None, self.other):
                turn = turn + one.direction[self.rows, self.other][:, None] * values
        return turn

    def _surveyed(self, sensor, column):
        """A column of the survey, (rows, draws), of a sensor in its drawn places."""
        table = self.result.table
        moves = np.zeros(self.draws, complex)
        for one, values in self.values:
            if one.displacement is not None and one.sensor == sensor:
                moves += one.displacement(values)
        if not moves.any():
            assumed = getattr(table, column)[self.rows, sensor]
            return np.repeat(assumed[:, None], self.draws, axis=1)
        kind = "bearings" if table.by_bearing else "directions"
        angles = {kind: table.angles[self.rows]}
        parts = []
        for first in range(0, self.draws, SENSORS_AT_ONCE):
            places = [
                replace(table.sensors[sensor].moved(move.real, move.imag), name=None)
                for move in moves[first : first + SENSORS_AT_ONCE]
            ]
            booms = [table.booms[sensor]] * len(places)
            parts.append(getattr(survey(table.model, places, booms=booms, **angles), column))
        return np.concatenate(parts, axis=1)


class _Sources:
    """The inputs of a budget, as they are added."""

    def __init__(self, table):
        self.table = table
        self.inputs = []
        self.shape = (len(table.angles), len(table.names))

    def _add(self, name, unit, distribution, sensor, speed, direction, displacement=None):
        columns = []
        for values in (speed, direction):
            full = np.zeros(self.shape)
            here = slice(None) if sensor is None else (slice(None), sensor)
            full[here] = values
            # What a sensor does not read, or cannot there, is no part of a sum.
            columns.append(np.nan_to_num(full))
        self.inputs.append(_Input(name, unit, distribution, sensor, *columns, displacement))

    def _each(self, name, given):
        """(place, distribution) of every sensor that has the source."""
        if given is None:
            return
        if isinstance(given, Mapping):
            for sensor, distribution in given.items():
                yield self._named(name, sensor), _as_distribution(
                    f"{name}[{sensor!r}]", distribution
                )
            return
        distribution = _as_distribution(name, given)
        for place in range(self.shape[1]):
            yield place, distribution

    def _named(self, name, sensor):
        if sensor not in self.table.names:
            raise InputError(f"{name}: {sensor!r} is unknown; "
                             f"{nearest_name(sensor, self.table.names)}")
        return self.table.names.index(sensor)

    def add_booms(self, foot, length, angle):
        for place, distribution in self._each("boom_length", length):
            arm = self._arm(place, foot)
            unit = arm / abs(arm)
            self._add_move("boom length", "length", distribution, place, unit,
                           lambda x, unit=unit: unit * x)
        for place, distribution in self._each("boom_angle", angle):
            arm = self._arm(place, foot)
            self._add_move("boom angle", "degrees", distribution, place, 1j * np.radians(1.0) * arm,
                           lambda x, arm=arm: arm * np.expm1(1j * np.radians(x)))

    def add_positions(self, position):
        for place, distribution in self._each("position", position):
            self._add_move("position x", "length", distribution, place, 1.0, lambda x: x + 0j)
            self._add_move("position y", "length", distribution, place, 1j, lambda x: 1j * x)

    def _add_move(self, name, unit, distribution, place, step, displacement):
        """A source that moves a sensor by ``step``, complex, per unit."""
        table, sensor = self.table, self.table.sensors[place]
        if sensor.kind == "port":
            return
        along = np.array([np.real(step), np.imag(step)])
        with np.errstate(divide="ignore", invalid="ignore"):
            share = table.speed_ratio_gradient[:, place] @ along / table.speed_ratio[:, place]
        turn = table.direction_error_gradient[:, place] @ along
        self._add(name, unit, distribution, place, share, turn, displacement)

    def _arm(self, place, foot):
        """From a boom's foot to the sensor, complex."""
        name = self.table.names[place]
        if isinstance(foot, Mapping):
            foot = foot.get(name)
        if foot is None:
            raise InputError(f"boom_foot is missing for {name!r}: say where its boom begins")
        centre = np.asarray(self.table.sensors[place].centre)
        arm = complex(*(centre - as_point("boom_foot", foot)))
        if arm == 0:
            raise InputError(f"boom_foot of {name!r} is its own place: say where its boom begins")
        return arm

    def add_shares(self, argument, given):
        for place, distribution in self._each(argument, given):
            self._add(_words(argument), "1", distribution, place, 1.0, 0.0)

    def add_turns(self, argument, given):
        for place, distribution in self._each(argument, given):
            self._add(_words(argument), "degrees", distribution, place, 0.0, 1.0)

    def add_ratios(self, argument, given):
        with np.errstate(divide="ignore"):
            share = 1.0 / self.table.speed_ratio
        for place, distribution in self._each(argument, given):
            self._add(_words(argument), "1", distribution, place, share[:, place], 0.0)

    def add_influence(self, quantity):
        if not isinstance(quantity, InfluenceQuantity):
            raise InputError(f"influences must hold InfluenceQuantity, got {quantity!r}")
        if {quantity.speed_ratio.shape, quantity.direction_error.shape} != {self.shape}:
            raise InputError(
                f"influences: {quantity.name!r} has derivatives of shape "
                f"{quantity.speed_ratio.shape} and {quantity.direction_error.shape}; the table's "
                f"is {self.shape}"
            )
        with np.errstate(divide="ignore", invalid="ignore"):
            share = quantity.speed_ratio / self.table.speed_ratio
        self._add(quantity.name, "its own", quantity.distribution, None, share,
                  quantity.direction_error)

    def add_numerical(self):
        error = getattr(self.table, "numerical_error", None)
        if error is None:
            return
        # An error of the velocity, which may lie along it or across it.
        self._add_half_widths("numerical error", error, np.degrees(error))

    def add_interpolation(self):
        turn = _Neighbours(self.table.angles)
        self._add_half_widths(
            "between the table's angles",
            turn.bulge(self.table.speed_ratio) / 4,
            turn.bulge(self.table.direction_error, circular=True) / 4,
        )

    def _add_half_widths(self, name, ratio, turn):
        """A source whose half-width differs from angle to angle: a unit one, scaled."""
        with np.errstate(divide="ignore", invalid="ignore"):
            share = ratio / self.table.speed_ratio
        for place in range(self.shape[1]):
            # Nothing ties the error of the one to that of the other.
            self._add(name, "1", Rectangular(1.0), place, share[:, place], 0.0)
            self._add(name, "1", Rectangular(1.0), place, 0.0, turn[:, place])


class _Neighbours:
    """The neighbours of every angle round the turn, as far as they are near enough to join."""

    def __init__(self, angles):
        turned = within_turn(angles)
        self.order = np.argsort(turned, kind="stable")
        self.back = np.argsort(self.order, kind="stable")
        turned = turned[self.order]
        after = np.diff(turned, append=turned[0] + 360.0)
        self.after = np.where((after > 0) & (after <= WIDEST_STEP), after, np.nan)[:, None]
        self.before = np.roll(self.after, 1, axis=0)

    def _rises(self, values, circular):
        """Slopes (n, k) toward the neighbours before and after, in the order of the turn."""
        values = values[self.order]
        rise = np.roll(values, -1, axis=0) - values
        rise = within_half_turn(rise) if circular else rise
        return np.roll(rise, 1, axis=0) / self.before, rise / self.after

    def slope(self, values, circular=False):
        """Slope (n, k) per degree, as the mean of both sides or from the one that there is."""
        sides = np.stack(self._rises(values, circular))
        known = np.isfinite(sides)
        mean = np.where(known, sides, 0.0).sum(axis=0) / np.maximum(known.sum(axis=0), 1)
        return mean[self.back]

    def bulge(self, values, circular=False):
        """How far (n, k) each value lies from the line between its neighbours; 0 at ends."""
        before, after = self._rises(values, circular)
        share = self.before * self.after / (self.before + self.after)
        return np.nan_to_num(np.abs((after - before) * share))[self.back]


def _words(argument):
    return argument.replace("_", " ")


def _root_sum(parts, size):
    """Root of the sum of squares, (size,); 0 of none."""
    return np.sqrt(sum((part**2 for _, part in parts), np.zeros(size)))


def _paired(table, given):
    """Per sensor, the place of the one whose direction its speed is corrected with; -1 for none."""
    reads = [
        sensor.kind not in ("path", "port") and np.isfinite(table.direction_error[:, place]).any()
        for place, sensor in enumerate(table.sensors)
    ]
    first = reads.index(True) if any(reads) else -1
    pairs = [place if can else first for place, can in enumerate(reads)]
    for name, other in (given or {}).items():
        for one in (name, other):
            if one not in table.names:
                raise InputError(f"direction_from: {one!r} is unknown; "
                                 f"{nearest_name(one, table.names)}")
        place = table.names.index(other)
        if not reads[place]:
            raise InputError(f"direction_from: {other!r} reads no direction")
        pairs[table.names.index(name)] = place
    return tuple(pairs)


def _as_distribution(name, value):
    if not isinstance(value, DISTRIBUTIONS):
        raise InputError(
            f"{name} must be ob.Rectangular(half_width) or ob.Normal(standard), got {value!r}: "
            "a bare number does not say which it is"
        )
    return value
