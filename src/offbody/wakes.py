"""How the wake of a bluff body pushes the outer flow aside.

A body with drag coefficient Cd and reference length b displaces the outer flow like a source of
strength Cd b/2 for unit onset speed (Batchelor, An Introduction to Fluid Dynamics, on the far field
of a body with drag; wake-source models: Parkinson and Jandali, J. Fluid Mech. 40 (1970) 577-594).
It is blown through the lee wall, between the points widest across the stream, as sin^6 of the
arc fraction. A step at the ends would make the surface speed logarithmically infinite there; what
is left of one, a jump in the sixth derivative, costs 1e-9 of a circle's field (sin^2: 1e-4, sin^4:
2e-7), as the ends of the lee lie where the direction puts them, within panels.
"""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from offbody.checks import as_number, as_reals
from offbody.errors import InputError


@dataclass(frozen=True)
class Wake:
    """The wake of one body, by its drag coefficient.

    Parameters
    ----------
    drag_coefficient : float or mapping
        Drag per unit dynamic pressure, span and reference length; or a table {direction in degrees:
        coefficient} against the stream's direction, linear in between and periodic.
    reference : float, optional
        The length that the coefficient refers to, in the caller's unit. None: the body's breadth
        across the stream, for each direction.

    Raises
    ------
    InputError
        If a coefficient is negative or not finite, the table is empty, or the reference is not
        greater than zero.

    References
    ----------
    G. K. Batchelor, An Introduction to Fluid Dynamics, Cambridge University Press, 1967.

    Examples
    --------
    >>> import offbody as ob
    >>> model = ob.solve(ob.circle(1.0), wakes=ob.Wake(1.2))
    >>> upstream = model.velocity((-200.0, 0.0))[0]
    >>> round(1.0 - upstream, 6)                    # about Cd b/(4 pi R) = 0.000477
    0.000484
    """

    drag_coefficient: object
    reference: float | None = None

    def __post_init__(self):
        if isinstance(self.drag_coefficient, Mapping):
            object.__setattr__(self, "drag_coefficient", self._table(self.drag_coefficient))
        else:
            number = as_number("drag_coefficient", self.drag_coefficient, least=0.0)
            object.__setattr__(self, "drag_coefficient", number)
        if self.reference is not None:
            number = as_number("reference", self.reference, positive=True)
            object.__setattr__(self, "reference", number)

    @staticmethod
    def _table(given):
        if not given:
            raise InputError("drag_coefficient is an empty table; give {direction: coefficient}")
        directions = as_reals("drag_coefficient's directions", list(given.keys())) % 360.0
        values = as_reals("drag_coefficient's values", list(given.values()))
        if values.min() < 0.0:
            raise InputError(f"drag_coefficient must not be negative, got {values.min():g}")
        if len(np.unique(directions)) < len(directions):
            raise InputError("drag_coefficient's table names a direction twice (0 is 360)")
        sequence = np.argsort(directions)
        pairs = zip(directions[sequence], values[sequence], strict=True)
        return tuple((float(d), float(v)) for d, v in pairs)

    def drag(self, directions):
        """Drag coefficients for directions in degrees."""
        if isinstance(self.drag_coefficient, float):
            return np.full(np.shape(directions), self.drag_coefficient)
        table = np.array(self.drag_coefficient)
        return np.interp(directions, table[:, 0], table[:, 1], period=360.0)


def profile(arc, start, length):
    """Normal speed per unit flux at arc positions of a lee that starts at ``start``: sin^6.

    arc (n,) or (d, n); start, length broadcast against it. The mean of sin^6 is 5/16. Zero outside.
    """
    fraction = (arc - start) / length
    inside = (fraction > 0.0) & (fraction < 1.0)
    shape = np.sin(np.pi * np.where(inside, fraction, 0.0)) ** 6
    return shape / (0.3125 * length)
