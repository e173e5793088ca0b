"""Outlines of bodies: closed curves of which every point and every tangent is known exactly.

A curve is anything with ``position(s)`` and ``derivative(s)``: complex, for s in [0, 1].
``Outline`` sets one in its place and knows where panels have to end on it.
"""

import math
import os
import re
import warnings
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.polynomial import chebyshev, legendre, polynomial
from scipy.interpolate import BSpline, PPoly, make_interp_spline
from scipy.sparse import csc_array
from scipy.sparse.linalg import splu

from offbody.checks import as_count, as_number, as_point, as_points, as_reals
from offbody.errors import AccuracyWarning, InputError

TOUCH = 1e-9          # parts of a wall nearer than this fraction of the body's size touch
STRAIGHT = 1e-9       # radians: a corner that turns less is none
ARC_LENGTH_STEPS = 2  # of the parameter of a spline from chord lengths to its own arc length
FEW = 20              # points of an outline with an edge: a quintic through fewer swings there
CORNER = 1.0          # degrees: a wall that turns less at a point has no corner there, only a join
ROUNDING = 2.0**-52


@dataclass(frozen=True, eq=False, repr=False, slots=True)
class Outline:
    """A closed curve, counter-clockwise, that does not cross itself.

    Made by `circle`, `ellipse`, `polygon`, `outline`, `curve`, `four_digit` and `read_outline`.
    It cannot be changed: `moved`, `turned` and `scaled` give new ones.

    Parameters
    ----------
    shape : object
        ``position(s)`` and ``derivative(s)``, complex, for arrays of s in [0, 1].
    kind : str
        What the outline is, in words.
    edge : float or None
        Parameter of the one sharp trailing edge.
    joins : tuple of float
        Parameters where the curvature, or a low derivative of it, jumps.
    knots : tuple of float
        Parameters where only a high derivative jumps.
    start : float
        Parameter of the caller's first point: arc fractions count from it.
    factor, shift : complex
        The outline is the shape times ``factor`` plus ``shift``.

    Examples
    --------
    >>> mast = circle(0.3).moved(2.0, 1.0)
    >>> mast
    <Outline: circle of diameter 0.3 at (0, 0), moved by (2, 1)>
    >>> mast.points(4).round(2).tolist()
    [[2.15, 1.0], [2.0, 1.15], [1.85, 1.0], [2.0, 0.85]]
    """

    shape: object
    kind: str
    edge: float | None = None
    joins: tuple = ()
    knots: tuple = ()
    start: float = 0.0
    factor: complex = 1 + 0j
    shift: complex = 0j

    def __repr__(self):
        return f"<Outline: {self.name}>"

    @property
    def name(self):
        """What the outline is and where it has been set, in words, for messages."""
        size, angle = abs(self.factor), math.degrees(np.angle(self.factor))
        words = [self.kind]
        if not math.isclose(size, 1.0):
            words.append(f"scaled by {size:g}")
        if abs(angle) > 1e-9:
            words.append(f"turned by {angle:g} degrees")
        if self.shift:
            words.append(f"moved by {_place(self.shift)}")
        return ", ".join(words)

    def position(self, s):
        """Points of the outline, as complex numbers.

        Parameters
        ----------
        s : array_like
            The parameter, any shape; its whole part is dropped.

        Returns
        -------
        complex array of the same shape

        Raises
        ------
        ob.InputError
            If a parameter is not a finite number.

        Examples
        --------
        >>> complex(circle(2.0).position(0.0))
        (1+0j)
        """
        return self.factor * self.shape.position(_wrapped(as_reals("s", s))) + self.shift

    def derivative(self, s):
        """Derivative of `position` by the parameter: along the wall, body to the left.

        Parameters
        ----------
        s : array_like
            The parameter, any shape; its whole part is dropped. At a join or an edge, where the
            two sides differ, the side of greater s counts.

        Returns
        -------
        complex array of the same shape

        Raises
        ------
        ob.InputError
            If a parameter is not a finite number.

        Examples
        --------
        >>> complex(circle(2.0).derivative(0.0) / (2 * np.pi))
        1j
        """
        return self.factor * self.shape.derivative(_wrapped(as_reals("s", s)))

    def points(self, count=200):
        """Points along the outline, for pictures; evenly spaced in the parameter.

        Parameters
        ----------
        count : int
            How many, at least 1.

        Returns
        -------
        (count, 2) array

        Raises
        ------
        ob.InputError
            If the count is not a whole number of at least 1.

        Examples
        --------
        >>> ellipse(4.0, 2.0).points(4).round(12).tolist()
        [[2.0, 0.0], [0.0, 1.0], [-2.0, 0.0], [-0.0, -1.0]]
        """
        count = as_count("count", count, least=1)
        z = self.position(np.arange(count) / count)
        return np.stack([z.real, z.imag], axis=-1)

    def moved(self, dx, dy):
        """The outline moved by (dx, dy).

        Parameters
        ----------
        dx, dy : float
            In the unit of the outline.

        Returns
        -------
        Outline

        Raises
        ------
        ob.InputError
            If a number is not finite.

        Examples
        --------
        >>> circle(1.0).moved(0.5, 2.0).points(1).tolist()
        [[1.0, 2.0]]
        """
        return replace(self, shift=self.shift + complex(as_number("dx", dx), as_number("dy", dy)))

    def turned(self, degrees, about=(0, 0)):
        """The outline turned counter-clockwise about a point.

        Parameters
        ----------
        degrees : float
            The angle.
        about : (2,) array_like
            The point that stays where it is.

        Returns
        -------
        Outline

        Raises
        ------
        ob.InputError
            If the angle or the point is not finite.

        Examples
        --------
        >>> ellipse(4.0, 2.0).turned(90.0).points(1).tolist()
        [[0.0, 2.0]]
        """
        return self._mapped(_turn(as_number("degrees", degrees)), about)

    def scaled(self, factor, about=(0, 0)):
        """The outline made larger or smaller, seen from a point.

        Parameters
        ----------
        factor : float
            Greater than zero.
        about : (2,) array_like
            The point that stays where it is.

        Returns
        -------
        Outline

        Raises
        ------
        ob.InputError
            If the factor is not greater than zero, or the point not finite.

        Examples
        --------
        >>> circle(1.0).scaled(3.0).points(1).tolist()
        [[1.5, 0.0]]
        """
        return self._mapped(as_number("factor", factor, positive=True), about)

    def _mapped(self, factor, about):
        fixed = complex(*as_point("about", about))
        return replace(
            self, factor=factor * self.factor, shift=factor * (self.shift - fixed) + fixed
        )


# --- circle and ellipse ---------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class _Ellipse:
    centre: complex
    along: complex      # from the centre to the end of the length
    across: complex     # from the centre to the end of the thickness

    def position(self, s):
        angle = 2 * np.pi * s
        return self.centre + (self.along * np.cos(angle) + self.across * np.sin(angle))

    def derivative(self, s):
        angle = 2 * np.pi * s
        return 2 * np.pi * (self.across * np.cos(angle) - self.along * np.sin(angle))


def circle(diameter, centre=(0, 0)):
    """A circular outline.

    Parameters
    ----------
    diameter : float
        Greater than zero.
    centre : (2,) array_like
        Its centre. The first point is the one of greatest x.

    Returns
    -------
    Outline

    Raises
    ------
    ob.InputError
        If the diameter is not greater than zero, or a number not finite.

    Examples
    --------
    >>> circle(0.3, centre=(1, 0)).points(2).round(12).tolist()
    [[1.15, 0.0], [0.85, 0.0]]
    """
    radius = as_number("diameter", diameter, positive=True) / 2
    middle = complex(*as_point("centre", centre))
    kind = f"circle of diameter {2 * radius:g} at {_place(middle)}"
    return Outline(_Ellipse(middle, complex(radius), 1j * radius), kind)


def ellipse(length, thickness, centre=(0, 0), turned=0.0):
    """An elliptic outline.

    Parameters
    ----------
    length, thickness : float
        The two axes, along x and along y before turning; greater than zero.
    centre : (2,) array_like
        Its centre, about which it is turned.
    turned : float
        Degrees counter-clockwise. The first point is the end of the length, at +x before turning.

    Returns
    -------
    Outline

    Raises
    ------
    ob.InputError
        If an axis is not greater than zero, or a number not finite.

    Examples
    --------
    >>> ellipse(2.0, 0.5, centre=(0, 3), turned=90.0).points(1).tolist()
    [[0.0, 4.0]]
    """
    length = as_number("length", length, positive=True)
    thickness = as_number("thickness", thickness, positive=True)
    middle = complex(*as_point("centre", centre))
    turned = as_number("turned", turned)
    heading = _turn(turned)
    kind = f"ellipse of length {length:g} and thickness {thickness:g} at {_place(middle)}"
    if turned:
        kind += f" turned by {turned:g} degrees"
    return Outline(_Ellipse(middle, heading * length / 2, heading * 1j * thickness / 2), kind)


# --- polygon with rounded corners -----------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class _Arcs:
    """Sides and arcs, a side being an arc of no curvature; the parameter goes with arc length."""

    breaks: np.ndarray        # (n + 1,) parameters from 0 to 1
    starts: np.ndarray        # (n,) complex, where each piece begins
    headings: np.ndarray      # (n,) complex, unit tangents there
    curvatures: np.ndarray    # (n,)
    length: float

    def _along(self, s):
        k = np.clip(np.searchsorted(self.breaks, s, "right") - 1, 0, len(self.starts) - 1)
        return k, (s - self.breaks[k]) * self.length

    def position(self, s):
        k, along = self._along(s)
        half_turn = 0.5 * self.curvatures[k] * along
        chord = along * np.sinc(half_turn / np.pi)
        return self.starts[k] + self.headings[k] * (chord * _unit(half_turn))

    def derivative(self, s):
        k, along = self._along(s)
        return self.length * self.headings[k] * _unit(self.curvatures[k] * along)


def polygon(points, corner_radius):
    """An outline of straight sides whose corners, convex or re-entrant, are rounded by arcs.

    Parameters
    ----------
    points : (n, 2) array_like
        The corners before rounding, in either sense of rotation. A repeated last point is
        dropped, and a point on a straight side is no corner.
    corner_radius : float
        Radius of the arcs, greater than zero: at a sharp convex corner the speed of potential
        flow has no bound.

    Returns
    -------
    Outline
        Arc fractions count from the middle of the first corner's arc.

    Raises
    ------
    ob.InputError
        If there are fewer than three distinct points, if the points are not finite, lie on one
        line or give a wall that crosses itself, or if the radius does not fit.

    Examples
    --------
    >>> square = polygon([(0, 0), (1, 0), (1, 1), (0, 1)], corner_radius=0.1)
    >>> square
    <Outline: polygon of 4 corners with corner radius 0.1>
    >>> len(square.joins)
    8
    """
    given, _ = _distinct_points(points)
    radius = as_number("corner_radius", corner_radius)
    order = np.arange(len(given))
    if _area(given) < 0:
        order = -order
    order %= len(given)
    order = order[np.abs(_turning(given[order])) > STRAIGHT]
    corner = given[order]
    side = np.roll(corner, -1) - corner
    reach = _tangent_reach(corner, order)
    _refuse_unfit_radius(radius, corner, order, reach)
    shape = _rounded(corner, side / np.abs(side), reach, radius)
    joins = shape.breaks[:-1][shape.curvatures != np.roll(shape.curvatures, 1)]
    start = 0.5 * shape.breaks[1] if order[0] == 0 else _nearest_parameter(shape, given[0])
    result = Outline(
        shape,
        f"polygon of {len(corner)} corners with corner radius {radius:g}",
        joins=tuple(joins.tolist()),
        start=float(start),
    )
    _refuse_crossing(result, _arc_samples(shape))
    return result


def _turning(corner):
    """Angles by which a polygon turns at its corners, counter-clockwise positive."""
    side = np.roll(corner, -1) - corner
    return np.angle(side / np.roll(side, 1))


def _tangent_reach(corner, order):
    """Distance from each corner to the ends of its arc, for arcs of radius 1."""
    turning = np.abs(_turning(corner))
    back = np.flatnonzero(turning > np.pi - STRAIGHT)
    if len(back):
        k = back[0]
        raise InputError(
            f"points: the outline turns straight back at point {order[k]}, {_place(corner[k])}; "
            "leave that point out, or give the part beyond it a thickness"
        )
    return np.tan(turning / 2)


def _refuse_unfit_radius(radius, corner, order, reach):
    following = np.roll(corner, -1)
    lengths = np.abs(following - corner)
    largest = lengths / (reach + np.roll(reach, -1))
    k = np.argmin(largest)
    fits = _rounded_down(largest[k])
    if radius <= 0:
        enough = min(0.02 * lengths.min(), 0.5 * fits)
        raise InputError(
            f"corner_radius must be greater than zero, got {radius:g}: at a sharp convex corner "
            f"the speed of potential flow has no bound; {enough:.3g} would do here"
        )
    if radius > largest[k] * (1 + 1e-12):
        raise InputError(
            f"corner_radius = {radius:g} does not fit on the side from point {order[k]}, "
            f"{_place(corner[k])}, to point {order[(k + 1) % len(order)]}, "
            f"{_place(following[k])}: the largest that fits every side is {fits:g}"
        )


def _rounded(corner, heading, reach, radius):
    """The pieces of a rounded polygon, from the beginning of the first corner's arc."""
    turning, into, reach = _turning(corner), np.roll(heading, 1), radius * reach
    side = np.abs(np.roll(corner, -1) - corner) - reach - np.roll(reach, -1)
    # Every corner gives an arc and a side.
    starts = np.stack([corner - reach * into, corner + reach * heading], axis=1).ravel()
    headings = np.stack([into, heading], axis=1).ravel()
    curvatures = np.stack([np.sign(turning) / radius, np.zeros(len(corner))], axis=1).ravel()
    lengths = np.stack([radius * np.abs(turning), side], axis=1).ravel()
    # Arcs that use up a side leave a remainder of rounding, which is no side.
    real = lengths > 1e-12 * lengths.sum()
    breaks = _fractions(lengths[real])
    return _Arcs(
        breaks, starts[real], headings[real], curvatures[real], float(lengths[real].sum())
    )


def _nearest_parameter(shape, point):
    """Parameter of the point of the straight sides, or of an arc's end, nearest to a given one."""
    sides = np.flatnonzero(shape.curvatures == 0)
    lengths = np.diff(shape.breaks)[sides]
    along = ((point - shape.starts[sides]) / shape.headings[sides]).real / shape.length
    s = np.concatenate([shape.breaks[:-1], shape.breaks[sides] + along.clip(0, lengths)])
    return float(s[np.argmin(np.abs(shape.position(s) - point))])


def _arc_samples(shape):
    """Parameters along a rounded polygon, close enough on its arcs to see them cross."""
    turn = np.abs(shape.curvatures) * np.diff(shape.breaks) * shape.length
    counts = np.maximum(1, np.ceil(turn / (np.pi / 16))).astype(int)
    return _subdivided(shape.breaks, counts)


# --- a curve through given points -----------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class _Spline:
    pieces: PPoly
    slopes: PPoly

    def position(self, s):
        return self.pieces(s)

    def derivative(self, s):
        return self.slopes(s)


def outline(points, sharp=None):
    """A smooth outline through given points, or one with a single sharp edge.

    Parameters
    ----------
    points : (n, 2) array_like
        At least three distinct points in order, in either sense of rotation. A repeated last
        point is dropped.
    sharp : int, optional
        Index of the point at the one sharp edge; all others are passed smoothly.

    Returns
    -------
    Outline
        A spline of degree five, its parameter close to arc length, and its first point the first
        of `points`. With an edge and fewer than 20 points it is of degree three.

    Raises
    ------
    ob.InputError
        If there are fewer than three distinct points, if the points are not finite, lie on one
        line or give a curve that crosses itself, if `sharp` is not the index of a point, or if
        the outline has no convex edge there.

    Notes
    -----
    Chord lengths serve as the first parameter and arc lengths of the spline found, twice, as the
    next. With unevenly spaced points that keeps the sixth order of the spline: through 80 points
    on a circle, their spacing uneven by 30 percent, the error is 5e-10 radii, against 2e-6 with
    chord lengths and 1e-3 with their square roots (centripetal). The latter are at best five
    times more accurate, where few points are smoothly crowded at the ends of a slender body.

    Examples
    --------
    >>> angle = np.radians(np.arange(0, 360, 15))
    >>> ring = outline(np.stack([np.cos(angle), np.sin(angle)], axis=-1))
    >>> bool(abs(np.hypot(*ring.points(1000).T) - 1).max() < 1e-7)
    True
    """
    given, index = _distinct_points(points)
    edge = None if sharp is None else index[_as_index("sharp", sharp, len(index))]
    order = np.arange(len(given))
    if _area(given) < 0:
        order = -order
    order = (order + (edge or 0)) % len(given)
    spline, parameters = _closed_spline(given[order], smooth=edge is None)
    breaks = tuple(spline.pieces.x[0 if edge is None else 1 : -1].tolist())
    quintic = spline.pieces.c.shape[0] == 6
    result = Outline(
        spline,
        f"outline through {len(given)} points",
        edge=None if edge is None else 0.0,
        joins=() if quintic else breaks,
        knots=breaks if quintic else (),
        start=float(parameters[order.tolist().index(0)]),
    )
    _refuse_crossing(result, _subdivided(parameters, 8))
    _refuse_smooth_edge(result, f"sharp = {sharp!r}")
    return result


def _closed_spline(z, smooth):
    """The spline from the first point round to it again, and the points' parameters."""
    closed = np.append(z, z[0])
    lengths = np.abs(np.diff(closed))
    nodes, weights = legendre.leggauss(6)
    for _ in range(ARC_LENGTH_STEPS + 1):
        parameters = _fractions(lengths)
        spline = _interpolant(parameters, closed, smooth)
        half = 0.5 * np.diff(parameters)[:, None]
        speeds = np.abs(spline.derivative(parameters[:-1, None] + half * (nodes + 1)))
        lengths = (speeds * half) @ weights
    return spline, parameters


def _interpolant(parameters, z, smooth):
    """The spline through z, as polynomials on pieces of [0, 1]."""
    xy = np.stack([z.real, z.imag], axis=-1)
    if smooth:
        found = _periodic_quintic(parameters, xy)
    elif len(z) > FEW:
        found = make_interp_spline(parameters, xy, k=5)
    else:
        found = make_interp_spline(parameters, xy, k=3, bc_type="natural")
    knots = np.unique(found.t[(found.t >= 0) & (found.t <= 1)])
    taylor = [found(knots[:-1], m) @ [1, 1j] / math.factorial(m) for m in range(found.k, -1, -1)]
    pieces = PPoly(np.array(taylor), knots)
    return _Spline(pieces, pieces.derivative())


def _periodic_quintic(parameters, xy):
    """The B-spline of period 1 with knots at the points: one sparse system for x and y."""
    count = len(parameters) - 1
    place = np.arange(-5, count + 6)
    knots = parameters[place % count] + place // count
    values = BSpline.design_matrix(parameters[:-1], knots, 5).tocoo()
    columns = values.col % count
    matrix = csc_array((values.data, (values.row, columns)), shape=(count, count))
    coefficients = splu(matrix).solve(xy[:-1])
    return BSpline(knots, coefficients[np.arange(count + 5) % count], 5)


# --- a curve given as a function ------------------------------------------------------------------

# A curve's derivative is that of Chebyshev interpolants of one degree, on pieces which are bisected
# until their last coefficients reach the rounding of the function. Bisecting piles up where the
# function is not smooth; there the two sides are fitted afresh and compared, and what they differ
# in says whether the curve is open, has a corner, or joins two smooth parts, which then end there.
DEGREE = 20
FIRST_PIECES = 16
GOLDEN = 0.6180339887       # pieces end where no caller's own piece is likely to end: it would hide
DEEPEST = 45                # bisections of [0, 1]
MOST_PIECES = 20_000
SAME = 1e-9                 # parameters as close as that name the same edge
SUSPECT_TURN = 0.35         # radians between neighbouring chords: a corner is looked for
CHEBYSHEV_POINTS = np.sin(np.pi * (np.arange(DEGREE + 1) / DEGREE - 0.5))
TO_COEFFICIENTS = np.linalg.inv(chebyshev.chebvander(CHEBYSHEV_POINTS, DEGREE)).T


@dataclass(frozen=True, slots=True, eq=False)
class _Function:
    """The caller's function, and the derivative of its interpolant on pieces of [0, 1]."""

    function: object
    backward: bool
    breaks: np.ndarray | None = None          # (n + 1,) from 0 to 1
    coefficients: np.ndarray | None = None    # (n, DEGREE) complex, of the derivative

    def position(self, s):
        s = np.asarray(s)
        flat = 1.0 - s.ravel() if self.backward else s.ravel()
        values = np.asarray(self.function(np.where(flat == 1.0, 0.0, flat)), float)
        return (values[..., 0] + 1j * values[..., 1]).reshape(s.shape)

    def derivative(self, s):
        s = np.asarray(s)
        flat = s.ravel()
        result = np.empty(flat.shape, complex)
        for chunk in range(0, flat.size, 16384):
            part = slice(chunk, chunk + 16384)
            result[part] = self._clenshaw(flat[part])
        return result.reshape(s.shape)

    def _clenshaw(self, s):
        """Sum of the Chebyshev series of the piece on which each s lies."""
        k = np.clip(np.searchsorted(self.breaks, s, "right") - 1, 0, len(self.breaks) - 2)
        left, right = self.breaks[k], self.breaks[k + 1]
        x = ((s - left) - (right - s)) / (right - left)
        columns = self.coefficients.T
        last = before = 0.0
        for column in columns[:0:-1]:
            last, before = column[k] + 2 * x * last - before, last
        return columns[0][k] + x * last - before


def curve(function, sharp=None):
    """An outline given as a function of a parameter.

    Parameters
    ----------
    function : callable
        ``function(s)`` takes an array of parameters, shape (n,), each in [0, 1), and returns
        their points, shape (n, 2). It runs once round in either sense of rotation, at whatever
        speed; ``function(0)`` is the first point.
    sharp : float, optional
        The s in [0, 1) of the one sharp edge. Everywhere else the curve must be smooth: jumps of
        curvature are found and become joins, and so do corners that turn less than a degree.

    Returns
    -------
    Outline
        Its points are those of the function; its derivative is found to the rounding of the
        function's values: near an edge it is best where the edge lies at the origin, and the
        function says how far away its points are without taking differences. The outline can be
        pickled if the function can.

    Raises
    ------
    ob.InputError
        If the function does not take or return such arrays, or if the curve is open, crosses
        itself, has a corner that `sharp` does not name, or none where it does.

    Examples
    --------
    >>> def wavy(s):
    ...     angle = 2 * np.pi * s
    ...     radius = 1 + 0.1 * np.cos(5 * angle)
    ...     return np.stack([radius * np.cos(angle), radius * np.sin(angle)], axis=-1)
    >>> body = curve(wavy)
    >>> body
    <Outline: curve wavy>
    >>> body.points(2).round(12).tolist()
    [[1.1, 0.0], [-0.9, 0.0]]
    """
    edge = None if sharp is None else as_number("sharp", sharp, least=0.0)
    if edge is not None and edge >= 1.0:
        raise InputError(f"sharp must be less than 1, got {sharp!r}; the curve ends at 0 again")
    _refuse_odd_function(function)
    kind = f"curve {getattr(function, '__name__', type(function).__name__)}"
    shape = _Function(function, backward=False)
    if _area(_closed_samples(shape, kind)) < 0:
        shape = replace(shape, backward=True)
        edge = None if edge is None else (1.0 - edge) % 1.0
    shape, joins = _resolved(shape, edge, kind)
    result = Outline(shape, kind, edge=edge, joins=joins)
    _refuse_corners(result, samples := _subdivided(shape.breaks, 2 * DEGREE))
    _refuse_crossing(result, samples)
    _refuse_smooth_edge(result, f"sharp = {sharp!r}")
    return result


def _refuse_odd_function(function):
    """Refuse what does not map (n,) to (n, 2), finite; the numbers tried are unlikely corners."""
    wanted = "it must take an array of n parameters and return an array of n points, shape (n, 2)"
    if not callable(function):
        raise InputError(f"function must be callable, got {function!r}; {wanted}")
    try:
        values = np.asarray(function(np.array([0.0, 0.137, 0.718])))
    except (TypeError, ValueError) as error:
        raise InputError(f"function failed on an array ({error}); {wanted}") from error
    if values.shape != (3, 2) or values.dtype.kind not in "iuf":
        found = f"shape {values.shape} of {values.dtype}"
        raise InputError(f"function gave {found} for 3 parameters; {wanted}")


def _closed_samples(shape, kind):
    """Points round the curve, once it is known that they are finite and that it closes."""
    s = np.append(np.arange(1024) / 1024, 1.0 - 2.0**-53)
    z = shape.position(s)
    _refuse_infinite(shape, z, s, kind)
    if _size(z) < 1e-300:
        raise InputError(f"{kind} has no length: all its points are {_place(z[0])}")
    if abs(z[-1] - z[0]) > _gap(z):
        raise InputError(
            f"{kind} is open: it starts at {_place(z[0])} and ends at {_place(z[-1])}; "
            "let function(s) return to function(0) as s nears 1"
        )
    return z[:-1]


def _refuse_infinite(shape, z, s, kind):
    if not np.isfinite(z).all():
        shown = _shown_parameter(shape, s[~np.isfinite(z)][0])
        raise InputError(f"{kind} is not finite at s = {shown}; function must be, everywhere")


def _resolved(shape, edge, kind):
    """The shape with its interpolant, and the parameters of its joins."""
    _warn_of_scatter(shape, kind)
    fixed = [] if edge is None else [edge]
    breaks, _ = _bisected(shape, fixed, kind)
    suspects = _crowded_places(breaks, fixed)
    if edge != 0.0:
        suspects.append((0.0, 0.0))
    places = np.array([place for place, _ in suspects] + fixed)
    joins = []
    for place, doubt in suspects:
        away = np.abs((places - place + 0.5) % 1.0 - 0.5)
        room = min(1 / FIRST_PIECES, 0.9 * np.min(away[away > 0], initial=1.0))
        join = _join(shape, place, doubt, room, kind)
        if join is not None:
            joins.append(float(join) % 1.0)
    breaks, series = _bisected(shape, fixed + joins, kind)
    slopes = chebyshev.chebder(series, axis=1) * (2 / np.diff(breaks))[:, None]
    return replace(shape, breaks=breaks, coefficients=slopes), tuple(sorted(joins))


def _warn_of_scatter(shape, kind):
    """Refuse a function whose values scatter too much for tangents, and warn of a rounded one."""
    left = (np.arange(9) + GOLDEN) / 9
    noise, size = _noise(shape, left, 2.0**-20, kind).max(), _size(shape.position(left))
    if noise > 1e-6 * size:
        raise InputError(f"{kind} is not smooth anywhere: its points scatter by {noise:.1g}")
    if noise > 1e-10 * size:
        warnings.warn(
            f"the points of {kind} are rounded to {noise:.1g}, so that its tangents are good to "
            "about a thousand times as much; let the function compute in float64, near the origin",
            AccuracyWarning,
            stacklevel=4,
        )


def _noise(shape, left, width, kind):
    """What is not smooth in pieces so narrow that a smooth curve is a cubic on them."""
    return np.abs(_fit(shape, left, left + width, kind)[:, 4:]).max(axis=1)


def _tolerance(shape, left, right, series, kind):
    """What the last coefficients of resolved pieces may be, one number each.

    It follows the rounding of the points on the piece itself: near an edge at the origin it goes
    down with the distance. A function may be noisier than its values' rounding. That is measured
    where pieces look unresolved, at two places, as one may happen to hold a corner.
    """
    tolerance = 4 * ROUNDING * np.abs(series).max(axis=1)
    poor = np.flatnonzero(_tail(series) > tolerance)
    if len(poor):
        width = (right - left)[poor]
        probes = [_noise(shape, left[poor] + f * width, width / 1024, kind) for f in (0.31, 0.74)]
        tolerance[poor] = np.maximum(tolerance[poor], 4 * np.minimum(*probes))
    return tolerance


def _tail(series):
    return np.abs(series[:, -3:]).max(axis=1)


def _fit(shape, left, right, kind):
    """Chebyshev coefficients, (n, DEGREE + 1), on the pieces from left to right."""
    x = CHEBYSHEV_POINTS
    s = _wrapped(0.5 * (left[:, None] * (1 - x) + right[:, None] * (1 + x)))
    z = shape.position(s)
    _refuse_infinite(shape, z, s, kind)
    return z @ TO_COEFFICIENTS


def _bisected(shape, fixed, kind):
    """Ends of pieces that resolve the curve, the fixed ones among them, and their coefficients."""
    even = (np.arange(FIRST_PIECES) + GOLDEN) / FIRST_PIECES
    apart = [x for x in even if all(abs(x - f) > 0.25 / FIRST_PIECES for f in fixed)]
    ends = np.unique([0.0, *fixed, *apart, 1.0])
    left, right = ends[:-1], ends[1:]
    done = []
    while len(left):
        series = _fit(shape, left, right, kind)
        tolerance = _tolerance(shape, left, right, series, kind)
        poor = (_tail(series) > tolerance) & (right - left > 2.0**-DEEPEST)
        done.append((left[~poor], _chopped(series, tolerance)[~poor]))
        left, right = left[poor], right[poor]
        middle = 0.5 * (left + right)
        left, right = np.concatenate([left, middle]), np.concatenate([middle, right])
        if len(left) > MOST_PIECES:
            raise InputError(f"{kind} is too rough: {MOST_PIECES} pieces do not resolve it")
    starts = np.concatenate([starts for starts, _ in done])
    order = np.argsort(starts)
    series = np.concatenate([series for _, series in done])[order]
    return np.append(starts[order], 1.0), series


def _chopped(series, tolerance):
    """The coefficients without those behind the last that stands out from the noise."""
    behind = np.maximum.accumulate(np.abs(series[:, ::-1]), axis=1)[:, ::-1]
    return np.where(behind > tolerance[:, None] / 4, series, 0.0)


def _crowded_places(breaks, fixed):
    """Where bisecting piled up: the middle and the half width of the narrowest pieces there."""
    level = np.round(np.log2(np.diff(breaks))).astype(int)
    ends = np.concatenate([[0], np.flatnonzero(np.diff(level)) + 1, [len(level)]])
    places = []
    for first, last in zip(ends[1:-2], ends[2:-1], strict=True):
        around = level[max(first - 12, 0) : last + 12]
        valley = level[first] < min(level[first - 1], level[last])
        low, high = breaks[first], breaks[last]
        known = any(low - SAME <= f <= high + SAME for f in fixed)
        if valley and level[first] <= around.max() - 3 and not known:
            places.append((0.5 * (low + high), 0.5 * (high - low)))
    return places


def _join(shape, place, doubt, room, kind):
    """The parameter of a join within ``doubt`` of a place, or None where the curve is smooth.

    The derivatives of the fits on both sides are compared, the low ones first. Where the m-th is
    the first to jump, the difference of those below it has a simple root at the join.
    """
    sides = _sides(shape, place, doubt, room, kind)
    if sides is None:
        return place
    before, after, noise = np.array(sides)
    jump = after - before
    real = np.abs(jump[:-1]) > noise.real[:-1] + 8 * doubt * np.abs(jump[1:])
    if not real.any():
        return None
    m = int(np.argmax(real))
    if m == 0:
        if abs(jump[0]) > _gap(shape.position(np.arange(64) / 64)):
            raise InputError(
                f"{kind} is open: at s = {_shown_parameter(shape, place)} it leaps from "
                f"{_place(before[0])} to {_place(after[0])}"
            )
        return place
    place -= float(np.clip((jump[m - 1] / jump[m]).real, -2 * doubt, 2 * doubt))
    if m == 1 and abs(np.angle(after[1] / before[1], deg=True)) > CORNER:
        raise _corner_error(kind, _shown_parameter(shape, place), before[0])
    return place


def _sides(shape, place, doubt, room, kind):
    """Value and four derivatives before and after a place, and their noise; None if unresolved."""
    width = room
    while width > max(64 * doubt, 2.0**-30):
        left = np.array([place - doubt - width, place + doubt])
        series = _fit(shape, left, left + width, kind)
        tolerance = _tolerance(shape, left, left + width, series, kind)
        if (_tail(series) <= tolerance).all():
            break
        width /= 2
    else:
        return None
    # The noise is as if all of it sat in the highest coefficient, which grows most outward.
    highest = np.eye(DEGREE + 1)[-1:] * 4 * tolerance.max()
    series = np.concatenate([_chopped(series, tolerance), highest])
    reach = np.array([1, -1, 1]) * (1 + 2 * doubt / width)
    return [
        [chebyshev.chebval(x, chebyshev.chebder(row, m, scl=2 / width)) for m in range(5)]
        for x, row in zip(reach, series, strict=True)
    ]


def _shown_parameter(shape, s):
    """The parameter as the caller's function knows it, to ten digits."""
    s = round(1.0 - s if shape.backward else s, 10) % 1.0
    return f"{s:.10g}"


def _corner_error(kind, shown, z):
    return InputError(
        f"{kind} has a sharp corner near s = {shown}, at {_place(z)}, which sharp does not name; "
        "name it if it is the one trailing edge, or else round it"
    )


def _refuse_corners(result, s):
    """Refuse corners at which the speed along the curve vanishes, so that no derivative jumps."""
    z = result.position(s)
    finest = 1e-9 * _size(z) + 1e4 * ROUNDING * np.abs(z).max()
    kept = np.flatnonzero(np.abs(np.roll(z, -1) - z) > 1e-6 * _size(z))
    s, z = s[kept], z[kept]
    for k in np.flatnonzero(np.abs(_turning(z)) > SUSPECT_TURN):
        low, high = s[k - 1], s[(k + 1) % len(s)]
        corner = _sharpest(result, low, low + (high - low) % 1.0, finest)
        if corner is None or _same_place(corner, result.edge):
            continue
        raise _corner_error(
            result.kind, _shown_parameter(result.shape, corner), complex(result.position(corner))
        )


def _sharpest(result, low, high, finest):
    """The parameter of a turn that stays within a piece shorter than ``finest``, or None."""
    while True:
        s = np.linspace(low, high, 17)
        step = np.diff(result.position(s))
        turn = np.abs(np.angle(step[1:] / step[:-1]))
        k = int(np.argmax(turn))
        if turn[k] < SUSPECT_TURN / 2:
            return None
        low, high = s[k], s[k + 2]
        if np.abs(step[k : k + 2]).max() < finest:
            return float(s[k + 1]) % 1.0


def _same_place(s, edge):
    return edge is not None and abs((s - edge + 0.5) % 1.0 - 0.5) < 1e-3


# --- NACA four-digit section ----------------------------------------------------------------------

# Half-thickness over 5 times the thickness, as a polynomial in the root of x (NACA Report 460, the
# last coefficient changed from 0.1015 to close the trailing edge). It has the factors xi and
# 1 - xi; what is left is kept apart, so that nothing cancels near the edge.
HALF_THICKNESS = np.array([0, 0.2969, -0.1260, 0, -0.3516, 0, 0.2843, 0, -0.1036])
GREATEST_BEND = 0.5     # half-thickness over radius of curvature of the camber line; a fold is at 1
BETWEEN_ROOTS = np.array([0.2969, 0.1709, 0.1709, -0.1807, -0.1807, 0.1036, 0.1036])


@dataclass(frozen=True, slots=True)
class _FourDigit:
    """Above from the trailing edge to the nose, x = xi^2 with xi = 1 - 2 s, then back below."""

    camber: float       # over the chord
    highest: float      # place of greatest camber, over the chord
    thickness: float    # over the chord
    chord: float

    def position(self, s):
        side, edgeward, xi = self._unfolded(s)
        y = 5 * self.thickness * xi * edgeward * polynomial.polyval(xi, BETWEEN_ROOTS)
        x, height, slope, _ = self._camber_line(xi, edgeward)
        return self.chord * (x + 1j * height + side * y * _upright(slope))

    def derivative(self, s):
        side, edgeward, xi = self._unfolded(s)
        y = 5 * self.thickness * xi * edgeward * polynomial.polyval(xi, BETWEEN_ROOTS)
        rise = 5 * self.thickness * polynomial.polyval(xi, polynomial.polyder(HALF_THICKNESS))
        _, _, slope, bend = self._camber_line(xi, edgeward)
        along = 2 * xi * (1 + 1j * slope)
        turn = 2 * xi * bend / (1 + slope**2)
        across = side * _upright(slope) * (rise + 1j * turn * y)
        return -2 * side * self.chord * (along + across)

    def greatest_bend(self):
        """Greatest half-thickness over the radius of curvature of the camber line."""
        _, edgeward, xi = self._unfolded(np.arange(1, 512) / 1024)
        y = 5 * self.thickness * xi * edgeward * polynomial.polyval(xi, BETWEEN_ROOTS)
        _, _, slope, bend = self._camber_line(xi, edgeward)
        return float(np.max(np.abs(y * bend) / (1 + slope**2) ** 1.5))

    @staticmethod
    def _unfolded(s):
        """Side (+1 above), 1 - xi and xi, the same numbers for s and 1 - s."""
        edgeward = 2 * np.minimum(s, 1 - s)
        return np.where(s < 0.5, 1.0, -1.0), edgeward, 1 - edgeward

    def _camber_line(self, xi, edgeward):
        """x, height, slope and second derivative of the camber line: two parabolas."""
        x = xi * xi
        if self.camber == 0:
            zero = np.zeros_like(x)
            return x, zero, zero, zero
        p, to_edge = self.highest, edgeward * (1 + xi)
        fore = x < p
        scale = np.where(fore, self.camber / p**2, self.camber / (1 - p) ** 2)
        height = scale * np.where(fore, x * (2 * p - x), to_edge * (1 + x - 2 * p))
        return x, height, 2 * scale * (p - x), -2 * scale


def _upright(slope):
    """Unit normal, upward, of a line of given slope."""
    return (1j - slope) / np.sqrt(1 + slope**2)


def four_digit(code, chord=1.0):
    """The outline of a NACA four-digit section with a closed, sharp trailing edge.

    Parameters
    ----------
    code : str or int
        Greatest camber in percent of the chord, its place in tenths, and the thickness in
        percent: "2412". Numbers are filled with zeros on the left: 12 is "0012".
    chord : float
        Greater than zero. The nose is at the origin, the trailing edge at (chord, 0).

    Returns
    -------
    Outline
        From the trailing edge along the upper side first.

    Raises
    ------
    ob.InputError
        If the code is not of four digits, has no thickness, or states a camber without its
        place or the reverse; if the camber line bends too much for the thickness; if the chord
        is not greater than zero.

    Notes
    -----
    Where the two parabolas of the camber line meet, thickness laid off perpendicular to them
    leaves a corner, unless it is greatest there: 0.02 degrees for "2412", 2.3 for "6221".

    References
    ----------
    Jacobs, Ward and Pinkerton, NACA Report 460 (1933). The last coefficient of the thickness is
    0.1036 in place of 0.1015, which closes the trailing edge; thickness is laid off
    perpendicular to the camber line.

    Examples
    --------
    >>> section = four_digit("0012", chord=2.0)
    >>> section.edge, section.joins
    (0.0, (0.5,))
    >>> section.points(2).tolist()
    [[2.0, 0.0], [0.0, 0.0]]
    """
    digits = _four_digits(code)
    camber, highest, thickness = int(digits[0]) / 100, int(digits[1]) / 10, int(digits[2:]) / 100
    if thickness == 0:
        raise InputError(f"code = {code!r} has no thickness; its last two digits must not be 00")
    if (camber == 0) != (highest == 0):
        raise InputError(
            f"code = {code!r}: camber (first digit) and its place (second digit) go together; "
            f"a symmetric section is '00{digits[2:]}'"
        )
    chord = as_number("chord", chord, positive=True)
    shape = _FourDigit(camber, highest, thickness, chord)
    if shape.greatest_bend() > GREATEST_BEND:
        raise InputError(
            f"code = {code!r}: the camber line bends too much for the thickness, so that the wall "
            "would fold or nearly so; use less camber or thickness, or move the camber aft"
        )
    turns = () if camber == 0 else (0.5 * (1 - math.sqrt(highest)), 0.5 * (1 + math.sqrt(highest)))
    result = Outline(
        shape,
        f"NACA {digits} section of chord {chord:g}",
        edge=0.0,
        joins=tuple(sorted((0.5, *turns))),
    )
    _refuse_crossing(result, np.arange(256) / 256)
    return result


def _four_digits(code):
    whole = isinstance(code, (int, np.integer)) and not isinstance(code, bool)
    digits = f"{code:04d}" if whole and code >= 0 else code
    if not isinstance(digits, str) or not re.fullmatch("[0-9]{4}", digits):
        raise InputError(f"code must be four digits, such as '2412' or '0012'; got {code!r}")
    return digits


# --- reading from a file --------------------------------------------------------------------------

GEOMETRY = re.compile(
    r"\s*(SRID\s*=\s*\d+\s*;)?\s*"
    r"(MULTI)?(POINT|LINESTRING|POLYGON|CURVE|SURFACE|LINEARRING|TRIANGLE)\s*"
    r"(Z|M|ZM)?\s*(\(|EMPTY\b)",
    re.IGNORECASE,
)
POLYGON = re.compile(r"\s*POLYGON\s*\(\s*\(([^()]*)\)\s*\)\s*;?\s*", re.IGNORECASE)


def read_outline(path, corner_radius=None, sharp=None):
    """The outline in a file: of straight sides with a corner radius, else curved.

    Parameters
    ----------
    path : str or path-like
        A UTF-8 text of two columns, x and y, separated by a comma or blanks; one line of words
        at the top and lines that begin with # are skipped. Or one WKT polygon of one ring,
        ``POLYGON ((x y, x y, ...))``. The last point may repeat the first.
    corner_radius : float, optional
        Makes a `polygon` of the points, its corners rounded so. Without it the points are taken
        as lying on a curve, as in `outline`.
    sharp : int, optional
        Index of the point at the one sharp edge of a curved outline.

    Returns
    -------
    Outline

    Raises
    ------
    ob.InputError
        If the file cannot be read, naming the line; if both options are given; or for the
        reasons of `polygon` and `outline`.

    References
    ----------
    Well-known text: OGC 06-103r4, Simple Feature Access, part 1.

    Examples
    --------
    >>> import pathlib, tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = pathlib.Path(folder, "mast.csv")
    ...     _ = path.write_text("x,y\\n0,0\\n0.4,0\\n0.4,0.3\\n0,0.3\\n")
    ...     read_outline(path, corner_radius=0.02)
    <Outline: polygon of 4 corners with corner radius 0.02, read from mast.csv>
    """
    if corner_radius is not None and sharp is not None:
        raise InputError("corner_radius makes a polygon, sharp a curve: give one of the two")
    text = _without_comments(_read_text(path))
    points = _read_polygon(path, text) if GEOMETRY.match(text) else _read_columns(path, text)
    try:
        made = outline(points, sharp) if corner_radius is None else polygon(points, corner_radius)
    except InputError as error:
        raise InputError(f"{path}: {error}") from error
    return replace(made, kind=f"{made.kind}, read from {Path(path).name}")


def _read_text(path):
    if not isinstance(path, (str, os.PathLike)):
        raise InputError(f"path must name a file, got {path!r}")
    try:
        text = Path(path).read_text(encoding="utf-8-sig")
    except UnicodeDecodeError as error:
        raise InputError(
            f"{path} is not UTF-8 text (byte {error.start}); expected two columns of numbers or a "
            "WKT polygon: save it as plain text, UTF-8"
        ) from error
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        raise InputError(f"{path} cannot be read: {reason}; check the path") from error
    if "\0" in text:
        raise InputError(f"{path} is a binary file; expected two columns of numbers or WKT")
    return text


def _without_comments(text):
    """The text with blank lines in place of comments, so that lines keep their numbers."""
    lines = text.splitlines()
    return "\n".join("" if line.lstrip().startswith("#") else line for line in lines)


def _read_columns(path, text):
    points, header = [], True
    for number, line in enumerate(text.splitlines(), start=1):
        if not line.strip():
            continue
        fields = re.split(r"\s*,\s*|\s+", line.strip())
        values = [_as_float(field) for field in fields]
        words = values[0] is None and fields[0][:1].isalpha()
        if header and words and (len(fields) != 2 or values[1] is None):
            header = False
            continue
        header = False
        points.append(_as_pair(f"{path}, line {number}", line, values))
    if not points:
        raise InputError(f"{path} holds no points; expected a line 'x y' for each")
    return np.array(points)


def _read_polygon(path, text):
    """The ring of a WKT polygon; its place in the file goes into the errors."""
    match = POLYGON.fullmatch(text)
    if match is None:
        first = len(text) - len(text.lstrip())
        raise InputError(
            f"{path}, line {_line_number(text, first)}: found {_excerpt(text)}, expected "
            "POLYGON ((x y, x y, ...)), one polygon of one ring and nothing else; "
            + _geometry_mend(text)
        )
    points, offset = [], match.start(1)
    for pair in match[1].split(","):
        first = offset + len(pair) - len(pair.lstrip())
        place = f"{path}, line {_line_number(text, first)}"
        points.append(_as_pair(place, pair, [_as_float(field) for field in pair.split()]))
        offset += len(pair) + 1
    return np.array(points)


def _line_number(text, offset):
    return 1 + text.count("\n", 0, offset)


def _geometry_mend(text):
    head = text.strip().upper()
    if head.startswith("SRID"):
        return "leave out SRID"
    if re.match(r"POLYGON\s*(Z|M|ZM)\b", head):
        return "leave out Z and M"
    if re.match(r"POLYGON\s*\(\s*\([^()]*\)\s*,", head):
        return "leave out the holes, the stream does not enter them"
    if head.startswith("MULTIPOLYGON"):
        return "write each polygon to a file of its own"
    return "check the brackets"


def _as_float(text):
    try:
        return None if "_" in text else float(text)
    except ValueError:
        return None


def _as_pair(place, text, values):
    if len(values) == 2 and all(v is not None and math.isfinite(v) for v in values):
        return values
    mend = {
        1: ", with a comma or blanks between",
        3: "; leave out the third",
        4: "; write decimals with a point",
    }.get(len(values), "")
    raise InputError(
        f"{place}: found {_excerpt(text)}, expected two finite numbers, x and y{mend}"
    )


def _excerpt(text):
    text = " ".join(text.split())
    return repr(text if len(text) <= 60 else text[:57] + "...")


# --- shared ---------------------------------------------------------------------------------------


def _wrapped(s):
    return s - np.floor(s)


def _unit(angle):
    return np.cos(angle) + 1j * np.sin(angle)


def _turn(degrees):
    """The unit complex number of an angle, exact for quarter turns."""
    quarters, rest = divmod(degrees % 360.0 + 45.0, 90.0)
    angle = math.radians(rest - 45.0)
    return (1, 1j, -1, -1j)[int(quarters) % 4] * complex(math.cos(angle), math.sin(angle))


def _place(z):
    return f"({z.real:g}, {z.imag:g})"


def _rounded_down(value):
    """A positive number cut to six digits, so that what is printed is not more than it."""
    decimals = 5 - math.floor(math.log10(value))
    return math.floor(value * 10.0**decimals) / 10.0**decimals


def _size(z):
    return float(max(np.ptp(z.real), np.ptp(z.imag)))


def _gap(z):
    """What may lie between the two ends of a closed curve: rounding where it runs steeply."""
    return 1e-7 * _size(z) + 16 * ROUNDING * float(np.abs(z).max())


def _area(z):
    """Area of a polygon, counter-clockwise positive."""
    z = z - z[0]
    return 0.5 * float(np.sum((np.conj(z) * np.roll(z, -1)).imag))


def _fractions(lengths):
    """Parameters from 0 to 1 of the ends of pieces of given lengths."""
    ends = np.concatenate([[0.0], np.cumsum(lengths)])
    return ends / ends[-1]


def _subdivided(breaks, counts):
    """Parameters that cut each piece between breaks into equal parts, the very last left out."""
    counts = np.broadcast_to(counts, len(breaks) - 1)
    piece = np.repeat(np.arange(len(counts)), counts)
    part = np.arange(len(piece)) - np.repeat(np.cumsum(counts) - counts, counts)
    return breaks[piece] + np.diff(breaks)[piece] * part / counts[piece]


def _as_index(name, value, count):
    if isinstance(value, (bool, np.bool_)) or not isinstance(value, (int, np.integer)):
        raise InputError(f"{name} must be the index of a point, got {value!r}")
    if not -count <= value < count:
        raise InputError(f"{name} = {value}: there are points 0 to {count - 1}")
    return int(value) % count


def _distinct_points(points):
    """The points without repeated neighbours, complex, and for each given one its new index."""
    given = as_points("points", points)
    if given.ndim != 2:
        raise InputError(f"points must have shape (n, 2), got {given.shape}")
    z = given[:, 0] + 1j * given[:, 1]
    new = np.ones(len(z), bool)
    new[1:] = z[1:] != z[:-1]
    index = np.cumsum(new) - 1
    z = z[new]
    if len(z) > 1 and z[-1] == z[0]:
        z = z[:-1]
        index %= len(z)
    if len(np.unique(z)) < 3:
        raise InputError(
            f"points must hold at least three distinct points, got {len(np.unique(z))}"
        )
    offset = z - z[0]
    far = offset[np.argmax(np.abs(offset))]
    if np.abs((offset * np.conj(far)).imag).max() <= TOUCH * abs(far) ** 2:
        raise InputError(
            f"points all lie on one line, from {_place(z[0])} toward {_place(z[0] + far)}; "
            "an outline must enclose an area"
        )
    return z, index


def _refuse_smooth_edge(result, argument):
    """Refuse an edge at which the outline is smooth or re-entrant."""
    if result.edge is None:
        return
    step = np.array([1e-4, 5e-5])
    before, at, after = result.position(result.edge + np.stack([-step, 0 * step, step]))
    wide, close = (after - at) / (at - before)
    at, turn = at[0], math.degrees(np.angle(close * close / wide))  # extrapolated to no step
    if CORNER - 180 < turn < CORNER:
        bent = "is smooth there" if turn > -CORNER else "is re-entrant there"
        raise InputError(
            f"{argument}: {result.kind} {bent}, near {_place(at)} (it turns by {turn:.3g} "
            "degrees); name the convex trailing edge, or leave sharp out"
        )


# --- crossing -------------------------------------------------------------------------------------

NEIGHBOURS = 1e-4     # of the perimeter: parts of a wall so near along it may lie close together

# Chords between samples are enclosed in boxes, boxes of neighbours in larger boxes, and so on up;
# from the top down only pairs of boxes that overlap are opened. Chords that meet start Newton's
# method on the curve itself, which tells a crossing from a narrow place.


def _refuse_crossing(result, s):
    """Refuse an outline that crosses or touches itself, sampled at parameters s."""
    s, z, size = _close_samples(result, s)
    first, second = _meeting_chords(z, size)
    ends = np.append(s, s[0] + 1.0)
    arc = _fractions(np.abs(np.roll(z, -1) - z))
    for k in range(0, len(first), 100):
        one, other = _nearest_approach(result, ends, first[k : k + 100], second[k : k + 100])
        places = result.position(one)
        met = np.abs(places - result.position(other)) < TOUCH * size
        met &= _arc_between(ends, arc, one, other) > NEIGHBOURS
        if met.any():
            raise InputError(
                f"{result.kind} crosses or touches itself near {_place(places[met][0])}; "
                "give the wall in order, once round"
            )


def _arc_between(ends, arc, one, other):
    """Length of wall between two parameters, the shorter way round, over the perimeter."""
    one, other = (np.interp((s - ends[0]) % 1.0 + ends[0], ends, arc) for s in (one, other))
    return np.abs((one - other + 0.5) % 1.0 - 0.5)


def _close_samples(result, s):
    """Samples that follow the curve through its sharp bends, and the size of the body."""
    for _ in range(6):
        z = result.position(s)
        size = _size(z)
        kept = np.abs(np.roll(z, -1) - z) > 1e-7 * size
        s, z = s[kept], z[kept]
        bent = np.abs(_turning(z)) > SUSPECT_TURN
        bent |= np.roll(bent, -1)
        if not bent.any():
            break
        middle = (s + 0.5 * ((np.roll(s, -1) - s) % 1.0)) % 1.0
        s = np.sort(np.concatenate([s, middle[bent]]))
    return s, result.position(s), size


def _nearest_approach(result, ends, first, second):
    """Parameters near pairs of chords at which the curve meets itself, or comes near that.

    Newton's method from the middles of the chords, kept within reach of the longer one.
    """
    chord = np.stack([first, second])
    left, right = ends[chord], ends[chord + 1]
    s, roam = 0.5 * (left + right), (right - left).max(axis=0)
    for _ in range(12):
        z, slope = result.position(s), result.derivative(s)
        miss = z[0] - z[1]
        matrix = np.array([[slope[0].real, -slope[1].real], [slope[0].imag, -slope[1].imag]])
        inverse = np.linalg.pinv(np.moveaxis(matrix, -1, 0), rcond=1e-9)
        step = inverse @ np.stack([miss.real, miss.imag], axis=-1)[..., None]
        s = np.clip(s - step[..., 0].T, left - roam, right + roam)
    return s


def _meeting_chords(z, size):
    """Pairs of chords of a closed polygon, no neighbours, that meet."""
    count = len(z)
    after = np.roll(z, -1)
    low = np.stack([np.minimum(z.real, after.real), np.minimum(z.imag, after.imag)])
    high = np.stack([np.maximum(z.real, after.real), np.maximum(z.imag, after.imag)])
    first, second = _overlapping_boxes(low - TOUCH * size, high + TOUCH * size)
    apart = (second - first > 1) & (second - first < count - 1)
    first, second = first[apart], second[apart]
    meet = _straddles(z, after, first, second, size) & _straddles(z, after, second, first, size)
    return first[meet], second[meet]


def _straddles(z, after, line, chord, size):
    """Whether the ends of a chord lie on the two sides of another's line, or all but on it."""
    along = np.conj(after[line] - z[line])
    one = (along * (z[chord] - z[line])).imag
    other = (along * (after[chord] - z[line])).imag
    nought = TOUCH * size * np.abs(along)
    return ((one <= nought) | (other <= nought)) & ((one >= -nought) | (other >= -nought))


def _overlapping_boxes(low, high):
    """Pairs i < j of boxes, (2, n) corners each, that overlap."""
    levels = [(low, high)]
    while levels[-1][0].shape[1] > 1:
        low, high = levels[-1]
        if low.shape[1] % 2:
            low = np.pad(low, ((0, 0), (0, 1)), constant_values=np.inf)
            high = np.pad(high, ((0, 0), (0, 1)), constant_values=-np.inf)
            levels[-1] = low, high
        levels.append(
            (low.reshape(2, -1, 2).min(axis=2), high.reshape(2, -1, 2).max(axis=2))
        )
    first = second = np.zeros(1, int)
    for low, high in levels[-2::-1]:
        first, second = (
            np.concatenate([2 * first, 2 * first, 2 * first + 1, 2 * first + 1]),
            np.concatenate([2 * second, 2 * second + 1, 2 * second, 2 * second + 1]),
        )
        overlap = first <= second
        overlap &= (low[:, first] <= high[:, second]).all(axis=0)
        overlap &= (low[:, second] <= high[:, first]).all(axis=0)
        first, second = first[overlap], second[overlap]
    return first[first < second], second[first < second]
