"""Where the flow leaves the bodies, why there, and the wakes that this bounds."""

from dataclasses import dataclass, field, replace

import numpy as np

from offbody.checks import as_body, as_number, as_points
from offbody.errors import InputError
from offbody.lanes import (
    BLUFF_LENGTH,
    DRAG_CRISIS,
    LEFT,
    MEASURED,
    MEASURED_TURN,
    RIGHT,
    facing,
    leave,
    wall_speed,
)
from offbody.layers import ATTACHED, LAMINAR, TURBULENT
from offbody.wakes import marched_speeds

# Rules of this project. Behind a tube of Cd = 1.2 a strip of ten degrees is as wide as the far wake
# of half-width 0.57 sqrt(Cd b x) (Schlichting, Boundary-Layer Theory; from memory), or wider, but
# for 3 percent between 2 and 4 breadths.
WAKE_HALF_ANGLE = 10.0      # degrees by which a wake widens on either side
DOUBTFUL_HALF_ANGLE = 20.0  # the same of the doubtful margin round it,
DOUBTFUL_START = 0.1        # which starts this many breadths ahead of where the flow leaves
OFF_WALL = 1e-6             # breadths between a wall and the streamline drawn from it

OUTSIDE, DOUBTFUL, IN_WAKE = 0, 1, 2
STATES = {
    LAMINAR: "laminar", TURBULENT: "turbulent", ATTACHED: "attached", MEASURED: "measured figure",
}
GIVEN = "given"


def separation(model, direction=0.0, reynolds=None):
    """Where the flow leaves each body, left and right of the stream, and why there.

    The boundary layer is marched from the front stagnation point along the solved wall speed. Where
    a body has a wake, its displacement is blown between the points so found, its base pressure the
    pressure there (``ob.Wake``), and both are repeated until they rest.

    Parameters
    ----------
    model : Model
        What ``ob.solve`` returned. A wake whose separation is given in degrees keeps it.
    direction : float or (n,) array
        Where the stream goes TO, degrees counter-clockwise from +x.
    reynolds : float or sequence, optional
        Of each body (one number for each, or one for all): the onset speed times the body's breadth
        across the stream over the kinematic viscosity. None: those of the model's wakes.

    Returns
    -------
    Separation

    Raises
    ------
    ob.InputError
        If an argument cannot be used, a body has no Reynolds number, or no front stagnation point.

    Notes
    -----
    Laminar: Thwaites (1949), separation at lambda = -0.09. Transition: Michel (1951). Turbulent:
    Head (1958), separation at a shape factor of 2.4. A dip of the wall speed that is made good
    within 30 displacement thicknesses, as at a jump of curvature, is passed over.

    Below the drag crisis, at a Reynolds number of 3e5 (common practice: 2e5 to 5e5), laminar
    separation of a body without a sharp edge is final. On a circle without its wake the march finds
    it at 103 degrees, while 80 are measured (Schlichting; from memory): on a bluff body, no longer
    along the stream than 1.5 breadths, the earlier of the march and of the place where the wall has
    turned by 80 degrees from facing the stream is taken, and named. That this figure speaks for
    other bluff bodies by the angle of their wall is a rule of this project. With its wake
    (Cd = 1.2) the march itself finds 77 degrees on a circle.

    Above the crisis laminar separation closes to a short bubble, behind which the layer is
    turbulent. A body with a sharp edge closes its bubble at any Reynolds number if that of the
    displacement thickness exceeds 450 (Owen and Klanfer 1953: 400 to 500; from memory). A turbulent
    layer, or one on a slender wall, would follow nearly every move of its wake: it is marched on
    the flow that the wake's displacement alone leaves. Where a turbulent layer leaves a circle is
    known to some twenty degrees only (110 to 140 measured).

    References
    ----------
    B. Thwaites, Aeronaut. Quart. 1 (1949) 245-280; R. Michel, ONERA Rapport 1/1578A (1951);
    M. R. Head, ARC R&M 3152 (1958); G. V. Parkinson and T. Jandali, J. Fluid Mech. 40 (1970).

    Examples
    --------
    >>> import offbody as ob
    >>> tube = ob.solve(ob.circle(0.3))
    >>> found = ob.separation(tube, reynolds=1e5)
    >>> found.turning.round(1), found.state
    (array([[80., 80.]]), array([['measured figure', 'measured figure']], dtype=object))
    >>> ob.separation(ob.solve(ob.circle(0.3), wakes=ob.Wake(1.2)), reynolds=1e5).turning.round()
    array([[77., 77.]])
    """
    if not hasattr(model, "with_wakes"):
        raise InputError(f"model must be what ob.solve returned, got {model!r}")
    directions = model._directions(direction)
    numbers = _as_reynolds(model, reynolds)
    carried = model.with_wakes(
        [_marching(wake, number) for wake, number in zip(model.wakes, numbers, strict=True)]
    )
    flat = np.atleast_1d(directions)
    bodies = [_left_by(carried, body, flat, number) for body, number in enumerate(numbers)]
    columns = [np.stack(column, axis=1) for column in zip(*(b[:-1] for b in bodies), strict=True)]
    if not np.ndim(directions):
        columns = [column[0] for column in columns]
    return Separation(carried, directions, tuple(numbers), *columns, tuple(b[-1] for b in bodies))


@dataclass(frozen=True, eq=False)
class Separation:
    """Where the flow leaves every body; arrays have a leading axis for a vector of directions.

    Attributes
    ----------
    model : Model
        The flow that the points belong to, its wakes blown between them.
    direction : float or (n,) array
    reynolds : tuple of float
        Per body, by its breadth across the stream.
    points : (bodies, 2, 2) array
        Left and right of the stream.
    arc_fractions, turning : (bodies, 2) array
        Of the wall's length, as ``ob.WallPort`` counts them; degrees by which the wall has turned
        there from facing the stream (90: it runs along it).
    state, why : (bodies, 2) array of str
        "laminar", "turbulent", "measured figure", "attached" (to a sharp edge or the rear) or
        "given"; and a sentence.
    transition : (bodies, 2, 2) array
        Where the layer turns turbulent; NaN where it stays laminar.
    """

    model: object
    direction: object
    reynolds: tuple
    points: np.ndarray
    arc_fractions: np.ndarray
    turning: np.ndarray
    state: np.ndarray
    why: np.ndarray
    transition: np.ndarray
    _layers: tuple = field(repr=False)

    def holds(self, points):
        """Where points (..., 2) lie: 2 in a wake, 1 in the doubtful margin round one, 0 outside.

        A wake is taken as the strip downstream of the two points where the flow leaves a body,
        widening by 10 degrees on either side; its margin widens by 20, from a tenth of the breadth
        ahead of them. Behind a body which the flow leaves at a sharp edge alone all is margin.

        Returns
        -------
        (...,) int array, or (n, ...) for a vector of directions

        Raises
        ------
        ob.InputError
            If points do not have shape (..., 2) or are not finite.

        Examples
        --------
        >>> import offbody as ob
        >>> found = ob.separation(ob.solve(ob.circle(1.0)), reynolds=1e5)
        >>> found.holds([(3.0, 0.0), (3.0, 1.3), (-3.0, 0.0)])
        array([2, 1, 0])
        """
        points = as_points("points", points)
        bodies = range(len(self.model.outlines))
        codes = np.max([self.codes(body, points.reshape(-1, 2)) for body in bodies], axis=0)
        codes = codes.reshape((len(codes),) + points.shape[:-1])
        return codes if np.ndim(self.direction) else codes[0]

    def codes(self, body, points):
        """(n, m) what ``holds`` says of points (m, 2) by the wake of one body alone."""
        ends, states = (
            a if np.ndim(self.direction) else a[None] for a in (self.points, self.state)
        )
        found = wake_codes(points, ends[:, body], np.atleast_1d(self.direction))
        if self.model.outlines[body].edge is not None:
            thin = (states[:, body] == STATES[ATTACHED]).all(axis=1)
            found[thin] = np.minimum(found[thin], DOUBTFUL)
        return found

    def displacement_thickness(self, body, arc_fraction):
        """Thickness by which the boundary layer displaces the flow at a place on a wall, a length.

        NaN where the flow has left the wall.

        Parameters
        ----------
        body : int
        arc_fraction : float
            As ``ob.WallPort`` counts it.

        Returns
        -------
        float, or (n,) array

        Raises
        ------
        ob.InputError
            If there is no such body, or the fraction lies outside 0 to 1.

        Examples
        --------
        >>> import offbody as ob
        >>> found = ob.separation(ob.solve(ob.circle(1.0)), reynolds=1e5)
        >>> round(found.displacement_thickness(0, 0.5), 5)      # at the front
        0.00102
        """
        body = as_body("body", body, len(self.model.outlines))
        fraction = as_number("arc_fraction", arc_fraction, least=0.0, greatest=1.0)
        layers, wall = self._layers[body], self.model._arcs[body]
        arc = (wall.start + fraction * wall.length) % wall.length
        result = np.full(len(layers.front), np.nan)
        for side, sign in ((LEFT, -1), (RIGHT, 1)):
            away = sign * (arc - layers.front) % wall.length
            gone = sign * (layers.arcs[:, side] - layers.front) % wall.length
            for row in np.flatnonzero(away <= gone):
                thickness = layers.displacement[row, side]
                known = np.isfinite(thickness)
                result[row] = np.interp(
                    away[row], layers.distance[row, side, known], thickness[known]
                )
        return result if np.ndim(self.direction) else float(result[0])

    def streamlines(self, length=None):
        """The streamlines that leave the bodies' walls, for pictures: [left, right] of each body.

        They are those of a flow without the wakes' turbulence, so narrower than ``holds`` says; of
        a body without a wake they run on along its wall.

        Raises
        ------
        ob.InputError
            If the length cannot be used, or there is more than one direction.

        Examples
        --------
        >>> import offbody as ob
        >>> tube = ob.solve(ob.circle(1.0), wakes=ob.Wake(1.2))
        >>> left, right = ob.separation(tube, reynolds=1e5).streamlines(length=6.0)[0]
        >>> bool(left[-1, 0] > 4.0)
        True
        """
        if np.ndim(self.direction):
            raise InputError("direction must be one number for streamlines; call once for each")
        lines = []
        for body, (points, turning) in enumerate(zip(self.points, self.turning, strict=True)):
            stream = np.radians(float(self.direction))
            sides = np.array([1.0, -1.0])
            normal = stream + np.pi - sides * np.radians(turning)
            outward = np.stack([np.cos(normal), np.sin(normal)], axis=-1)
            step = OFF_WALL * self.model.breadth(body, float(self.direction))
            lines.append(self.model.streamlines(
                points + step * outward, float(self.direction), length
            ))
        return lines


def wake_codes(points, ends, directions):
    """(n, m) OUTSIDE, DOUBTFUL or IN_WAKE for points (m, 2) in n directions.

    ends (n, 2, 2): where the flow leaves the body, left and right of the stream.
    """
    # In the frame of the stream: real parts count downstream, imaginary parts to the left.
    against = np.exp(-1j * np.radians(directions))[:, None]
    place = (points[..., 0] + 1j * points[..., 1]) * against
    left, right = ((ends[..., 0] + 1j * ends[..., 1]) * against).T[..., None]
    breadth = np.maximum((left - right).imag, 1e-300)
    # Downstream of the line through the two points; beyond its ends, of the nearer end.
    share = np.clip((place - right).imag / breadth, 0, 1)
    depth = place.real - (right + share * (left - right)).real
    beside = np.maximum((place - left).imag, (right - place).imag)
    inside = (depth > 0) & (beside <= np.tan(np.radians(WAKE_HALF_ANGLE)) * depth)
    depth = depth + DOUBTFUL_START * breadth
    near = (depth > 0) & (beside <= np.tan(np.radians(DOUBTFUL_HALF_ANGLE)) * depth)
    return np.where(inside, IN_WAKE, np.where(near, DOUBTFUL, OUTSIDE))


def _as_reynolds(model, given):
    """One Reynolds number per body; that of its wake where none is given."""
    bodies = len(model.outlines)
    if given is None:
        given = [None if wake is None else wake.reynolds for wake in model.wakes]
        if None in given:
            raise InputError(
                f"reynolds: body {given.index(None)} has none; give ob.separation reynolds=..., "
                "one number, or one for each body"
            )
    numbers = list(given) if np.ndim(given) else [given] * bodies
    if len(numbers) != bodies:
        raise InputError(
            f"reynolds has {len(numbers)} entries for {bodies} bodies; give one for each"
        )
    return [as_number("reynolds", number, positive=True) for number in numbers]


def _marching(wake, reynolds):
    """A wake between the points that the march finds, unless it has its own."""
    if wake is None or wake.separation is not None:
        return wake
    return replace(wake, reynolds=reynolds)


def _left_by(model, body, directions, reynolds):
    """The columns of one body, and its layers."""
    wake, wall = model.wakes[body], model._arcs[body]
    lee = None if wake is None else model._lees(directions)[body].arcs
    speeds = marched_speeds(model, body, directions)
    left = leave(model, body, directions, speeds, reynolds, model._breadths(body, directions), lee)
    given = wake is not None and wake.separation is not None
    arcs = lee if given else left.arcs
    turning = wall_speed(model, body, facing(model, body, directions), arcs)
    state, why = np.empty((2, *arcs.shape), object)
    marched = wall_speed(model, body, facing(model, body, directions), left.march_arcs)
    for place in np.ndindex(arcs.shape):
        state[place] = GIVEN if given else STATES[int(left.state[place])]
        why[place] = _sentence(state[place], turning[place], left.bubble[place], marched[place])
    fractions = (arcs - wall.start) / wall.length % 1.0
    turned = np.isfinite(left.transition)
    transition = np.full((*arcs.shape, 2), np.nan)
    transition[turned] = _pairs(model._place(body, left.transition[turned]))
    return _pairs(model._place(body, arcs)), fractions, turning, state, why, transition, left


def _sentence(state, turning, bubble, marched):
    here = f"where the wall has turned {turning:.1f} degrees from facing the stream"
    if state == STATES[LAMINAR]:
        return f"Laminar separation by Thwaites' march, {here}."
    if state == STATES[TURBULENT]:
        cause = "behind a short bubble" if bubble else "by Michel's criterion"
        return f"Turbulent separation by Head's march, {here}; transition {cause}."
    if state == STATES[MEASURED]:
        return (
            f"The {MEASURED_TURN:g} degrees measured on a circle below the drag crisis (Reynolds "
            f"number {DRAG_CRISIS:g}), for bodies up to {BLUFF_LENGTH:g} breadths long; the march "
            f"alone would separate at {marched:.1f}."
        )
    if state == GIVEN:
        return f"As the wake was given, {here}."
    return "Attached to the end of the wall."


def _pairs(z):
    return np.stack([z.real, z.imag], axis=-1)
