"""Regions that ``ob.best_mounts`` searches, and what it returns."""

from dataclasses import dataclass, field
from functools import cached_property

import numpy as np

from offbody.bearings import from_bearing, within_turn
from offbody.checks import as_number, as_point, as_reals
from offbody.errors import InputError
from offbody.surveys import survey


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
        What no finer search could pass, by the slopes at the places read: an error changes by no
        more, from a place to half a step off, than the greatest slope there and at its neighbours
        says. Within 1 percent of ``refined`` where all cells could be split until nothing was left.
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
        return abs(self.refined - self.bound) / max(abs(self.refined), 1e-6)


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

    Examples
    --------
    >>> import offbody as ob
    >>> mast = ob.solve(ob.circle(0.3))
    >>> ob.best_mounts(mast, ob.Reach(3.0, sector=(180, 180)), directions=[0.0])
    Mounts(1 choices, length 1.5, none beyond 1.485)
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
        """The ``ob.Survey`` of one choice, for the winds asked for or for others.

        Parameters
        ----------
        choice : int
            From 0, the best.
        **angles
            ``directions`` or ``bearings``, as ``ob.survey`` takes them.

        Examples
        --------
        >>> import offbody as ob
        >>> mast = ob.solve(ob.circle(0.3))
        >>> found = ob.best_mounts(mast, ob.Reach(3.0, sector=(180, 180)), directions=[0.0])
        >>> found.survey(directions=[0.0, 90.0]).speed_ratio.round(4)
        array([[0.99],
               [1.01]])
        """
        if not angles:
            angles = {"bearings" if self.by_bearing else "directions": self.angles}
        return survey(self.model, list(self.choices[choice].sensors), **angles)

    def rows(self):
        """One dict per choice, numbered from 1, with the same keys for each."""
        return [{"choice": n, **one.row()} for n, one in enumerate(self.choices, start=1)]


@dataclass(frozen=True, eq=False)
class Asked:
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
