"""The equation on the walls solved by iteration, in memory that grows like the number of nodes.

The matrix of ``offbody.equation`` is never made. Its product with a density is a fast sum of the
nodes at the nodes, far panels alone, and a sparse matrix of the closed forms of near ones. Scaled
by the square roots of the weights it is minus half the identity and a compact rest, which GMRES
(Saad and Schultz, SIAM J. Sci. Stat. Comput. 7 (1986) 856-869) solves in about ten steps, whatever
the number of nodes. What would cost more is strong neighbours: the two sides of a gap or of a sharp
edge, or a wall and its image. Panels that hold each other strongly are found from the sparse matrix
and solved together, exactly, in dense groups. The panels near a group are solved with it, and their
part of the answer dropped (restricted additive Schwarz: Cai and Sarkis, SIAM J. Sci. Comput. 21
(1999) 792-797).
"""

import itertools

import numpy as np
from scipy.linalg import lu_factor, lu_solve
from scipy.sparse import bsr_array, coo_array, csr_array
from scipy.sparse.csgraph import connected_components
from scipy.sparse.linalg import LinearOperator, gmres
from scipy.spatial import cKDTree

from offbody import _kernels, _multipole
from offbody.fast_sum import Plan
from offbody.parallel import over_chunks
from offbody.surroundings import reflected

STRONG = 0.2        # tangential velocity at a node that a panel of unit strength elsewhere induces
STRONGEST = 0.4     # of one half, which a wall without end induces beside it
GROUP = 768         # nodes in a group at most
STEPS = 200         # after which an iteration is given up
PLAN = 0.1          # tolerance of the fast sum over that of the iteration
CLOSED_FORM = 100   # cost of a closed form, per term, over that of a pair of nodes
OVER_TWO_PI_I = 1.0 / (2j * np.pi)


class ConvergenceError(RuntimeError):
    """An iteration that did not reach its tolerance.

    Attributes
    ----------
    residuals : list of float
        After each step, relative to the right-hand side.
    """

    def __init__(self, residuals, tolerance):
        self.residuals = residuals
        stood = f"{residuals[-1]:.1e} after {len(residuals)} steps" if residuals else "NaN"
        super().__init__(
            f"the iteration stood at a residual of {stood} and should have reached "
            f"{tolerance:.1e}; solve by factorisation, or give the bodies more panels"
        )


def solve(panels, surroundings, right, tolerance=1e-10):
    """gamma (R, N) for right-hand sides (R, N) of the equation on the walls; see `Iteration`."""
    return Iteration(panels, surroundings, tolerance)(right)


class Iteration:
    """The equation on the walls, ready to be solved for any right-hand sides.

    Parameters
    ----------
    panels : Panels
    surroundings : OpenStream, Ground, Duct or Row
    tolerance : float
        Norm of the residual over that of the right-hand side, both scaled by the square roots of
        the weights.

    Attributes
    ----------
    residuals : list of float
        Of the last right-hand side, after each step.

    Raises
    ------
    ConvergenceError
        From a call, if a residual does not get there.
    """

    def __init__(self, panels, surroundings, tolerance=1e-10):
        self._panels, self._tolerance = panels, tolerance
        self._starts = panels.starts * panels.order
        self._lengths = np.add.reduceat(panels.weights, self._starts[:-1])
        self._root = np.sqrt(panels.weights)
        self._places = _Places(panels, surroundings)
        self._plan = Plan(panels, self._places.z.ravel(), max(PLAN * tolerance, 1e-14))
        near = _Near(self._places)
        self._near = near.matrix()
        self._groups = [self._factorised(*group) for group in near.strong_groups()]
        self.residuals = []

    def _factorised(self, group, around):
        """Nodes of a group of panels and of those around, how many are its own, and factors."""
        panels, group_size = self._panels, len(group) * self._panels.order
        group = np.concatenate([group, around])
        nodes, matrix = _nodes_of(panels, group), self._places.influence(group)
        matrix[np.diag_indices_from(matrix)] -= 1.0
        body = (np.searchsorted(panels.starts, group, "right") - 1).repeat(panels.order)
        share = panels.weights[nodes] / self._lengths[body]
        matrix -= np.where(body[:, None] == body, share, 0.0)
        matrix *= self._root[nodes, None] / self._root[nodes]
        return nodes, group_size, lu_factor(matrix, overwrite_a=True, check_finite=False)

    def __call__(self, right):
        """gamma (R, N) for right-hand sides (R, N)."""
        gamma = np.empty(np.shape(right))
        for row, given in zip(gamma, right, strict=True):
            row[:] = self._unknown(given * self._root) / self._root
        return gamma

    def _unknown(self, right):
        """The scaled unknown: right preconditioning, so that the residual is the true one."""
        self.residuals = []
        size, count = np.linalg.norm(right), len(right)
        if size == 0.0:
            return np.zeros(count)
        moved, _ = gmres(
            LinearOperator(
                (count, count), lambda x: self._times(self._precondition(x)), dtype=float
            ),
            right / size, rtol=self._tolerance, atol=0.0, restart=STEPS, maxiter=1,
            callback=lambda residual: self.residuals.append(float(residual)),
            callback_type="pr_norm",
        )
        if not self.residuals or not self.residuals[-1] <= self._tolerance:
            raise ConvergenceError(self.residuals, self._tolerance)
        return size * self._precondition(moved)

    def _times(self, scaled):
        """The scaled matrix times a scaled density (N,)."""
        weights, gamma = self._panels.weights, scaled / self._root
        rows = self._near @ gamma + self._far(gamma) - gamma
        mean = np.add.reduceat(weights * (rows + gamma), self._starts[:-1]) / self._lengths
        return (rows - mean.repeat(np.diff(self._starts))) * self._root

    def _far(self, gamma):
        """(N,) tangential velocity at the nodes that panels induce, images included, where far."""
        panels, places = self._panels, self._places
        charges = OVER_TWO_PI_I * panels.weights * gamma
        constant = -OVER_TWO_PI_I * (gamma * panels.tangents.conj()).reshape(1, -1, panels.order)
        field = self._plan.apply(constant, charges[None], near=False)
        rows = (places.turn * field.reshape(places.turn.shape)).real.sum(axis=0)
        if places.left is not None:
            rows += (places.left @ (places.right @ gamma)).real
        return rows

    def _precondition(self, scaled):
        """An approximate inverse of the scaled matrix times (N,): groups, and -2 elsewhere."""
        result = -2.0 * scaled
        for nodes, count, factors in self._groups:
            part = lu_solve(factors, scaled[nodes], check_finite=False)
            result[nodes[:count]] = part[:count]
        return result


class _Places:
    """Where velocities, turned and summed, make the tangential one at the nodes, images included.

    z, turn : (K, N) complex, for what the panels alone induce; left, right : (N, T) and (T, N)
    complex, or None, whose product is what copies beyond the nearest add.
    """

    def __init__(self, panels, surroundings):
        self.panels = panels
        sides = [(panels.nodes, panels.tangents)]
        if surroundings.mirror is not None:
            sides.append((reflected(surroundings, panels.nodes), panels.tangents.conj()))
        self.left = self.right = None
        copies = panels.copies
        if copies is not None:
            sides = [(copies.home(z), turn) for z, turn in sides]
            self.left = np.hstack([turn[:, None] * copies.polynomial(z) for z, turn in sides])
            self.right = np.vstack([copies.moments * (OVER_TWO_PI_I * panels.weights)] * len(sides))
            steps = sorted(range(-copies.nearest, copies.nearest + 1), key=abs)
            sides = [(z - 1j * n * copies.period, turn) for n in steps for z, turn in sides]
        self.z, self.turn = (np.array(column) for column in zip(*sides, strict=True))

    def influence(self, chosen):
        """(n, n) tangential velocity of unit vortex strengths among the nodes of chosen panels."""
        panels, nodes = self.panels, _nodes_of(self.panels, chosen)
        a, b, normal_a, normal_b, places, tangents, weights, bulge, slack, *rest = panels.geometry
        geometry = (
            a[chosen], b[chosen], normal_a[chosen], normal_b[chosen], places[nodes],
            tangents[nodes], weights[nodes], bulge[chosen], slack[chosen], *rest,
        )
        total, real, imag = np.zeros((3, len(nodes), len(nodes)))
        for z, turn in zip(self.z, self.turn, strict=True):
            _kernels.influence(
                geometry, panels.modes[chosen], tangents[nodes].reshape(len(chosen), -1),
                z[nodes], turn[nodes], real, imag,
            )
            total += real
        return total


def _nodes_of(panels, chosen):
    """Indices of the nodes of chosen panels."""
    return (np.asarray(chosen)[:, None] * panels.order + np.arange(panels.order)).ravel()


class _Near:
    """The pairs of a node, or an image of it, and a panel that is near it, in closed form.

    row, panel : (pairs,); real : (pairs, order), tangential velocity at node ``row`` of unit vortex
    strengths at the nodes of the panel; image : (pairs,) whether it is the panel's image that acts.
    """

    def __init__(self, places):
        panels = self._panels = places.panels
        z, count, order = places.z.ravel(), len(panels.nodes), panels.order
        x, y = np.ascontiguousarray(z.real), np.ascontiguousarray(z.imag)
        middle = panels.ends.mean(axis=1)
        half = 0.5 * np.abs(panels.ends[:, 1] - panels.ends[:, 0])
        around = cKDTree(np.stack([x, y], axis=1)).query_ball_point(
            np.stack([middle.real, middle.imag], axis=1), panels.geometry[9] * half * (1.0 + 1e-9)
        )
        panel = np.arange(len(around)).repeat([len(targets) for targets in around])
        target = np.fromiter(itertools.chain.from_iterable(around), np.intp, len(panel))
        near, real = np.empty(len(panel), np.uint8), np.empty((len(panel), order))
        walls, by_panel = _multipole.Walls(panels.geometry), panels.tangents.reshape(-1, order)

        def work(part):
            walls.near_influence(
                panels.modes, by_panel, x, y, places.turn.ravel(), panel[part], target[part],
                near[part], real[part],
            )

        over_chunks(work, len(panel), CLOSED_FORM * order)
        near = near.astype(bool)
        self.row, self.image = target[near] % count, target[near] >= count
        self.panel, self.real = panel[near], real[near]

    def matrix(self):
        """(N, N) sparse, of one row and a panel's columns for each pair."""
        count = len(self._panels.nodes)
        order = np.argsort(self.row, kind="stable")
        starts = np.searchsorted(self.row[order], np.arange(count + 1))
        return bsr_array(
            (self.real[order][:, None, :], self.panel[order], starts), shape=(count, count)
        )

    def strong_groups(self):
        """Panels that hold each other strongly, of at most GROUP nodes, and others near them."""
        panels, count = self._panels, len(self._panels.ends)
        held, hold = self.row // panels.order, np.abs(self.real.sum(axis=1))
        apart = (held != self.panel) | self.image
        links = np.stack([held[apart], self.panel[apart]])
        middle, most = panels.ends.mean(axis=1), max(GROUP // panels.order, 2)
        beside = csr_array((np.ones(len(held)), (held, self.panel)), shape=(count, count))
        for group in _linked(links, hold[apart], STRONG, middle, most):
            yield group, np.setdiff1d(beside[group].indices, group)


def _linked(links, hold, least, middle, most):
    """Groups of panels joined by links (2, L) that hold so much; of a long one, stronger links."""
    links, hold = links[:, hold >= least], hold[hold >= least]
    if not len(hold):
        return []
    members, ends = np.unique(links, return_inverse=True)
    ends = ends.reshape(links.shape)
    count, label = connected_components(
        coo_array((np.ones(len(hold)), ends), shape=(len(members), len(members))), directed=False
    )
    groups, order = [], np.argsort(label, kind="stable")
    for k, group in enumerate(np.split(order, np.searchsorted(label[order], np.arange(1, count)))):
        if len(group) <= most:
            groups.append(members[group])
        elif least < STRONGEST:
            inside = label[ends[0]] == k
            groups += _linked(links[:, inside], hold[inside], 1.5 * least, middle, most)
        else:
            groups += _halved(members[group], middle, most)
    return groups


def _halved(group, middle, most):
    """A group cut across its longer side until no part has more than ``most`` members."""
    if len(group) <= most:
        return [group]
    z = middle[group]
    along = z.real if np.ptp(z.real) > np.ptp(z.imag) else z.imag
    group, cut = group[np.argsort(along, kind="stable")], len(group) // 2
    return _halved(group[:cut], middle, most) + _halved(group[cut:], middle, most)
