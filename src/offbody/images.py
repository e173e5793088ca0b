"""Image flows: the reflection in a plane, and the sum over copies at every period along y.

A row of point strengths at zeta + i n P induces (pi/P) coth(pi d/P) at d = z - zeta, the symmetric
sum of 1/(d - i n P) (Lamb, Hydrodynamics, on rows of vortices). The 2 M + 1 copies nearest to a
target are summed as they are, closed forms included. What the others add is smooth there:

    sum over |n| > M of 1/(d - i n P) = sum_m c_m (d/P)^(2m+1),
    c_m = 2 (-1)^m zeta(2m + 2, M + 1),

a Hurwitz zeta function, for |d| < (M + 1) P, expanded about the middle of the bodies: a polynomial
in z. Abreast of no body, where Re d > P/2 for all of them, all copies together are

    (pi/P) coth(pi d/P) = (pi/P) (1 + 2 sum_m exp(-2 pi m d/P)),

twelve terms to rounding, and likewise for Re d < 0: nothing else is summed there, and the limits
far up- and downstream are exact.
"""

from dataclasses import dataclass

import numpy as np
from scipy.special import comb, zeta

from offbody.surroundings import reflected

ABREAST = 0.5        # of a period: farther than this up- or downstream the exponentials serve
EXPONENTIALS = 12    # exp(-2 pi 12/2) = 4e-17
CONVERGENCE = 0.55   # greatest |d| over (M + 1) P in the series
TERMS = 64           # 0.55^64 = 2e-17


@dataclass(frozen=True)
class Copies:
    """The copies of one set of panels at every period along y."""

    period: float
    middle: complex
    half_length: float     # of all nodes along x
    nearest: int           # M
    scale: float           # the polynomial is one in (z - middle)/scale
    moments: np.ndarray    # (TERMS, N) of the polynomial
    waves: np.ndarray      # (2, EXPONENTIALS, N): downstream (+x) and upstream

    @classmethod
    def of(cls, nodes, period):
        """The copies of what stands at complex nodes; None without a period."""
        if period is None:
            return None
        low, high = nodes.real.min(), nodes.real.max()
        middle = complex(0.5 * (low + high), 0.5 * (nodes.imag.min() + nodes.imag.max()))
        half_length, half_height = 0.5 * (high - low), 0.5 * np.ptp(nodes.imag)
        far = np.hypot(half_length + ABREAST * period, 0.5 * period) + np.hypot(
            half_length, half_height
        )
        nearest = max(
            int(np.ceil(0.5 + half_height / period)),
            int(np.ceil(far / (CONVERGENCE * period))) - 1,
        )
        scale = (nearest + 1) * period
        moments = _moments((nodes - middle) / scale, nearest) / scale
        sides = np.stack([nodes - middle, middle - nodes]) * 2 * np.pi / period
        steps = np.arange(1, EXPONENTIALS + 1)
        waves = np.exp(steps[None, :, None] * (sides - half_length * 2 * np.pi / period)[:, None])
        return cls(period, middle, half_length, nearest, scale, moments, waves)

    def home(self, z):
        """Targets moved by whole periods to within half of one from the middle along y."""
        return z - 1j * self.period * np.round((z - self.middle).imag / self.period)

    def side(self, z):
        """0 abreast of the bodies, 1 or -1 where the exponentials serve down- or upstream."""
        along = (z - self.middle).real
        return np.sign(along) * (np.abs(along) > self.half_length + ABREAST * self.period)

    def polynomial(self, z):
        """(len(z), TERMS) powers that ``moments`` multiplies."""
        return np.vander((z - self.middle) / self.scale, TERMS, increasing=True)

    def decay(self, z, side):
        """(len(z), EXPONENTIALS) exponentials that ``waves`` multiplies on one side."""
        run = side * (z - self.middle) - self.half_length
        return np.exp(-2 * np.pi / self.period * run[:, None] * np.arange(1, EXPONENTIALS + 1))


def _moments(places, nearest):
    """(TERMS, N) coefficients of x^k in the far copies' sum, d = (x - places) (M + 1) P."""
    m = np.arange(TERMS // 2)
    size = np.zeros(2 * TERMS)
    far = zeta(2 * m + 2, nearest + 1) * (nearest + 1.0) ** (2 * m + 2)
    size[2 * m + 1] = 2.0 * (-1.0) ** m * far
    k = np.arange(TERMS)
    binomial = size[k[:, None] + k] * comb(k[:, None] + k, k[:, None]) * (-1.0) ** k
    return binomial @ np.vander(places, TERMS, increasing=True).T


def fields(copies, surroundings, free, charges, z):
    """(R, len(z)) field of R densities and of all their images.

    free(z) : the field (R, len(z)) of the panels alone; charges (R, N) : the point strengths that
    stand for them in the smooth field of far ``copies`` (None where nothing repeats).
    """
    total = _row(copies, free, charges, z)
    if surroundings.mirror is None:
        return total
    return total + _row(copies, free, charges, reflected(surroundings, z)).conj()


def _row(copies, free, charges, z):
    if copies is None:
        return free(z)
    z = copies.home(z)
    side = copies.side(z)
    total = np.empty((len(charges), len(z)), complex)
    abreast = side == 0
    here = z[abreast]
    shifts = 1j * copies.period * np.arange(-copies.nearest, copies.nearest + 1)
    near = free((here[None, :] - shifts[:, None]).ravel())
    total[:, abreast] = near.reshape(len(charges), len(shifts), -1).sum(axis=1)
    total[:, abreast] += charges @ copies.moments.T @ copies.polynomial(here).T
    for k, sign in enumerate((1, -1)):
        there = side == sign
        waves = 2.0 * (charges @ copies.waves[k].T) @ copies.decay(z[there], sign).T
        total[:, there] = sign * np.pi / copies.period * (charges.sum(1)[:, None] + waves)
    return total


def matrix(panels, surroundings, free, z, turn):
    """(len(z), N) real part of turn times the influence of unit vortices at z, images included.

    free(z, turn) : the real and imaginary parts of it for the panels alone.
    """
    real = _row_matrix(panels, free, z, turn)
    if surroundings.mirror is not None:
        real += _row_matrix(panels, free, reflected(surroundings, z), turn.conj())
    return real


def _row_matrix(panels, free, z, turn):
    copies = panels.copies
    if copies is None:
        return free(z, turn)[0]
    z = copies.home(z)  # the targets are the nodes, or their reflections: abreast of the bodies
    real, _ = free(z, turn)
    for n in range(1, copies.nearest + 1):
        for shift in (1j * n * copies.period, -1j * n * copies.period):
            real += free(z - shift, turn)[0]
    strength = panels.weights / (2j * np.pi)
    return real + (turn[:, None] * (copies.polynomial(z) @ (copies.moments * strength))).real


def log_sinh(period, away, downstream):
    """The potential of a unit strength at a distance ``away``: log away, or that of a row of them.

    Its cut runs along ``downstream`` (radians) from every copy.
    """
    turn = np.exp(-1j * (downstream + np.pi))
    with np.errstate(divide="ignore"):
        if period is None:
            return np.log(away * turn)
        whole = np.round(away.imag / period)
        x = np.pi * (away / period - 1j * whole)
        size = np.abs(x.real)
        scaled = 0.5 * (np.exp(x - size) - np.exp(-x - size))
        # One period up, the flux of half a source has crossed upstream.
        rise = -1j * np.pi * whole * np.sign(np.cos(downstream))
        log = size + np.log(scaled * turn) + rise
        return log + np.log(period / np.pi)
