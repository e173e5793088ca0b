"""Arc length along an outline, and back: nodes stand at Gauss points of arc length.

The caller's parameter may crowd or stretch anywhere, so it is used only to find points. Between its
breaks an outline is cut into stretches on which 16 Gauss points integrate its speed to rounding;
they shrink dyadically toward a sharp edge, where a parameter may be singular.
"""

import numpy as np

GAUSS_POINTS, GAUSS_WEIGHTS = np.polynomial.legendre.leggauss(16)
EDGE_HALVINGS = 30
LENGTH_TOLERANCE = 1e-13  # of the whole, per stretch; rounding stops it near 1e-15
KINK = 1e-6               # radians: a wall that turns less at a break is smooth there
BESIDE = 1e-12            # of the parameter, from a break to its two sides


def _differentiation(x):
    """Matrix from values at the points x to the derivative of their interpolant there."""
    difference = x[:, None] - x[None, :] + np.eye(len(x))
    scale = difference.prod(axis=1)
    matrix = scale[:, None] / scale[None, :] / difference
    np.fill_diagonal(matrix, 0.0)
    np.fill_diagonal(matrix, -matrix.sum(axis=1))
    return matrix


def _integration(x):
    """Matrix from values at the points x to integrals of their interpolant from -1 to each."""
    count = len(x)
    vandermonde = np.polynomial.legendre.legvander(x, count - 1)
    integrals = np.stack(
        [
            np.polynomial.legendre.legval(x, np.polynomial.legendre.legint(row, lbnd=-1))
            for row in np.eye(count)
        ],
        axis=1,
    )
    return integrals @ np.linalg.inv(vandermonde)


DIFFERENTIATE = _differentiation(GAUSS_POINTS)
INTEGRATE = _integration(GAUSS_POINTS)


class Arcs:
    """The arc length of one outline, counted from its first break (or from its parameter 0).

    Attributes
    ----------
    length : float
        The perimeter.
    breaks : (k,) array
        Arc positions where panels must end; at least one (a smooth outline has its start).
    edge : float or None
        Arc position of the sharp edge.
    kinks : array
        Those of the breaks where the wall turns, be it by little: the edge among them.
    start : float
        Arc position of the outline's first point, from which arc fractions count.
    """

    def __init__(self, outline):
        self.outline = outline
        hard = {0.0 if outline.edge is None and not outline.joins else None}
        hard |= {outline.edge, *outline.joins}
        hard.discard(None)
        origin = outline.edge if outline.edge is not None else min(hard)
        self._corners = origin + np.sort((np.array([*hard]) - origin) % 1.0)
        self._ends = self._stretches(np.append(self._corners, origin + 1.0))
        self._measure()
        self.edge = None if outline.edge is None else 0.0
        before, after = (outline.derivative(self._corners + side) for side in (-BESIDE, BESIDE))
        with np.errstate(divide="ignore", invalid="ignore"):
            turn = np.abs(np.angle(after / before))
        self.kinks = self.breaks[(turn > KINK) | (self.breaks == self.edge)]
        self.start = float(self.at_parameter(np.array([outline.start]))[0]) % self.length

    @property
    def is_broken(self):
        """Whether panels have to shrink toward its breaks; else its one break is but a start."""
        return self.edge is not None or bool(self.outline.joins)

    def _stretches(self, corners):
        """Ends, in the unrolled parameter, of stretches that Gauss quadrature resolves."""
        cuts = [np.linspace(lo, hi, 5)[:-1] for lo, hi in zip(corners, corners[1:], strict=False)]
        cuts.append(corners[-1:])
        if self.outline.edge is not None:
            steps = 0.25 * (corners[1:] - corners[:-1])[[0, -1]]
            halves = 0.5 ** np.arange(1, EDGE_HALVINGS + 1)
            cuts += [corners[0] + steps[0] * halves, corners[-1] - steps[1] * halves]
        ends = np.unique(np.concatenate(cuts))
        left, right = ends[:-1], ends[1:]
        done = [ends]
        for _ in range(20):
            middle = 0.5 * (left + right)
            whole = self._speeds(left, right) @ GAUSS_WEIGHTS
            halves = self._speeds(left, middle) + self._speeds(middle, right)
            error = np.abs(whole - 0.5 * halves @ GAUSS_WEIGHTS) * 0.5 * (right - left)
            if done[0] is ends:
                total = float(np.sum(whole * 0.5 * (right - left)))
            poor = error > LENGTH_TOLERANCE * total
            if not poor.any():
                break
            done.append(middle[poor])
            left = np.concatenate([left[poor], middle[poor]])
            right = np.concatenate([middle[poor], right[poor]])
        return np.unique(np.concatenate(done))

    def _speeds(self, left, right):
        half = 0.5 * (right - left)
        points = 0.5 * (left + right)[:, None] + half[:, None] * GAUSS_POINTS
        return np.abs(self.outline.derivative(points % 1.0))

    def _measure(self):
        """Samples at the Gauss points of every stretch: place, direction, curvature, arc."""
        left, right = self._ends[:-1], self._ends[1:]
        half = 0.5 * (right - left)[:, None]
        parameter = 0.5 * (left + right)[:, None] + half * GAUSS_POINTS
        derivative = self.outline.derivative(parameter % 1.0)
        speed = np.abs(derivative)
        turning = (derivative @ DIFFERENTIATE.T) / derivative
        self.lengths = (speed * half) @ GAUSS_WEIGHTS
        self.ends = np.concatenate([[0.0], np.cumsum(self.lengths)])
        self.length = float(self.ends[-1])
        self.breaks = self.ends[np.searchsorted(self._ends, self._corners)]
        self.sample_arcs = (self.ends[:-1, None] + (speed * half) @ INTEGRATE.T).ravel()
        self._sample_parameters = parameter.ravel()
        self.sample_points = self.outline.position(parameter % 1.0).ravel()
        self.sample_tangents = (derivative / speed).ravel()
        self.sample_curvature = (turning.imag / (speed * half)).ravel()
        self.sample_stretch = np.repeat(self.lengths, len(GAUSS_POINTS))

    def refine(self, samples):
        """Halve the stretches that hold the marked samples."""
        poor = samples.reshape(-1, len(GAUSS_POINTS)).any(axis=1)
        middle = 0.5 * (self._ends[:-1] + self._ends[1:])[poor]
        self._ends = np.unique(np.concatenate([self._ends, middle]))
        self._measure()

    def at_parameter(self, parameter):
        """Arc positions of values of the outline's parameter, in [0, length)."""
        unrolled = self._ends[0] + (parameter - self._ends[0]) % 1.0
        k = np.clip(np.searchsorted(self._ends, unrolled, "right") - 1, 0, len(self.lengths) - 1)
        return self.ends[k] + self._partial(k, unrolled)

    def _partial(self, k, unrolled):
        """Arc length from the left end of stretch k to each unrolled parameter in it.

        An outline need not have a derivative AT an edge: no part of no length is evaluated.
        """
        left = self._ends[k]
        length = np.zeros(len(unrolled))
        some = unrolled > left
        speeds = self._speeds(left[some], unrolled[some])
        length[some] = (speeds @ GAUSS_WEIGHTS) * 0.5 * (unrolled - left)[some]
        return length

    def parameter(self, arc):
        """Values of the outline's parameter at arc positions in [0, length]: Newton's method."""
        arc = np.asarray(arc, float)
        k = np.clip(np.searchsorted(self.ends, arc, "right") - 1, 0, len(self.lengths) - 1)
        left, right = self._ends[k], self._ends[k + 1]
        wanted = arc - self.ends[k]
        unrolled = np.clip(np.interp(arc, self.sample_arcs, self._sample_parameters), left, right)
        for _ in range(30):
            miss = self._partial(k, unrolled) - wanted
            speed = np.abs(self.outline.derivative(unrolled % 1.0))
            with np.errstate(divide="ignore", invalid="ignore"):
                moved = np.clip(np.nan_to_num(unrolled - miss / speed), left, right)
            settled = np.abs(moved - unrolled) <= 4e-16 * np.maximum(1.0, np.abs(unrolled))
            unrolled = moved
            if (settled | (np.abs(miss) <= 1e-15 * self.lengths[k])).all():
                break
        return unrolled % 1.0
