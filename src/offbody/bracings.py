"""Bracing: members that a horizontal section cuts only at points, as drag spread along a face.

A face whose members take the drag Cd (n . U)|U|/2 per unit of length from a stream U, n its normal,
displaces the stream as a wake does (see ``offbody.wakes``), by a source of strength

    Cd |n . U|/2

per unit of length; the stream passes through. It is spread evenly along the face but for its ends,
where it fades as 3 s^2 - 2 s^3 over a tenth of the length: a step makes the velocity infinite at a
leg that the face ends on.
"""

from dataclasses import dataclass
from types import SimpleNamespace

import numpy as np

from offbody import flow
from offbody.checks import as_number, as_point
from offbody.errors import InputError
from offbody.panels import assemble
from offbody.segments import crosses
from offbody.surroundings import holds

FADING = 0.1    # of the length, at either end
ORDER = 4       # terms of the fading's cubic
ENDS_OFF = 1e-6  # of the length: an end on a wall does not cross it


@dataclass(frozen=True)
class Bracing:
    """The bracing of one face of a lattice: its drag, spread along the face.

    Parameters
    ----------
    start, end : array_like of shape (2,)
        Between which it spans, clear of all bodies or ending on their walls, in the caller's unit.
    drag_coefficient : float
        Drag per unit dynamic pressure, span and length of the face in a stream square to it: the
        share of the face that members cover, times the drag coefficient of the members.

    Raises
    ------
    ob.InputError
        If start and end are not two distinct points, or the drag coefficient is negative.

    Notes
    -----
    In a stream aslant the drag falls with the stream's component square to the face. Upstream of
    all members the flow that it displaces is that of potential flow; in its lee it is not
    predicted, and a survey trusts nothing there.

    Examples
    --------
    >>> import offbody as ob
    >>> posts = [ob.circle(0.1, (0.0, -0.5)), ob.circle(0.1, (0.0, 0.5))]
    >>> face = ob.Bracing((0.0, -0.45), (0.0, 0.45), drag_coefficient=0.2)
    >>> model = ob.solve(posts, bracings=[face])
    >>> round(float(1.0 - model.velocity((-200.0, 0.0))[0]), 6)     # about D/(4 pi R) = 0.000072
    7.2e-05
    """

    start: tuple[float, float]
    end: tuple[float, float]
    drag_coefficient: float

    def __post_init__(self):
        for name in ("start", "end"):
            place = tuple(as_point(name, getattr(self, name)).tolist())
            object.__setattr__(self, name, place)
        if self.start == self.end:
            raise InputError(f"end = {self.end} is also the start: give the two ends of a face")
        drag_coefficient = as_number("drag_coefficient", self.drag_coefficient, least=0)
        object.__setattr__(self, "drag_coefficient", drag_coefficient)

    @property
    def length(self):
        """From end to end."""
        return abs(complex(*self.end) - complex(*self.start))

    def ends(self, directions):
        """(n, 2, 2) its two ends, the one on the left of the stream first."""
        stream = np.exp(1j * np.radians(directions))
        start_is_left = ((complex(*self.start) - complex(*self.end)) / stream).imag >= 0
        pair = np.array([self.start, self.end])
        return np.where(start_is_left[:, None, None], pair, pair[::-1])

    def strength(self, directions):
        """(n,) source per unit of length in streams of unit speed."""
        along = (complex(*self.end) - complex(*self.start)) / self.length
        across = (np.exp(1j * np.radians(directions)) / along).imag
        return 0.5 * self.drag_coefficient * np.abs(across)


class Screens:
    """The flow of all bracings: sources on straight panels, images included."""

    def __init__(self, bracings, surroundings):
        self.bracings, self.surroundings = bracings, surroundings
        if not bracings:
            return
        ends = [np.array([0.0, FADING, 1.0 - FADING, 1.0]) * one.length for one in bracings]
        self._panels = assemble(
            [_straight(bracing) for bracing in bracings], ends, ORDER, surroundings, closed=False
        )
        share = self._panels.arcs / np.repeat([b.length for b in bracings], 3 * ORDER)
        fade = np.minimum(np.minimum(share, 1.0 - share) / FADING, 1.0)
        density = (3.0 - 2.0 * fade) * fade**2 / (1.0 - FADING)
        self._unit = 1j * np.where(
            np.repeat(np.eye(len(bracings), dtype=bool), 3 * ORDER, axis=1), density, 0.0
        )

    def strengths(self, directions):
        """(n, bracings) source per unit of length."""
        columns = [bracing.strength(directions) for bracing in self.bracings]
        return np.stack(columns, axis=1) if columns else np.zeros((len(directions), 0))

    @property
    def lengths(self):
        """(bracings,)"""
        return np.array([bracing.length for bracing in self.bracings])

    def velocity(self, z):
        """(bracings, len(z)) complex velocity u - i v of unit source per length."""
        return self._field(flow.velocity, z)

    def gradient(self, z):
        """(bracings, len(z)) its derivative dW/dz."""
        return self._field(flow.gradient, z)

    def _field(self, evaluate, z):
        if not self.bracings:
            return np.zeros((0, len(z)), complex)
        return evaluate(self._panels, self.surroundings, self._unit, z)

    def potential(self, directions, z):
        """(n, len(z)) complex potential, its cuts straight downstream."""
        if not self.bracings:
            return np.zeros((len(directions), len(z)), complex)
        rows = self.strengths(directions) @ self._unit
        cuts = np.broadcast_to(self._panels.starts[:-1], (len(rows), len(self.bracings)))
        return flow.potential(
            self._panels, self.surroundings, rows, cuts, np.radians(directions), z
        )

    def refuse_unfit(self, panels):
        """Refuse a face that crosses a body, or a wall of the surroundings."""
        for number, bracing in enumerate(self.bracings):
            start, end = np.array(bracing.start), np.array(bracing.end)
            trim = ENDS_OFF * (end - start)
            start, end = start + trim, end - trim
            if not holds(self.surroundings, np.array([complex(*start), complex(*end)])).all():
                raise InputError(
                    f"bracings[{number}] ({bracing!r}) reaches beyond the wall of "
                    f"{self.surroundings!r}: move it into the flow"
                )
            within = flow.enclosing_body(panels, np.array([complex(*start), complex(*end)])).max()
            meets = [
                body for body in range(panels.bodies)
                if body == within or crosses(start, end, panels.nodes[panels.node_slice(body)])
            ]
            if meets:
                raise InputError(
                    f"bracings[{number}] ({bracing!r}) lies in or crosses body {meets[0]}: let it "
                    "end on the bodies' walls"
                )


def _straight(bracing):
    """A face as ``assemble`` takes a wall: open, straight, by arc length."""
    start, end = complex(*bracing.start), complex(*bracing.end)
    line = SimpleNamespace(
        position=lambda share: start + share * (end - start),
        derivative=lambda share: np.full(np.shape(share), end - start),
    )
    # Its two ends share no density, as at a sharp edge.
    return SimpleNamespace(outline=line, parameter=lambda arcs: arcs / bracing.length, edge=0.0)
