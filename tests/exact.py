"""Exact plane potential flows, written once in plain NumPy for the tests and the benchmarks.

Every solution gives, in a stream of unit speed towards ``direction`` (degrees, counter-clockwise
from +x):

- ``wall(s)``: the outline, a complex point for s in [0, 1), counter-clockwise;
- ``velocity(z, direction)``: the complex velocity W = u - i v at points z outside or on the wall;
- ``surface_speed(s, direction)``: the velocity along the counter-clockwise tangent of the wall;
- ``offset_points(s, distance)``: the points at a distance from the wall, along its outward normal.

A counter-clockwise circulation G adds -i G / (2 pi z) to W far away.

References
----------
L. M. Milne-Thomson, Theoretical Hydrodynamics (circle theorem, images of doublets, Joukowski and
Karman-Trefftz maps); H. Lamb, Hydrodynamics (ellipse in a stream; rows of vortices and doublets).
"""

from dataclasses import dataclass
from functools import cache, cached_property

import mpmath
import numpy as np
from scipy.optimize import minimize_scalar


def as_pairs(z):
    """Return complex points as real pairs (..., 2)."""
    z = np.asarray(z, dtype=complex)
    return np.stack([z.real, z.imag], axis=-1)


def as_complex(pairs):
    """Return real pairs (..., 2) as complex numbers."""
    pairs = np.asarray(pairs, dtype=float)
    return pairs[..., 0] + 1j * pairs[..., 1]


def as_velocity(w):
    """Return a complex velocity u - i v as real pairs (..., 2) of u and v."""
    return as_pairs(np.conj(w))


def as_function(solution):
    """Return the wall of a solution as the function s -> (..., 2) that an outline is made from."""
    return lambda s: as_pairs(solution.wall(s))


def along_wall(points, velocity):
    """Return signed speeds (n,) along a closed wall of points (n, 2), run counter-clockwise.

    The velocity (n, 2) is tangential there, so only its sign is asked of the neighbours.
    """
    ahead = np.roll(points, -1, axis=0) - np.roll(points, 1, axis=0)
    return np.copysign(np.hypot(*velocity.T), np.sum(velocity * ahead, axis=-1))


def _stream(direction):
    return np.exp(1j * np.radians(direction))


class _Body:
    """What follows for any body from its wall and the wall's tangent."""

    def offset_points(self, s, distance):
        """Return the points (complex) at a distance outward from the wall at s."""
        return self.wall(s) - 1j * self.tangent(s) * distance


@dataclass(frozen=True)
class Circle(_Body):
    """Circle in a stream, with a circulation (Milne-Thomson)."""

    radius: float = 1.0
    centre: complex = 0.0
    circulation: float = 0.0

    def wall(self, s):
        return self.centre + self.radius * np.exp(2j * np.pi * np.asarray(s))

    def tangent(self, s):
        return 1j * np.exp(2j * np.pi * np.asarray(s))

    def velocity(self, z, direction=0.0):
        stream = _stream(direction)
        z = np.asarray(z) - self.centre
        swirl = 1j * self.circulation / (2 * np.pi * z)
        return np.conj(stream) - stream * (self.radius / z) ** 2 - swirl

    def gradient(self, z, direction=0.0):
        """Return dW/dz."""
        z = np.asarray(z) - self.centre
        doublet = 2 * _stream(direction) * self.radius**2 / z**3
        return doublet + 1j * self.circulation / (2 * np.pi * z**2)

    def surface_speed(self, s, direction=0.0):
        around = 2 * np.pi * np.asarray(s) - np.radians(direction)
        return -2 * np.sin(around) + self.circulation / (2 * np.pi * self.radius)


@dataclass(frozen=True)
class Ellipse(_Body):
    """Ellipse of the given length and thickness in a stream, with a circulation (Lamb).

    The Joukowski map z = c + k / c carries the circle of radius (length + thickness) / 4 on to it.
    """

    length: float
    thickness: float
    centre: complex = 0.0
    turned: float = 0.0
    circulation: float = 0.0

    @property
    def _circle_radius(self):
        return (self.length + self.thickness) / 4

    @property
    def _k(self):
        return (self.length**2 - self.thickness**2) / 16

    def _map_slope(self, on_circle):
        return 1 - self._k / on_circle**2

    def _in_own_axes(self, direction):
        return Circle(self._circle_radius, 0.0, self.circulation), direction - self.turned

    def wall(self, s):
        angle = 2 * np.pi * np.asarray(s)
        own = self.length / 2 * np.cos(angle) + 1j * self.thickness / 2 * np.sin(angle)
        return self.centre + _stream(self.turned) * own

    def tangent(self, s):
        angle = 2 * np.pi * np.asarray(s)
        own = -self.length * np.sin(angle) + 1j * self.thickness * np.cos(angle)
        return _stream(self.turned) * own / abs(own)

    def _to_circle(self, z):
        # The principal root of (1 - f/z)(1 + f/z) is cut on the line between the foci only, which
        # lies inside, whichever axis is the longer.
        z = (np.asarray(z, dtype=complex) - self.centre) / _stream(self.turned)
        focus = 2 * np.sqrt(complex(self._k))
        return z * (1 + np.sqrt((1 - focus / z) * (1 + focus / z))) / 2

    def velocity(self, z, direction=0.0):
        circle, incidence = self._in_own_axes(direction)
        c = self._to_circle(z)
        return circle.velocity(c, incidence) / self._map_slope(c) / _stream(self.turned)

    def gradient(self, z, direction=0.0):
        """Return dW/dz."""
        circle, incidence = self._in_own_axes(direction)
        c = self._to_circle(z)
        slope, curving = self._map_slope(c), 2 * self._k / c**3
        own = circle.velocity(c, incidence) / slope
        own_gradient = (circle.gradient(c, incidence) - own * curving) / slope**2
        return own_gradient / _stream(self.turned) ** 2

    def surface_speed(self, s, direction=0.0):
        circle, incidence = self._in_own_axes(direction)
        slope = self._map_slope(circle.wall(s))
        return circle.surface_speed(s, incidence) / abs(slope)


@dataclass(frozen=True)
class KarmanTrefftz(_Body):
    """Karman-Trefftz section with the Kutta condition: edge at s = 0, nose at x = edge - 1.

    The map (w / (w + 2 n)) = (c / (c + 2))^n, n = 2 - edge angle / pi, carries the circle through
    c = 0 with its centre at -1 - bluntness + i bending on to the section. Both w and c are measured
    FROM THE EDGE, so that nothing cancels near it; as the map has a closed inverse, none is
    searched for. The section is then scaled to unit chord.

    Parameters
    ----------
    edge_angle : float
        Angle between the two sides at the trailing edge, degrees.
    bluntness, bending : float
        Displacement of the circle's centre: sets thickness and camber.
    edge : complex
        Where the edge lies.
    """

    edge_angle: float = 12.0
    bluntness: float = 0.0635
    bending: float = 0.0
    edge: complex = 1.0

    @property
    def _n(self):
        return 2 - self.edge_angle / 180

    @property
    def _circle_centre(self):
        return -1 - self.bluntness + 1j * self.bending

    @property
    def _circle_radius(self):
        return abs(self._circle_centre)

    @property
    def _tilt(self):
        return np.arctan2(self.bending, 1 + self.bluntness)

    @cached_property
    def _scale(self):
        reach = minimize_scalar(lambda s: self._section(self._circle(s)).real,
                                bounds=(0.4, 0.6), method="bounded", options={"xatol": 1e-9}).fun
        return -1 / reach

    def _circle(self, s):
        # exp(i t) - 1 as a product: exact next to the edge, on both its sides.
        s = np.asarray(s, dtype=float)
        half_turn = np.sin(np.pi * np.where(s > 0.5, 1 - s, s))
        return self._circle_radius * 2j * half_turn * np.exp(1j * (np.pi * s - self._tilt))

    def _section(self, c):
        n = self._n
        # The cut leaves the edge along the middle of the section: hence the turn by the tilt.
        turn = np.exp(1j * self._tilt)
        power = (c / (c + 2) * turn) ** n / turn**n
        return 2 * n * power / (1 - power)

    def _to_circle(self, w):
        n, tilt = self._n, self._tilt
        x = 2 * n / w
        size = np.log1p(x.real * (2 + x.real) + x.imag**2) / 2
        angle = np.angle(1 + x)
        angle -= 2 * np.pi * np.round((angle - n * tilt) / (2 * np.pi))
        return 2 / np.expm1((size + 1j * angle) / n)

    def _map_slope(self, c, w):
        return w * (w + 2 * self._n) / (c * (c + 2))

    def wall(self, s):
        return self.edge + self.wall_from_edge(s)

    def wall_from_edge(self, s):
        """Return the wall points less the edge's place, exact however near the edge."""
        return self._scale * self._section(self._circle(s))

    def tangent(self, s):
        c = self._circle(s)
        along = 1j * (c - self._circle_centre) * self._map_slope(c, self._section(c))
        return along / abs(along)

    def circulation(self, direction=0.0):
        """Return the circulation that lets the stream leave the edge smoothly."""
        lift = np.sin(np.radians(direction) + self._tilt)
        return -4 * np.pi * self._scale * self._circle_radius * lift

    def velocity(self, z, direction=0.0):
        return self.velocity_from_edge(np.asarray(z, dtype=complex) - self.edge, direction)

    def velocity_from_edge(self, z, direction=0.0):
        """Return W at points given less the edge's place, exact however near the edge."""
        w = np.asarray(z, dtype=complex) / self._scale
        c = self._to_circle(w)
        stream = _stream(direction)
        from_centre = c - self._circle_centre
        # Stream, doublet and circulation as a product: the zero at the edge stands as a factor.
        other_zero = self._circle_radius * stream**2 * np.exp(1j * self._tilt)
        on_circle = np.conj(stream) * c * (from_centre + other_zero) / from_centre**2
        return on_circle / self._map_slope(c, w)

    def surface_speed(self, s, direction=0.0):
        """Return the signed wall speed; not for s = 0, the edge itself, where it is 0 / 0."""
        s = np.asarray(s, dtype=float)
        c = self._circle(s)
        angle = np.pi * s
        half_turn = np.sin(np.pi * np.where(s > 0.5, 1 - s, s))
        on_circle = -4 * half_turn * np.cos(angle - self._tilt - np.radians(direction))
        return on_circle / abs(self._map_slope(c, self._section(c)))


@dataclass(frozen=True)
class TwoCircles:
    """Two circles without circulation in a stream, by successive images of doublets.

    A doublet of strength m at distance d (complex) from the centre of a circle of radius r has in
    it the image -conj(m) r^2 / conj(d)^2 at r^2 / conj(d) (circle theorem), with no circulation;
    the strengths fall geometrically, the slower the narrower the gap.
    """

    radii: tuple
    centres: tuple

    @classmethod
    def with_gap(cls, first_radius, second_radius, gap):
        """Return two circles on the x-axis, the origin in the middle of the gap."""
        return cls((first_radius, second_radius),
                   (-gap / 2 - first_radius, gap / 2 + second_radius))

    @classmethod
    def above_ground(cls, radius, gap):
        """Return a circle above the ground y = 0 and its mirror image below."""
        height = radius + gap
        return cls((radius, radius), (1j * height, -1j * height))

    @property
    def bodies(self):
        """The two circles, each with its wall and its points beside the wall."""
        return tuple(Circle(r, c) for r, c in zip(self.radii, self.centres, strict=True))

    def _doublets(self, stream):
        for first in (0, 1):
            strength, place, owner = self.radii[first] ** 2 * stream, self.centres[first], first
            while abs(strength) > 1e-20:
                yield strength, place
                owner = 1 - owner
                d = np.conj(place - self.centres[owner])
                strength = -np.conj(strength) * (self.radii[owner] / d) ** 2
                place = self.centres[owner] + self.radii[owner] ** 2 / d

    def velocity(self, z, direction=0.0):
        z = np.asarray(z, dtype=complex)
        stream = _stream(direction)
        w = np.full(z.shape, np.conj(stream))
        for strength, place in self._doublets(stream):
            w -= strength / (z - place) ** 2
        return w

    def surface_speed(self, body, s, direction=0.0):
        """Return the signed wall speed of one of the two bodies."""
        circle = self.bodies[body]
        return (self.velocity(circle.wall(s), direction) * circle.tangent(s)).real


class _RepeatedCircle(_Body):
    """A circle and its copies at every period along y, by multipoles, solved in thirty digits.

    With lengths in radii, d = z - centre and G(d) = (pi/P) coth(pi d/P), the row of unit
    singularities 1/d (Lamb),

        W = V + sum over m of c_m G_m(d) + conj(c_m) G_m(d - s),  G_(m+1) = -G_m'/m,

    the second sum only where walls reflect the circle to centre + s. Round the circle the part of W
    that is regular within it is sum_k t_k d^k, linear in the c_m, and by the circle theorem
    c_(k+2) = -conj(t_k). c_1 is the circulation's. G_m is a polynomial in coth(pi d/P), so that
    W is two of them, exact far up- and downstream.
    """

    digits = 30

    wall = Circle.wall
    tangent = Circle.tangent

    def _far_coefficients(self):
        """g_j: Taylor coefficients of G(d) - 1/d at d = 0, by zeta functions."""
        period = mpmath.mpf(self._period) / self.radius
        odd = [2 * (-1) ** (j // 2) * mpmath.zeta(j + 1) / period ** (j + 1) if j % 2 else 0
               for j in range(2 * self.terms + 1)]
        return [mpmath.mpc(g) for g in odd]

    def _mirror_coefficients(self):
        """h_j: Taylor coefficients of G(d - s) at d = 0, by Hurwitz zeta functions."""
        period = mpmath.mpf(self._period) / self.radius
        share = mpmath.mpf(-self._reflection) / self._period   # -s = i share period
        first = -1j * mpmath.pi / period * mpmath.cot(mpmath.pi * share)
        return [first] + [
            mpmath.mpc(0, -1) ** (j + 1) * (-1) ** j / period ** (j + 1)
            * (mpmath.zeta(j + 1, share) + (-1) ** (j + 1) * mpmath.zeta(j + 1, 1 - share))
            for j in range(1, 2 * self.terms + 1)
        ]

    def _multipoles(self, direction):
        """The onset V and c_1, c_2 ... in thirty digits, lengths in radii."""
        count = self.terms
        far = self._far_coefficients()
        mirror = [0] * len(far) if self._reflection is None else self._mirror_coefficients()
        first = mpmath.mpc(0, -self.circulation / self.radius) / (2 * mpmath.pi)
        onset = self._onset(direction, first)

        def regular(row, multipole, taylor):
            power = row + multipole - 1
            return (-1) ** (multipole - 1) * mpmath.binomial(power, multipole - 1) * taylor[power]

        matrix, right = mpmath.matrix(2 * count), mpmath.matrix(2 * count, 1)
        for k in range(count):
            given = regular(k, 1, far) * first + regular(k, 1, mirror) * mpmath.conj(first)
            given += onset if k == 0 else 0
            right[k], right[count + k] = given.real, given.imag
            for j in range(count):   # t_k + A conj(t) + B t = given, as c = -conj(t)
                a, b = regular(k, j + 2, far), regular(k, j + 2, mirror) + (j == k)
                matrix[k, j], matrix[k, count + j] = b.real + a.real, a.imag - b.imag
                matrix[count + k, j] = b.imag + a.imag
                matrix[count + k, count + j] = b.real - a.real
        t = mpmath.lu_solve(matrix, right)
        return onset, [first] + [-mpmath.mpc(t[k], -t[count + k]) for k in range(count)]

    def velocity(self, z, direction=0.0):
        onset, series = _coth_series(self, direction)
        d = np.pi * (np.asarray(z, dtype=complex) - self.centre) / self._period
        total = onset + np.polynomial.polynomial.polyval(_coth(d), series)
        if self._reflection is not None:
            mirrored = d - 1j * np.pi * self._reflection / self._period
            total = total + np.polynomial.polynomial.polyval(_coth(mirrored), series.conj())
        return total

    def surface_speed(self, s, direction=0.0):
        return (self.velocity(self.wall(s), direction) * self.tangent(s)).real


@cache
def _coth_series(circle, direction):
    """V, and the polynomial in coth(pi d/P) that the multipoles of a repeated circle make."""
    with mpmath.workdps(circle.digits):
        onset, multipoles = circle._multipoles(direction)
        shape, total = [mpmath.mpf(0), mpmath.mpf(1)], [mpmath.mpc(0)] * (len(multipoles) + 1)
        factor = mpmath.pi * circle.radius / circle._period
        for m, strength in enumerate(multipoles, start=1):
            for k, size in enumerate(shape):
                total[k] += strength * factor**m * size
            slope = [k * size / m for k, size in enumerate(shape)][1:]
            shape = [mpmath.mpf(0)] * (m + 2)   # (C^2 - 1) times the slope, over m
            for k, size in enumerate(slope):
                shape[k] -= size
                shape[k + 2] += size
        return complex(onset), np.array([complex(one) for one in total])


def _coth(x):
    """coth of complex x without overflow; of period pi along the imaginary axis."""
    side = np.where(x.real < 0, -1.0, 1.0)
    fall = np.exp(-2 * side * x)
    return side * (1 + fall) / (1 - fall)


@dataclass(frozen=True)
class CircleRow(_RepeatedCircle):
    """Circles at every pitch along y, each with a circulation; the stream is that far upstream.

    Along the row, at 90 or -90 degrees, there is a far upstream only without circulation.
    """

    radius: float
    pitch: float
    centre: complex = 0.0
    circulation: float = 0.0
    terms: int = 24

    _reflection = None

    @property
    def _period(self):
        return self.pitch

    def _onset(self, direction, first):
        # Upstream the row of c_1 adds -c_1 pi/P (for a stream towards +x) to V.
        side = mpmath.sign(round(mpmath.cos(mpmath.radians(direction)), 12))
        return mpmath.expj(-mpmath.radians(direction)) + (
            side * first * mpmath.pi * self.radius / self.pitch
        )


@dataclass(frozen=True)
class CircleInDuct(_RepeatedCircle):
    """Circle between the walls y = lower and y = upper; the stream is that far upstream."""

    radius: float
    lower: float
    upper: float
    centre: complex = 0.0
    circulation: float = 0.0
    terms: int = 24

    @property
    def _period(self):
        return 2 * (self.upper - self.lower)

    @property
    def _reflection(self):
        return -2 * (np.imag(self.centre) - self.lower)

    def _onset(self, direction, first):
        return mpmath.mpc(mpmath.cos(mpmath.radians(direction)))


@dataclass(frozen=True)
class SingularityNearCircle(_Body):
    """Source and vortex at one place outside a circle, with no stream (circle theorem).

    No net flux and no net circulation round the circle itself.
    """

    place: complex
    source: float = 0.0
    vortex: float = 0.0
    radius: float = 1.0

    wall = Circle.wall
    tangent = Circle.tangent
    centre = 0.0

    @property
    def _strength(self):
        return (self.source - 1j * self.vortex) / (2 * np.pi)

    def onset(self, z):
        """Return the field of the source and vortex alone, as if there were no circle."""
        return self._strength / (np.asarray(z) - self.place)

    def velocity(self, z):
        z = np.asarray(z)
        image_place = self.radius**2 / np.conj(self.place)
        image = np.conj(self._strength) * (1 / (z - image_place) - 1 / z)
        return self.onset(z) + image

    def surface_speed(self, s):
        return (self.velocity(self.wall(s)) * self.tangent(s)).real


@dataclass(frozen=True)
class BlownCircle(_Body):
    """Circle with a given outward normal velocity on its wall, no stream and no circulation.

    With normal velocity sum over k of v_k exp(i k angle), the field outside is
    W = v_0 (a / z) + sum over k > 0 of 2 conj(v_k) (a / z)^(k + 1).

    Parameters
    ----------
    normal_velocity : callable
        Outward normal velocity, a smooth function of the angle (radians) from +x.
    radius : float
    terms : int
        Number of Fourier terms kept.
    """

    normal_velocity: object
    radius: float = 1.0
    terms: int = 256

    wall = Circle.wall
    tangent = Circle.tangent
    centre = 0.0

    @cached_property
    def _coefficients(self):
        angles = 2 * np.pi * np.arange(2 * self.terms) / (2 * self.terms)
        fourier = np.fft.rfft(self.normal_velocity(angles))[: self.terms] / (2 * self.terms)
        return np.concatenate([fourier[:1], 2 * np.conj(fourier[1:])])

    @property
    def flux(self):
        """The volume blown through the whole wall."""
        return 2 * np.pi * self.radius * self._coefficients[0].real

    def velocity(self, z):
        ratio = self.radius / np.asarray(z, dtype=complex)
        return ratio * np.polynomial.polynomial.polyval(ratio, self._coefficients)

    def surface_speed(self, s):
        return (self.velocity(self.wall(s)) * self.tangent(s)).real
