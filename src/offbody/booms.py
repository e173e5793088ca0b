"""Booms: what the section of a boom does to an instrument that stands above it."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from offbody.checks import as_number
from offbody.errors import InputError
from offbody.model import inside, solve
from offbody.outlines import Outline, circle


@dataclass(frozen=True)
class Boom:
    """A horizontal boom below an instrument, seen as a section in the plane across it.

    Parameters
    ----------
    direction : float
        Where it points, degrees counter-clockwise from +x.
    height : float
        Of the instrument above the boom's axis, in the caller's unit of length.
    section : float or Outline
        Diameter of a tubular boom; or its outline about the boom's axis as seen from the tip, y
        upward.
    wake : Wake, optional
        Of the section in a stream across the boom.

    Raises
    ------
    ob.InputError
        If a number is not finite, the section is neither a diameter nor an outline, or the
        instrument would be inside it.

    Notes
    -----
    Only the part of the stream across the boom is changed, and of that the horizontal part counts,
    as for a cup. The boom is taken as long on either side of the instrument, and the flow that it
    meets as that at the instrument.

    Examples
    --------
    >>> import offbody as ob
    >>> boom = ob.Boom(direction=90.0, height=0.9, section=0.06)     # 15 diameters above the axis
    >>> [round(factor, 4) for factor in boom.factors]
    [1.0011, 1.0011]
    """

    direction: float
    height: float
    section: object
    wake: object = None

    def __post_init__(self):
        for name in ("direction", "height"):
            object.__setattr__(self, name, as_number(name, getattr(self, name)))
        if not isinstance(self.section, Outline):
            diameter = as_number("section", self.section, positive=True)
            object.__setattr__(self, "section", diameter)
        if inside(self._outline, (0.0, self.height)):
            raise InputError(
                f"height = {self.height:g} is inside the boom ({self._outline.name}): let the "
                "instrument stand above it"
            )

    @property
    def _outline(self):
        return self.section if isinstance(self.section, Outline) else circle(self.section)

    @property
    def across(self):
        """Unit vector to the left of the boom, as a complex number."""
        return 1j * np.exp(1j * np.radians(self.direction))

    @cached_property
    def factors(self):
        """What the boom makes of a unit stream to the left of its direction, and to the right."""
        model = solve(self._outline, wakes=self.wake)
        velocity = model.velocity((0.0, self.height), [0.0, 180.0])[:, 0]
        return float(velocity[0]), float(-velocity[1])

    def passed(self, velocity, change):
        """What becomes of velocities u + i v (or of changes of them) past the boom."""
        to_left, to_right = self.factors
        against = np.conj(self.across)
        factor = np.where((velocity * against).real >= 0, to_left, to_right)
        return change + (factor - 1) * (change * against).real * self.across
