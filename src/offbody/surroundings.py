"""What stands round the bodies: nothing, a ground plane, two duct walls, or copies in a row.

Plane walls are mirrors and copies repeat, so they change the kernel and nothing else. Each kind
says so by two numbers: ``mirror``, the height of a plane in which the flow is reflected, and
``period``, the distance along y at which all of it repeats. Duct walls a distance H apart are a
mirror and the period 2 H. ``offbody.images`` turns the two into image flows.
"""

from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from offbody.checks import as_number
from offbody.errors import InputError

ALONG = 1e-9  # degrees: nearer than this to an admitted direction is that direction


@dataclass(frozen=True)
class OpenStream:
    """A stream without bounds: every direction is admitted.

    Examples
    --------
    >>> import offbody as ob
    >>> ob.OpenStream()
    OpenStream()
    """

    mirror: ClassVar[None] = None
    period: ClassVar[None] = None
    walls: ClassVar[tuple] = ()

    def admit(self, directions):
        """Directions in degrees, all of which an open stream admits."""
        return directions


@dataclass(frozen=True)
class Ground:
    """A plane wall at height y below the bodies; the stream runs along x, at 0 or 180 degrees.

    Parameters
    ----------
    y : float
        Height of the plane, in the caller's unit of length.

    Raises
    ------
    InputError
        If y is not a finite number.

    Examples
    --------
    >>> import offbody as ob
    >>> model = ob.solve(ob.circle(1.0, centre=(0, 1)), surroundings=ob.Ground())
    >>> bool(abs(model.velocity((3.0, 0.0))[1]) < 1e-12)    # along the ground
    True
    """

    y: float = 0.0
    period: ClassVar[None] = None

    def __post_init__(self):
        object.__setattr__(self, "y", as_number("y", self.y))

    @property
    def mirror(self):
        """Height of the plane in which the flow is reflected."""
        return self.y

    @property
    def walls(self):
        """Heights of the plane walls, from below."""
        return (self.y,)

    def admit(self, directions):
        """The directions if they run along the ground, or an InputError."""
        return _along_x(directions, f"over the ground y = {self.y:g}")


@dataclass(frozen=True)
class Duct:
    """Two plane walls y = lower and y = upper; the stream runs along x, at 0 or 180 degrees.

    The undisturbed velocity is that far upstream.

    Parameters
    ----------
    lower, upper : float
        Heights of the walls, in the caller's unit of length.

    Raises
    ------
    InputError
        If a height is not a finite number, or lower is not below upper.

    References
    ----------
    H. J. Allen and W. G. Vincenti, NACA Report 782 (1944), for wall interference by images.

    Examples
    --------
    >>> import offbody as ob
    >>> model = ob.solve(ob.circle(1.0), surroundings=ob.Duct(-5.0, 5.0))
    >>> round(float(model.velocity((0.0, 5.0))[0]), 3)      # at the wall, abreast of the body
    1.025
    """

    lower: float
    upper: float

    def __post_init__(self):
        for name in ("lower", "upper"):
            object.__setattr__(self, name, as_number(name, getattr(self, name)))
        if self.lower >= self.upper:
            raise InputError(
                f"lower = {self.lower:g} must be below upper = {self.upper:g} in a duct"
            )

    @property
    def mirror(self):
        """Height of a plane in which the flow is reflected."""
        return self.lower

    @property
    def period(self):
        """Distance along y at which the flow and its reflection repeat."""
        return 2.0 * (self.upper - self.lower)

    @property
    def walls(self):
        """Heights of the plane walls, from below."""
        return (self.lower, self.upper)

    def admit(self, directions):
        """The directions if they run along the duct, or an InputError."""
        return _along_x(directions, f"in the duct from y = {self.lower:g} to {self.upper:g}")


@dataclass(frozen=True)
class Row:
    """Copies of the bodies at every pitch along y, without end.

    The onset is the stream far upstream: any direction across the row, and along it (90 and -90
    degrees) where there is neither circulation nor a wake.

    Parameters
    ----------
    pitch : float
        Distance from one copy to the next, in the caller's unit of length.

    Raises
    ------
    InputError
        If the pitch is not a finite number greater than zero.

    Examples
    --------
    >>> import offbody as ob
    >>> model = ob.solve(ob.circle(1.0), surroundings=ob.Row(pitch=4.0))
    >>> here, there = model.velocity([(0.3, 2.0), (0.3, 6.0)])
    >>> bool(abs(here - there).max() < 1e-12)
    True
    """

    pitch: float
    mirror: ClassVar[None] = None
    walls: ClassVar[tuple] = ()

    def __post_init__(self):
        object.__setattr__(self, "pitch", as_number("pitch", self.pitch, positive=True))

    @property
    def period(self):
        """Distance along y at which the flow repeats."""
        return self.pitch

    def admit(self, directions):
        """Directions in degrees; one along the row is refused later if bodies turn the stream."""
        return directions


KINDS = (OpenStream, Ground, Duct, Row)


def usual_directions(surroundings):
    """The directions that a survey takes if none are asked for: each degree, or along the walls."""
    return np.array([0.0, 180.0]) if surroundings.walls else np.arange(360.0)


def holds(surroundings, z):
    """Which complex points lie between the walls; a wall counts, to rounding."""
    within = np.ones(np.shape(z), bool)
    if surroundings.walls:
        room = 1e-12 * max(1.0, *(abs(wall) for wall in surroundings.walls))
        within &= z.imag >= surroundings.walls[0] - room
        if len(surroundings.walls) > 1:
            within &= z.imag <= surroundings.walls[1] + room
    return within


def reflected(surroundings, z):
    """The mirror images of complex points in the plane ``mirror``."""
    return np.conj(z) + 2j * surroundings.mirror


def copies_of(surroundings, z):
    """The nearest images of complex points, for the distances between walls: a list of arrays."""
    if surroundings.walls:
        return [np.conj(z) + 2j * wall for wall in surroundings.walls]
    if surroundings.period is None:
        return []
    reach = 1 + int(np.ptp(z.imag) / surroundings.period)
    steps = [n for n in range(-reach, reach + 1) if n]
    return [z + 1j * n * surroundings.period for n in steps]


def _along_x(directions, where):
    turns = np.remainder(directions, 180.0)
    across = np.minimum(turns, 180.0 - turns) > ALONG
    if np.any(across):
        wrong = np.atleast_1d(directions)[np.atleast_1d(across)][0]
        raise InputError(
            f"direction = {wrong:g}: {where} the stream runs along x; use direction 0 or 180"
        )
    return directions
