"""What stands round the bodies: nothing, or a ground plane that mirrors them."""

from dataclasses import dataclass

import numpy as np

from offbody.checks import as_number
from offbody.errors import InputError


@dataclass(frozen=True)
class OpenStream:
    """A stream without bounds: every direction is admitted.

    Examples
    --------
    >>> import offbody as ob
    >>> ob.OpenStream()
    OpenStream()
    """

    def admit(self, directions):
        """Directions in degrees, all of which an open stream admits."""
        return directions

    def mirrored(self, z):
        """None: there is no image flow."""
        return None


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
    >>> model.velocity((3.0, 0.0)).round(12)[1] == 0.0    # along the ground
    True
    """

    y: float = 0.0

    def __post_init__(self):
        object.__setattr__(self, "y", as_number("y", self.y))

    def admit(self, directions):
        """The directions if they run along the ground, or an InputError."""
        turns = np.remainder(directions, 180.0)
        across = np.minimum(turns, 180.0 - turns) > 1e-9
        if np.any(across):
            wrong = np.atleast_1d(directions)[np.atleast_1d(across)][0]
            raise InputError(
                f"direction = {wrong:g}: over the ground y = {self.y:g} the stream runs along it; "
                "use direction 0 or 180"
            )
        return directions

    def mirrored(self, z):
        """The mirror images of complex points in the plane."""
        return np.conj(z) + 2j * self.y
