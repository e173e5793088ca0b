"""The equation on the walls, made ready once for any number of right-hand sides.

The tangential velocity just inside every wall is zero. With walls counter-clockwise, W = g conj(T)
on the wall, g = gamma + i v and the known outward normal velocity v:

    (tangential influence) gamma - gamma = -Re(T W_onset) - (tangential influence of the sources) v,

the influence being the outer limit, gamma the jump. It leaves the circulation of each body free:
the mean of gamma over the body is taken off its rows, and the circulation wanted off the right-hand
side. Rows and columns are scaled by the square roots of the arc-length weights, which keeps the
condition number low at edges and in gaps (Bremer, J. Comput. Phys. 231 (2012) 1879-1899).
"""

from functools import cached_property

import numpy as np
from scipy.linalg import lu_factor, lu_solve

from offbody import fast_sum, flow
from offbody.krylov import Iteration

FACTORISED = 2000  # nodes up to which LU factors of the matrix take less time than an iteration
FACTORISED_FOR_MANY = 12_000  # the same where every direction is a right-hand side of its own
RESIDUAL = 1e-12   # of an iteration
BY_MATRIX = 8  # strengths from which on the influence matrix is the cheaper way to a field


class Equation:
    """The second-kind equation on the walls of a set of panels.

    many : whether many right-hand sides are to be expected, as with wakes, one for each direction;
    iterate : whether to iterate, or None to do what takes less time.
    """

    def __init__(self, panels, surroundings, many=False, iterate=None):
        self.panels, self.surroundings = panels, surroundings
        self._bodies = [panels.node_slice(body) for body in range(panels.bodies)]
        self._lengths = [panels.weights[part].sum() for part in self._bodies]
        if iterate is None:
            iterate = len(panels.nodes) > (FACTORISED_FOR_MANY if many else FACTORISED)
        if iterate:
            self._invert = Iteration(panels, surroundings, RESIDUAL)
        else:
            self._invert = self._factorised()

    def _factorised(self):
        """A function from right-hand sides (R, N) to gamma (R, N), by LU factors."""
        panels, surroundings, root = self.panels, self.surroundings, np.sqrt(self.panels.weights)
        matrix = flow.wall_influence(panels, surroundings)
        matrix[np.diag_indices_from(matrix)] -= 1.0
        for part, length in zip(self._bodies, self._lengths, strict=True):
            matrix[part] -= self._mean(matrix, part, length)
            matrix[part, part] -= panels.weights[part] / length
        matrix *= root[:, None] / root
        factors = lu_factor(matrix, overwrite_a=True, check_finite=False)
        return lambda right: lu_solve(factors, (right * root).T, check_finite=False).T / root

    def _mean(self, rows, part, length):
        """Mean over a body's wall, by arc length, of (N, ...) rows.

        There is no circulation inside a body: this mean of the equation is zero but for the error
        of the panels. Without that error the circulation is what the right-hand side says, exactly.
        """
        return self.panels.weights[part] @ rows[part] / length

    def vortices(self, tangential, circulation=None):
        """gamma (R, N) that takes off the tangential velocities (R, N) of onset and sources.

        circulation (R, bodies), or none.
        """
        right = -tangential.T
        for body, (part, length) in enumerate(zip(self._bodies, self._lengths, strict=True)):
            right[part] -= self._mean(right, part, length)
            if circulation is not None:
                right[part] -= circulation[:, body] / length
        return self._invert(right.T)

    def without_flux(self, blown):
        """Normal velocities (R, N) less their mean over each wall."""
        blown = blown.T.copy()
        for part, length in zip(self._bodies, self._lengths, strict=True):
            blown[part] -= self._mean(blown, part, length)
        return blown.T

    def response(self, blown):
        """g = gamma + i v (R, N) of normal velocities v (R, N) on the walls, no circulation."""
        along = self.wall_velocity(1j * blown).real
        return self.vortices(along) + 1j * blown

    def pushed(self, blown):
        """gamma (R, N) of normal velocities (R, N) on the walls, no circulation, time and again."""
        if isinstance(self._invert, Iteration):
            return self.response(blown).real
        return blown @ self._blowing

    @cached_property
    def _blowing(self):
        """(N, N) gamma of a unit normal velocity at each node, no circulation."""
        return self.response(np.eye(len(self.panels.nodes))).real

    def wall_velocity(self, strengths):
        """(R, N) tangential + i normal velocity just outside the nodes that strengths induce."""
        return self.panels.tangents * self.velocity(strengths, self.panels.nodes)

    def velocity(self, strengths, z):
        """(R, len(z)) complex velocity that strengths (R, N) induce at z."""
        few = len(strengths) < BY_MATRIX
        if few or fast_sum.worth_it(self.panels, len(z), len(strengths)):
            return flow.velocity(self.panels, self.surroundings, strengths, z)
        return flow.velocity_by_matrix(self.panels, self.surroundings, strengths, z)
