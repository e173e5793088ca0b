"""Fast sums over panels: boxes within boxes, and an expansion for each (a fast multipole method).

Boxes are the squares of one lattice, halved level by level (a linear quadtree). SOURCES, the nodes
of panels as poles, are sorted into boxes that are halved while they hold many. A panel stays in a
box at least as large as its reach, so a target that is near a panel is never beyond the next box:
what goes through expansions or nodes is far, and what is near is the closed form, exactly as in the
plain sum. TARGETS are sorted into boxes of the same lattice, halved while that saves work. Each
takes

    across     the sources in boxes of its own size that its parent touched and it does not,
               expansion to expansion;
    entering   the poles of larger boxes that it is clear of, into its expansion;
    outer      the expansions of smaller boxes that it is clear of, at each target;
    direct     the rest, pole by pole or in closed form;

and hands its expansion on to its children (Carrier, Greengard and Rokhlin, SIAM J. Sci. Stat.
Comput. 9 (1988) 669-686). Targets farther off than the box of all sources is wide read one
expansion. Boxes with nothing near are halved for another reason: the smaller a box, the fewer terms
its targets need.

All this depends on places only: a plan is made once and serves any number of densities. On a grid
the targets of a box are ranges of columns and rows, and are never listed.
"""

from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.polynomial import legendre
from scipy.special import comb

from offbody import _multipole
from offbody.checks import as_number
from offbody.panels import gauss
from offbody.parallel import CHUNK, over_chunks

DEPTH = 28              # halvings at most: a place in twice 30 bits
LEVEL_BITS = 5
OUTSIDE = 1 << 62       # in place of the code of a target beyond all boxes
WIDTH = 8               # targets that are worked on together, as in multipole.h

# What costs least, as measured; none of these matters to more than a tenth of the whole.
POLES_IN_BOX = 48       # a box of more is halved
WORTH_HALVING = 16384   # targets times poles that would be left to be done one by one
FEW_TARGETS = 16        # so few read expansions outside rather than have one of their own
MANY_TARGETS = 256      # so many are parted for the sake of shorter expansions
CALM = 3                # times at most
BAND = 4096             # targets outside all boxes that are done together
DENSITIES = 8           # summed in one go
PARTS = 64              # of a sum, for the threads to share

# Costs in pairs of a node and a target in the plain sum of high orders, 0.5 ns on one core of an
# EPYC with AVX-512; bench/test_fast.py times both sums about where they meet.
PLANNING = 3e6
PER_POLE = 500
PER_TARGET = 350
PER_GRID_POINT = 40
CONSTANT_PANEL = 4      # a panel of order 1 in the plain sum

# The convergence of an expansion inside its box, per term: a pole is at least one side off a box,
# and after 1, 2, 3 halvings with nothing near 2, 4, 8 sides off.
DECAY = np.log([1.5 / 0.5**0.5, 2.5 / 0.5**0.5, 4.5 / 0.5**0.5, 8.5 / 0.5**0.5])


# --- places ---------------------------------------------------------------------------------------


def _interleaved(x, y):
    """Integers whose bits are those of x and of y, 30 each, in turn: boxes next to each other in
    one box are next to each other in this order (Morton)."""
    return _spread(x) | _spread(y) << 1


def _spread(x):
    x = x.astype(np.int64)
    for shift, mask in (
        (16, 0x0000FFFF0000FFFF), (8, 0x00FF00FF00FF00FF), (4, 0x0F0F0F0F0F0F0F0F),
        (2, 0x3333333333333333), (1, 0x5555555555555555),
    ):
        x = (x | x << shift) & mask
    return x


def _children(x, y):
    """The four boxes within each box, one after the other."""
    return (2 * x[:, None] + [0, 1, 0, 1]).ravel(), (2 * y[:, None] + [0, 0, 1, 1]).ravel()


def _place_in_parent(x, y):
    return x % 2 + 2 * (y % 2)


def _members(first, count):
    """Owner and member of groups that hold ``count`` members from ``first`` on."""
    owner = np.repeat(np.arange(len(count)), count)
    before = np.cumsum(count) - count
    return owner, np.arange(len(owner)) - before[owner] + first[owner]


def _size(ranges):
    return (ranges[:, 1] - ranges[:, 0]) * (ranges[:, 3] - ranges[:, 2])


class _Lattice:
    """Squares of side ``side``/2^level; the one of level 0 at ``corner`` holds all sources.

    Sides and corners have few bits, so that the centres of all boxes are exact.
    """

    def __init__(self, z, reach):
        low = np.array([z.real.min(), z.imag.min()])
        high = np.array([z.real.max(), z.imag.max()])
        width = max(*(high - low), reach.max()) or 1.0
        step = 2.0 ** (np.floor(np.log2(width)) - 5)
        self.side = (np.ceil(width / step) + 2.0) * step
        self.corner = np.floor((0.5 * (low + high) - 0.5 * self.side) / step) * step

    def index(self, z):
        """Columns and rows of least boxes, whole numbers that may be beyond any integer."""
        scale = 2.0**DEPTH / self.side
        with np.errstate(over="ignore"):
            x, y = (z.real - self.corner[0]) * scale, (z.imag - self.corner[1]) * scale
        return np.floor(x), np.floor(y)

    def sides(self, level):
        return self.side * 0.5 ** np.asarray(level, float)

    def centres(self, level, x, y):
        side = self.sides(level)
        return self.corner[0] + (x + 0.5) * side, self.corner[1] + (y + 0.5) * side


class _Sources:
    """The boxes of poles z, which stand for panels ``panel`` that reach ``reach`` from each."""

    def __init__(self, z, reach, panel):
        self.lattice = _Lattice(z, reach)
        with np.errstate(divide="ignore"):
            deepest = np.clip(np.floor(np.log2(self.lattice.side / reach)), 0, DEPTH).astype(int)
        # A code cut off at the deepest level allowed, and then that level: poles that are to stay
        # in a box stand before those of its children, and outside the children's ranges.
        cut = 2 * (DEPTH - deepest)
        key = _interleaved(*self.lattice.index(z)) >> cut << cut << LEVEL_BITS | deepest
        order = np.argsort(key, kind="stable")
        self._divide(key[order])
        self.count = self.range[:, 1] - self.range[:, 0]
        self.own_count = self.own[:, 1] - self.own[:, 0]
        box, pole = _members(self.own[:, 0], self.own_count)
        first = np.empty(len(z), int)
        first[pole] = self.own[box, 0]
        self.order = order[np.lexsort((order, first))]      # poles of one panel together
        self.own_reach = np.zeros(len(self.level))
        np.maximum.at(self.own_reach, box, reach[self.order[pole]])
        self.sides = self.lattice.sides(self.level)
        self.centres = self.lattice.centres(self.level, self.x, self.y)
        leads = np.zeros(len(z), np.uint8)
        leads[np.unique(panel, return_index=True)[1]] = 1
        places = z[self.order]
        self.arrays = (
            np.ascontiguousarray(places.real), np.ascontiguousarray(places.imag),
            panel[self.order], leads[self.order], *self.centres, self.sides, self.own,
            self.children, _place_in_parent(self.x, self.y),
        )

    def _divide(self, key):
        """Boxes level by level: x, y, and the ranges of all and of own poles, and of children."""
        x = y = np.zeros(1, np.intp)
        made, columns = 1, []
        for level in range(DEPTH + 1):
            first, middle, last = self._ranges(key, level, x, y)
            halved = (last - middle > POLES_IN_BOX) & (level < DEPTH)
            middle = np.where(halved, middle, last)
            count = np.zeros((len(x), 4), bool)
            below = _children(x[halved], y[halved])
            if len(below[0]):
                low, _, high = self._ranges(key, level + 1, *below)
                count[halved] = (high > low).reshape(-1, 4)
            child = made + np.cumsum(count.sum(axis=1))
            columns.append((
                np.full(len(x), level), x, y, first, middle, last, child - count.sum(axis=1), child
            ))
            x, y = (a[count[halved].ravel()] for a in below)
            made += len(x)
            if not len(x):
                break
        self.level, self.x, self.y, first, middle, last, child, next_ = (
            np.concatenate(column).astype(np.intp) for column in zip(*columns, strict=True)
        )
        self.range, self.own = np.stack([first, last], 1), np.stack([first, middle], 1)
        self.children = np.stack([child, next_], axis=1)

    @staticmethod
    def _ranges(key, level, x, y):
        """First pole of boxes, first that may go deeper, and end."""
        size = 2 * (DEPTH - level)
        code = _interleaved(x, y) << size
        return (
            np.searchsorted(key, code << LEVEL_BITS | level),
            np.searchsorted(key, code << LEVEL_BITS | level + 1),
            np.searchsorted(key, code + (1 << size) << LEVEL_BITS),
        )


class _Scattered:
    """Targets anywhere, sorted by box; the ranges of a box are (first, last, 0, 1)."""

    def __init__(self, z, lattice):
        x, y = lattice.index(z)
        low, high = -(2.0**DEPTH), 2.0 ** (DEPTH + 1)
        within = (x >= low) & (x < high) & (y >= low) & (y < high)
        code = np.full(len(z), OUTSIDE)
        code[within] = _interleaved(x[within] - low, y[within] - low)
        self.where = np.argsort(code, kind="stable")
        self._code = code[self.where]
        z = z[self.where]
        self.columns, self.rows = np.ascontiguousarray(z.real), np.ascontiguousarray(z.imag)

    def ranges(self, level, x, y):
        size = 2 * (DEPTH - level)
        code = _interleaved(x + (1 << level), y + (1 << level)) << size
        first, last = (np.searchsorted(self._code, c) for c in (code, code + (1 << size)))
        return np.stack([first, last, np.zeros_like(first), np.ones_like(first)], axis=1)

    def outside(self):
        first = np.arange(np.searchsorted(self._code, OUTSIDE), len(self._code), BAND)
        last = np.append(first[1:], len(self._code))[: len(first)]
        return np.stack([first, last, np.zeros_like(first), np.ones_like(first)], axis=1)


class _Grid:
    """Targets at all columns x and rows y, both rising; ranges are of those."""

    where = np.empty(0, np.intp)

    def __init__(self, x, y, lattice):
        self.columns, self.rows, self._lattice = x, y, lattice

    def ranges(self, level, x, y):
        side, corner = self._lattice.sides(level), self._lattice.corner
        return np.stack([
            np.searchsorted(axis, low + place * side)
            for axis, low, first in ((self.columns, corner[0], x), (self.rows, corner[1], y))
            for place in (first, first + 1)
        ], axis=1)

    def outside(self):
        (left, _, below, _), (_, right, _, above) = self.ranges(
            0, np.array([-1, 1]), np.array([-1, 1])
        )
        width, height = len(self.columns), len(self.rows)
        bands = []
        for first, last, low, high in (
            (0, left, below, above), (right, width, below, above), (0, width, 0, below),
            (0, width, above, height),
        ):
            step = max(1, BAND // max(last - first, 1))
            bands += [(first, last, k, min(k + step, high)) for k in range(low, high, step)]
        bands = np.array(bands, np.intp).reshape(-1, 4)
        return bands[_size(bands) > 0]


# --- lists ----------------------------------------------------------------------------------------


class _Lists:
    """What each target box takes from source boxes, collected in any order."""

    WIDTHS = {"across": 2, "entering": 1, "outer": 1, "direct": 2}   # entries beside the target box

    def __init__(self):
        self._parts = {name: [] for name in self.WIDTHS}

    def add(self, name, *columns):
        self._parts[name].append(columns)

    def take(self, name):
        """All columns of a list, which is left empty."""
        parts, self._parts[name] = self._parts[name], []
        if not parts:
            return [np.zeros(0, np.intp)] * (1 + self.WIDTHS[name])
        return [np.concatenate(column).astype(np.intp) for column in zip(*parts, strict=True)]

    def by_box(self, rank):
        """For the kernel: (starts, entries...) of each list, boxes in the order of their rank."""
        result = []
        for name in self.WIDTHS:
            owner, *entries = self.take(name)
            order = np.argsort(rank[owner], kind="stable")
            starts = np.searchsorted(rank[owner][order], np.arange(len(rank) + 1))
            result.append((starts, *(entry[order] for entry in entries)))
        return tuple(result)


class _Layout:
    """The boxes of targets, and what each takes from which box of sources.

    ``arrays`` and ``lists`` are for the kernel; ``first`` are boxes to be done before the others,
    and ``parts`` are ranges of those others, which may be done in any order.
    """

    def __init__(self, sources, targets, terms):
        self._sources, self._targets, self._lists = sources, targets, _Lists()
        self._few_poles = terms // 2
        self._divide()
        self._spare_expansions()
        self._arrange(terms)

    def _divide(self):
        """Boxes level by level, and their lists."""
        x, y = (a.ravel() for a in np.meshgrid([-1, 0, 1], [-1, 0, 1]))
        ranges = self._targets.ranges(0, x, y)
        held = _size(ranges) > 0
        x, y, ranges = x[held], y[held], ranges[held]
        parent, calm = np.full(len(x), -1), np.zeros(len(x), int)
        touching = np.arange(len(x)), np.zeros(len(x), int)    # target box, source box of its size
        beside = np.zeros(0, int), np.zeros(0, int)            # target box, larger source box
        made, columns = 0, []
        for level in range(DEPTH + 1):
            near, halved = self._worth_halving(level, _size(ranges), calm, touching, beside)
            columns.append((np.full(len(x), level), x, y, parent, calm, ~halved, ranges))
            self._close(level, x, y, made, ~halved, touching, beside)
            below = _children(x[halved], y[halved])
            if not len(below[0]):
                break
            ranges = self._targets.ranges(level + 1, *below)
            held = _size(ranges) > 0
            owner = np.flatnonzero(halved).repeat(4)[held]
            span = np.searchsorted(owner, np.arange(len(x) + 1))
            parent, calm = made + owner, np.where(near[owner], 0, calm[owner] + 1)
            made += len(x)
            x, y, ranges = below[0][held], below[1][held], ranges[held]
            touching, beside = self._hand_down(level + 1, x, y, made, span, touching, beside)
        self._level, self._x, self._y, self._parent, self._calm, self._closed, self._ranges = (
            np.concatenate(column) for column in zip(*columns, strict=True)
        )

    def _worth_halving(self, level, count, calm, touching, beside):
        """Whether boxes have sources near, and whether halving them saves work."""
        s = self._sources
        # A larger box's own poles are not passed by going down more than two levels.
        worth = s.own_count[beside[1]] * (level - s.level[beside[1]] < 2)
        load = np.bincount(touching[0], s.count[touching[1]], len(count))
        load = load + np.bincount(beside[0], worth, len(count))
        near = np.bincount(np.concatenate([touching[0], beside[0]]), minlength=len(count)) > 0
        halved = (count > WIDTH) & ((count + WIDTH) * load > WORTH_HALVING)
        halved |= ~near & (count > MANY_TARGETS) & (calm < CALM)
        return near, halved & (level < DEPTH)

    def _hand_down(self, level, x, y, made, span, touching, beside):
        """What children touch and stand beside, after what they are clear of has been noted.

        span : children span[k] to span[k + 1] are those of box k of the level above.
        """
        s = self._sources
        number = np.diff(span)
        pair, child = _members(span[touching[0]], number[touching[0]])
        box = touching[1][pair]
        old, again = _members(span[beside[0]], number[beside[0]])
        own = s.own_count[box] > 0
        t, b = np.concatenate([again, child[own]]), np.concatenate([beside[1][old], box[own]])
        clear = self._clear(level, x[t], y[t], b)
        self._lists.add("entering", made + t[clear], b[clear])
        beside = t[~clear], b[~clear]
        pair, box = _members(s.children[box, 0], s.children[box, 1] - s.children[box, 0])
        child = child[pair]
        dx, dy = x[child] - s.x[box], y[child] - s.y[box]
        apart = np.maximum(np.abs(dx), np.abs(dy)) > 1
        way = 7 * (dx + 3) + dy + 3
        self._lists.add("across", made + child[apart], box[apart], way[apart])
        return (child[~apart], box[~apart]), beside

    def _clear(self, level, x, y, box):
        """Whether boxes are off larger source boxes by their own side, and no target is near."""
        s = self._sources
        side, centre = s.lattice.sides(level), s.lattice.centres(level, x, y)
        away = np.maximum(*(np.abs(c - of[box]) for c, of in zip(centre, s.centres, strict=True)))
        gap = away - 0.5 * (side + s.sides[box])
        return gap >= np.maximum(side, s.own_reach[box]) * (1.0 - 1e-12)

    def _close(self, level, x, y, made, closed, touching, beside):
        """Note what boxes that are not halved take from the sources that they touch."""
        s = self._sources
        t, b = (a[closed[beside[0]]] for a in beside)
        self._lists.add("direct", made + t, *s.own[b].T)
        t, b = (a[closed[touching[0]]] for a in touching)
        while len(t):
            own = s.own_count[b] > 0
            self._lists.add("direct", made + t[own], *s.own[b[own]].T)
            pair, b = _members(s.children[b, 0], s.children[b, 1] - s.children[b, 0])
            t = t[pair]
            finer = s.level[b] - level
            touches = np.ones(len(t), bool)
            for here, there in ((x, s.x), (y, s.y)):
                touches &= there[b] >= (here[t] << finer) - 1
                touches &= there[b] <= (here[t] + 1) << finer
            few = s.count[b] < self._few_poles
            near, far = ~touches & few, ~touches & ~few
            self._lists.add("direct", made + t[near], *s.range[b[near]].T)
            self._lists.add("outer", made + t[far], b[far])
            t, b = t[touches], b[touches]

    def _spare_expansions(self):
        """Let closed boxes of few targets read what would enter an expansion of their own."""
        few = self._closed & (_size(self._ranges) <= FEW_TARGETS)
        t, b, way = self._lists.take("across")
        self._lists.add("outer", t[few[t]], b[few[t]])
        self._lists.add("across", *(a[~few[t]] for a in (t, b, way)))
        t, b = self._lists.take("entering")
        self._lists.add("direct", t[few[t]], *self._sources.own[b[few[t]]].T)
        self._lists.add("entering", *(a[~few[t]] for a in (t, b)))
        # Targets outside all boxes come after the boxes, and read the expansion of all sources.
        self._outside = self._targets.outside()
        beyond = len(self._level) + np.arange(len(self._outside))
        self._lists.add("outer", beyond, np.zeros_like(beyond))

    def _needed(self, terms):
        """Terms of its expansion that each box needs: for children all, for targets fewer."""
        has = np.zeros(len(self._level), bool)
        for name in ("across", "entering"):
            columns = self._lists.take(name)
            has[columns[0]] = True
            self._lists.add(name, *columns)
        for level in range(1, self._level.max(initial=0) + 1):
            at = np.flatnonzero(self._level == level)
            has[at] |= has[self._parent[at]]
        shorter = np.ceil(terms * DECAY[0] / DECAY).astype(int) + 1
        shorter[0] = terms
        return np.where(has, np.where(self._closed, shorter[self._calm], terms), 0)

    def _arrange(self, terms):
        """Boxes depth first: each is followed by all that lie in it."""
        s, outside, boxes = self._sources, self._outside, len(self._level)
        needed = self._needed(terms)
        size = 2 * (DEPTH - self._level)
        code = _interleaved(self._x + (1 << self._level), self._y + (1 << self._level)) << size
        order = np.lexsort((self._level, code))
        total = boxes + len(outside)
        rank = np.arange(total)
        rank[order] = np.arange(boxes)
        ends = np.arange(total) + 1
        ends[:boxes] = np.searchsorted(code[order], (code + (1 << size))[order])

        def column(of_boxes, beyond=0):
            rest = np.full(len(outside), beyond, of_boxes.dtype)
            return np.concatenate([of_boxes[order], rest])

        parent = np.where(self._parent >= 0, rank[self._parent], -1) if boxes else self._parent
        ranges = np.where(self._closed[:, None], self._ranges, 0)
        self.arrays = (
            self._targets.columns, self._targets.rows, self._targets.where,
            np.ascontiguousarray(np.concatenate([ranges[order], outside]), np.intp),
            *(column(c) for c in s.lattice.centres(self._level, self._x, self._y)),
            column(s.lattice.sides(self._level)), column(parent, -1),
            column(_place_in_parent(self._x, self._y)), column(needed),
        )
        self.lists = self._lists.by_box(rank)
        self.first, self.parts = self._shares(ends, terms)

    def _shares(self, ends, terms):
        """Boxes whose insides are too much for one share, and ranges of the others."""
        across, entering, outer, direct = (np.diff(each[0]) for each in self.lists)
        _, first, last = self.lists[3]
        poles = np.concatenate([[0], np.cumsum(last - first)])[self.lists[3][0]]
        each = terms * (2 + outer) + np.diff(poles)
        work = terms**2 * (1 + across) + 10 * terms * entering + _size(self.arrays[3]) * each
        before = np.concatenate([[0], np.cumsum(work)])
        limit = before[-1] // PARTS + 1
        inner = ends > np.arange(len(ends)) + 1
        large = (before[ends] - before[:-1] > limit) & inner
        parts, box = [], 0
        while box < len(ends):
            start = box
            while box < len(ends) and not large[box] and (
                box == start or before[ends[box]] - before[start] <= limit
            ):
                box = ends[box]
            if box > start:
                parts.append((start, box))
            else:
                box += 1
        return np.flatnonzero(large).tolist(), parts


# --- translations ---------------------------------------------------------------------------------


@cache
def _tables(terms):
    """Terms, then matrix, diagonal before and diagonal after of the translations of multipole.h."""

    def diagonals(z):
        return np.ascontiguousarray(np.concatenate([z.real, z.imag], axis=1))

    k = np.arange(terms)
    corner = 0.25 * np.array([-1 - 1j, 1 - 1j, -1 + 1j, 1 + 1j])[:, None]
    step = np.arange(-3, 4)
    way = (step[:, None] + 1j * step).reshape(-1, 1)
    way[np.abs(way) < 2] = 2.0          # such boxes touch: never used
    return (
        terms,
        comb(k[:, None] + k, k), diagonals(way ** -(k + 1)), diagonals((-way) ** -k),
        comb(k, k[:, None]), diagonals((2 * corner) ** -k), diagonals(corner**k),
        comb(k[:, None], k), diagonals(corner**k), diagonals((2 * corner) ** -k / 2),
    )


def _terms(tolerance):
    """Terms of an expansion for a relative error, a multiple of WIDTH.

    The slowest pair of boxes, corner to corner, loses a factor of 1.8 per term; the sum of all, of
    which few are so near, has lost more than twice as many digits in every test.
    """
    return WIDTH * int(np.ceil(np.log(1.0 / tolerance) / DECAY[0] / WIDTH))


# --- plans ----------------------------------------------------------------------------------------


def worth_it(panels, targets, densities=1, grid=False):
    """Whether the fast sum of panels, planned for this one use, takes less time than the plain one.

    Parameters
    ----------
    panels : Panels or Points
    targets, densities : int
    grid : bool
        Whether the targets are those of a tensor grid.
    """
    nodes, poles, plain = len(panels.nodes), len(panels.nodes), densities
    if getattr(panels, "order", None) == 1:
        poles = nodes * _gauss_count(1e-9, panels.geometry[9])
        plain = densities + CONSTANT_PANEL - 1
    fast = PLANNING + PER_POLE * poles + (PER_GRID_POINT if grid else PER_TARGET) * targets
    return nodes * targets * plain > fast


def _gauss_count(tolerance, reach):
    """Gauss points that do for a straight panel: the error beyond its reach of t half-chords is
    (t + sqrt(t^2 - 1))^-2n."""
    return int(np.ceil(np.log(1.0 / tolerance) / (2.0 * np.arccosh(reach)))) + 1


@dataclass(frozen=True)
class Points:
    """Mere point strengths, which a plan takes in place of panels."""

    nodes: np.ndarray


class Plan:
    """Sums of panels at scattered targets, laid out once for any number of densities.

    Parameters
    ----------
    panels : Panels or Points
    z : (M,) complex array
        The targets, anywhere; one that is not finite gets NaN.
    tolerance : float
        Error of a sum over its largest value at any target, 1e-14 to 0.1.

    Raises
    ------
    InputError
        If the tolerance is not such a number.

    References
    ----------
    L. Greengard and V. Rokhlin, J. Comput. Phys. 73 (1987) 325-348; J. Carrier, L. Greengard and
    V. Rokhlin, SIAM J. Sci. Stat. Comput. 9 (1988) 669-686.
    """

    def __init__(self, panels, z, tolerance=1e-9):
        z = np.asarray(z, complex)
        self._finite = np.flatnonzero(np.isfinite(z))
        self._whole = z.shape
        z = z[self._finite]
        self._prepare(panels, lambda lattice: _Scattered(z, lattice), len(z), tolerance)

    def _prepare(self, panels, targets, count, tolerance):
        self._panels = panels
        terms = _terms(as_number("tolerance", tolerance, least=1e-14, greatest=0.1))
        self._tables, self._targets = _tables(terms), count
        poles, reach, panel = self._poles(panels, tolerance)
        self._sources = _Sources(poles, reach, panel)
        self._layout = _Layout(self._sources, targets(self._sources.lattice), terms)

    def _poles(self, panels, tolerance):
        """Places of the poles, how far from each its panel may be near a target, and the panel."""
        self._walls = self._gauss = None
        if isinstance(panels, Points):
            count = len(panels.nodes)
            return panels.nodes, np.zeros(count), np.arange(count)
        self._walls = _multipole.Walls(panels.geometry)
        middle, half = panels.ends.mean(axis=1), 0.5 * np.diff(panels.ends, axis=1)[:, 0]
        nodes = panels.nodes.reshape(len(half), -1)
        if panels.order == 1:
            s, shares = gauss(_gauss_count(tolerance, panels.geometry[9]))
            nodes = middle[:, None] + half[:, None] * s
            self._gauss = s, -shares * half[:, None]
        reach = np.abs(nodes - middle[:, None]).max(axis=1) + panels.geometry[9] * np.abs(half)
        panel = np.arange(len(half)).repeat(nodes.shape[1])
        return nodes.ravel(), (reach * (1.0 + 1e-9))[panel], panel

    def apply(self, coefficients, charges, near=True):
        """(R, M) complex sums of R densities, as ``offbody._kernels.field`` takes them.

        near : whether panels count where they are near a target. Of Points, coefficients are None.
        """
        if self._gauss is not None:
            s, shares = self._gauss
            basis = legendre.legvander(s, coefficients.shape[2] - 1)
            charges = (coefficients @ basis.T * shares).reshape(len(coefficients), -1)
        if coefficients is None or not near:
            coefficients = np.zeros((len(charges), 1, 0), complex)
        coefficients = np.ascontiguousarray(coefficients, complex)
        out = np.empty((len(charges), self._targets), complex)
        for first in range(0, len(charges), DENSITIES):
            part = slice(first, first + DENSITIES)
            self._run(coefficients[part], charges[part], out[part])
        return self._put_back(out)

    def inside(self):
        """(M,) whether each target is inside a body; a place on a wall is not.

        The integral of d zeta/(2 pi i (zeta - z)) round a body is 1 inside and 0 outside.
        """
        panels, half_turn = self._panels, 0.5 / (1j * np.pi)
        coefficients = np.full((1, len(panels.ends), 1), half_turn)
        charges = -half_turn * (panels.tangents * panels.weights)[None]
        if self._gauss is not None:
            charges = (coefficients * self._gauss[1]).reshape(1, -1)
        out = np.empty((1, self._targets), complex)
        self._run(coefficients, charges, out, both_sides=True)
        return self._put_back(out)[0].real > 0.5

    def _run(self, coefficients, charges, out, both_sides=False):
        sources, layout, width = self._sources, self._layout, 2 * self._tables[0]
        charges = charges[:, sources.order]
        boxes = len(sources.level)
        run = _multipole.Sum(
            sources.arrays, layout.arrays, layout.lists, self._tables, self._walls, both_sides,
            coefficients, np.ascontiguousarray(charges.real), np.ascontiguousarray(charges.imag),
            np.empty((boxes, len(charges), width)),
            np.empty((len(layout.arrays[3]), len(charges), width)),
        )
        cuts = np.linspace(0, boxes, min(PARTS, boxes) + 1).astype(int).tolist()
        _share(run.poles_to_boxes, list(zip(cuts[:-1], cuts[1:], strict=True)))
        run.boxes_to_parents()
        for box in layout.first:
            run.boxes_to_targets(box, box + 1, out)
        _share(lambda first, last: run.boxes_to_targets(first, last, out), layout.parts)

    def _put_back(self, out):
        if len(self._finite) == self._whole[0]:
            return out
        whole = np.full((len(out), *self._whole), np.nan, complex)
        whole[:, self._finite] = out
        return whole


def _share(work, parts):
    """Call ``work(first, last)`` for all parts, on as many threads as there are."""

    def some(chunk):
        for k in range(chunk.start // CHUNK, -(-chunk.stop // CHUNK)):
            work(*parts[k])

    over_chunks(some, len(parts) * CHUNK, WORTH_HALVING)


class GridPlan(Plan):
    """Sums of panels on the tensor grid of x and y: ``apply`` gives (R, len(y), len(x)).

    Parameters as of `Plan`, x and y in any order.
    """

    def __init__(self, panels, x, y, tolerance=1e-9):
        x, y = np.asarray(x, float), np.asarray(y, float)
        self._x, self._y = _rising(x), _rising(y)
        self._whole = len(y), len(x)
        columns, rows = x[self._x], y[self._y]
        self._prepare(
            panels, lambda lattice: _Grid(columns, rows, lattice), len(columns) * len(rows),
            tolerance,
        )

    def _put_back(self, out):
        out = out.reshape(len(out), len(self._y), len(self._x))
        if out.shape[1:] == self._whole and _in_order(self._x) and _in_order(self._y):
            return out
        whole = np.full((len(out), *self._whole), np.nan, complex)
        whole[:, self._y[:, None], self._x] = out
        return whole


def _rising(values):
    """The order that sorts the finite ones of some values."""
    order = np.argsort(values, kind="stable")
    return order[np.isfinite(values[order])]


def _in_order(places):
    return bool((np.diff(places) > 0).all())
