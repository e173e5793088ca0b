# cython: language_level=3, boundscheck=False, wraparound=False, cdivision=True, initializedcheck=False
"""The sums of a fast multipole method, over boxes and lists that ``offbody.fast_sum`` has laid out.

``sources`` is a tuple of arrays over N poles, in the order of their boxes, and B boxes, children
after their parents and side by side:

    x, y            (N,) places
    panel           (N,) the panel that each stands for; the poles of one in one box stand together
    leads           (N,) uint8: 1 on the one pole of each panel that stands for it when targets
                    near it are looked for
    centre_x, centre_y, side        (B,)
    own             (B, 2) first and last of the poles that no child holds
    children        (B, 2) first and last box
    place           (B,) 0 to 3 within the parent

``targets`` is one over M targets and T boxes, each followed by all that lie in it:

    x, y            (M,) sorted by box; of a grid, its columns and rows
    where           (M,) place of each in the result; of no length for a grid
    ranges          (T, 4) columns and rows of a box that holds targets itself; of scattered ones
                    (first, last, 0, 1); of a box with children, nothing
    centre_x, centre_y, side        (T,)
    parent, place   (T,)
    needed          (T,) terms of its expansion that its targets need; 0 where it has none

``lists`` holds what each target box takes from source boxes, as (starts (T + 1,), entries...):

    across          boxes of its size, and the direction of each, 0 to 48: expansion to expansion
    entering        larger boxes whose own poles enter its expansion
    outer           smaller boxes whose expansion its targets read
    direct          first and last pole, one by one; the closed form where a panel is near

``tables``: terms, then matrix, diagonal before and diagonal after of the translations across, up
and down, as in multipole.h. Expansions are (boxes, densities, 2 terms). Everything here runs
without the interpreter's lock.
"""

from libc.stdlib cimport free, malloc, realloc

cdef extern from "multipole.h" nogil:
    const int BLOCK
    const int LANES
    const int WIDTH
    const double TAU
    double curve_height(double x, int order, const double *bulge)
    double wall_slack(double x, const double *slack)
    void ends_from(const double *z, const double *a, const double *b, const double *normal_a,
                   const double *normal_b, double touch, double *seen)
    void panel_moments(double ax, double ay, double bx, double by, int terms, int order,
                       const double *bulge, const double *slack, double *re, double *im)
    void local_targets(int n, const double *x, const double *y, double mx, double my, double gx,
                       double gy, double *tx, double *ty)
    int mark_far(int n, const double *tx, const double *ty, double reach2, double *far,
                 double *least)
    void into_box(int n, const double *x, const double *y, double cx, double cy, double d,
                  double *wx, double *wy)
    void out_of_box(int n, const double *x, const double *y, double cx, double cy, double d,
                    double *wx, double *wy)
    void add_series(int n, const double *wx, const double *wy, int count, const double *cx,
                    const double *cy, double factor, double *re, double *im)
    void add_times(int n, const double *re, const double *im, const double *wx, const double *wy,
                   double *out_re, double *out_im)
    void add_powers(int n, const double *wx, const double *wy, const double *vx, const double *vy,
                    int terms, double *room, double *out)
    void translate(int terms, const double *start, const double *before, const double *matrix,
                   const double *after, double *to)
    void add_poles(int n, const double *x, const double *y, int m, const double *px,
                   const double *py, const double *qx, const double *qy, double *re, double *im)
    void add_far_poles(int n, const double *x, const double *y, const double *far, int m,
                       const double *px, const double *py, const double *qx, const double *qy,
                       int densities, long poles, int stride, double *re, double *im)
    void sum_moments(int n, const double *tx, const double *ty, const double *re, const double *im,
                     int terms, const double *c, int densities, long between, int stride,
                     double *out_re, double *out_im)

ctypedef double complex cplx

cdef double ON_END = 1e-14   # of the whole's size: nearer than this, a target is ON an end point


cdef class Walls:
    """What the closed form needs to know of the panels: ``Panels.geometry``."""

    cdef const cplx[::1] a, b, normal_a, normal_b
    cdef const double[:, ::1] bulge, slack
    cdef double reach, touch
    cdef int order

    def __init__(self, tuple geometry):
        self.a, self.b, self.normal_a, self.normal_b = geometry[:4]
        self.bulge, self.slack = geometry[7], geometry[8]
        self.reach, self.touch = geometry[9], ON_END * <double>geometry[10]
        self.order = self.bulge.shape[1]

    cdef void moments(self, double x, double y, Py_ssize_t p, int terms, double *tx, double *ty,
                      double *re, double *im) noexcept nogil:
        """The local coordinate of (x, y) on panel p, and the panel's first moments there."""
        cdef double z[2]
        cdef double seen[4]
        z[0], z[1] = x, y
        ends_from(z, <const double *>&self.a[p], <const double *>&self.b[p],
                  <const double *>&self.normal_a[p], <const double *>&self.normal_b[p],
                  self.touch, seen)
        tx[0], ty[0] = -0.5 * (seen[0] + seen[2]), -0.5 * (seen[1] + seen[3])
        panel_moments(seen[0], seen[1], seen[2], seen[3], terms, self.order, &self.bulge[p, 0],
                      &self.slack[p, 0], re, im)

    cdef bint in_bulge(self, double tx, double ty, Py_ssize_t p) noexcept nogil:
        """Whether a place lies inside the body and yet outside the chord of panel p."""
        if ty >= 0.0 or tx <= -1.0 or tx >= 1.0:
            return False
        return ty > (curve_height(tx, self.order, &self.bulge[p, 0])
                     + wall_slack(tx, &self.slack[p, 0]))

    cdef int mark(self, int n, const double *x, const double *y, Py_ssize_t p, double *tx,
                  double *ty, double *far) noexcept nogil:
        """How many of n targets, a multiple of LANES, are near: ``far`` is 0 for them, else 1."""
        cdef double hx = 0.5 * (self.b[p].real - self.a[p].real)
        cdef double hy = 0.5 * (self.b[p].imag - self.a[p].imag)
        cdef double half2 = hx * hx + hy * hy, least
        local_targets(n, x, y, 0.5 * (self.a[p].real + self.b[p].real),
                      0.5 * (self.a[p].imag + self.b[p].imag), hx / half2, -hy / half2, tx, ty)
        return mark_far(n, tx, ty, self.reach * self.reach, far, &least)

    def near_influence(self, const cplx[:, :, ::1] modes, const cplx[:, ::1] tangents,
                       const double[::1] x, const double[::1] y, const cplx[::1] turn,
                       const Py_ssize_t[::1] panel, const Py_ssize_t[::1] target,
                       unsigned char[::1] near, double[:, ::1] real):
        """Of pairs of a panel and a target, which are near, and the influence there.

        Row k of ``real`` is the real part of turn times the complex velocity that unit vortex
        strengths at the nodes of the panel induce at a near target.
        """
        cdef double moment_re[32]
        cdef double moment_im[32]
        cdef double room[5 * 16]    # one target fills a vector
        cdef int terms = <int>modes.shape[1], i, j
        cdef Py_ssize_t k, p, t
        cdef cplx factor, value, moment
        with nogil:
            for k in range(panel.shape[0]):
                p, t = panel[k], target[k]
                for i in range(LANES):
                    room[i], room[LANES + i] = x[t], y[t]
                near[k] = self.mark(LANES, room, room + LANES, p, room + 2 * LANES,
                                    room + 3 * LANES, room + 4 * LANES) > 0
                if not near[k]:
                    continue
                self.moments(x[t], y[t], p, terms, room, room + 1, moment_re, moment_im)
                factor = 0.15915494309189535j * turn[t]     # -1/(2 pi i)
                for j in range(modes.shape[2]):
                    value = 0.0
                    for i in range(terms):
                        moment.real, moment.imag = moment_re[i], moment_im[i]
                        value = value + moment * modes[p, i, j]
                    value = factor * value * tangents[p, j].conjugate()
                    real[k, j] = value.real


cdef class Block:
    """Up to BLOCK targets, which panels are near them, and the sums that grow there."""

    cdef int n, densities, near, room
    cdef double *x
    cdef double *y
    cdef double *wx
    cdef double *wy
    cdef double *series_re
    cdef double *series_im
    cdef double *all_far
    cdef double *re             # (densities, BLOCK)
    cdef double *im
    cdef double *near_sums      # of one panel, as re and then im
    cdef int chosen[128]        # the targets near it
    cdef double *far            # (near, BLOCK)
    cdef Py_ssize_t *panels     # (near,)
    cdef Py_ssize_t *where      # (n,)

    def __cinit__(self, int densities):
        cdef int k
        self.densities, self.room = densities, 16
        self.x = <double *>malloc((7 + 4 * densities) * BLOCK * sizeof(double))
        self.far = <double *>malloc(self.room * BLOCK * sizeof(double))
        self.panels = <Py_ssize_t *>malloc(self.room * sizeof(Py_ssize_t))
        self.where = <Py_ssize_t *>malloc(BLOCK * sizeof(Py_ssize_t))
        if self.x == NULL or self.far == NULL or self.panels == NULL or self.where == NULL:
            raise MemoryError
        self.y, self.wx, self.wy = self.x + BLOCK, self.x + 2 * BLOCK, self.x + 3 * BLOCK
        self.series_re, self.series_im = self.x + 4 * BLOCK, self.x + 5 * BLOCK
        self.all_far, self.re = self.x + 6 * BLOCK, self.x + 7 * BLOCK
        self.im = self.re + densities * BLOCK
        self.near_sums = self.im + densities * BLOCK
        for k in range(BLOCK):
            self.all_far[k] = 1.0

    def __dealloc__(self):
        free(self.x)
        free(self.far)
        free(self.panels)
        free(self.where)

    cdef void begin(self) noexcept nogil:
        """Empty sums for the n targets in place, of which the last is repeated."""
        cdef int i
        for i in range(self.n, (self.n + LANES - 1) // LANES * LANES):
            self.x[i], self.y[i] = self.x[self.n - 1], self.y[self.n - 1]
        self.near = 0
        for i in range(2 * self.densities * BLOCK):
            self.re[i] = 0.0

    cdef int whole(self) noexcept nogil:
        """The targets, the last group filled up."""
        return (self.n + WIDTH - 1) // WIDTH * WIDTH

    cdef double *mask(self, Py_ssize_t panel) noexcept nogil:
        """0 for the targets near a panel and 1 for the others; NULL where all are far."""
        cdef int k
        for k in range(self.near):
            if self.panels[k] == panel:
                return self.far + k * BLOCK
        return NULL

    cdef int find_near(self, Walls walls, Py_ssize_t panel) except -1 nogil:
        """Remember the panel if any target is near it."""
        if self.near == self.room:
            self.room *= 2
            self.far = <double *>realloc(self.far, self.room * BLOCK * sizeof(double))
            self.panels = <Py_ssize_t *>realloc(self.panels, self.room * sizeof(Py_ssize_t))
            if self.far == NULL or self.panels == NULL:
                with gil:
                    raise MemoryError
        if walls.mark((self.n + LANES - 1) // LANES * LANES, self.x, self.y, panel, self.wx,
                      self.wy, self.far + self.near * BLOCK) > 0:
            self.panels[self.near] = panel
            self.near += 1
        return 0


cdef class Sum:
    """One sum for R densities on its way: poles to boxes, boxes to parents, boxes to targets."""

    cdef const double[::1] x, y, centre_x, centre_y, side
    cdef const Py_ssize_t[::1] panel, place
    cdef const unsigned char[::1] leads
    cdef const Py_ssize_t[:, ::1] own, children

    cdef const double[::1] columns, rows, target_x, target_y, target_side
    cdef const Py_ssize_t[::1] where, target_parent, target_place, needed
    cdef const Py_ssize_t[:, ::1] ranges
    cdef bint grid

    cdef const Py_ssize_t[::1] across, across_box, across_way, entering, entering_box
    cdef const Py_ssize_t[::1] outer, outer_box, direct, direct_first, direct_last

    cdef int terms
    cdef const double[:, ::1] over, before_over, after_over, up, before_up, after_up
    cdef const double[:, ::1] down, before_down, after_down

    cdef Walls walls
    cdef bint both_sides
    cdef const cplx[:, :, ::1] coefficients
    cdef const double[:, ::1] qx, qy
    cdef Py_ssize_t densities
    cdef double[:, :, ::1] outside, inside

    def __init__(self, tuple sources, tuple targets, tuple lists, tuple tables, Walls walls,
                 bint both_sides, coefficients, qx, qy, outside, inside):
        """both_sides : whether a near panel's angle is to be right inside the body too, in the
        bulge of the panel over its chord, where fields of flows are not asked for.
        """
        (self.x, self.y, self.panel, self.leads, self.centre_x, self.centre_y, self.side, self.own,
         self.children, self.place) = sources
        (self.columns, self.rows, self.where, self.ranges, self.target_x, self.target_y,
         self.target_side, self.target_parent, self.target_place, self.needed) = targets
        self.grid = self.where.shape[0] == 0
        (self.across, self.across_box, self.across_way), (self.entering, self.entering_box), \
            (self.outer, self.outer_box), (self.direct, self.direct_first, self.direct_last) = lists
        (self.terms, self.over, self.before_over, self.after_over, self.up, self.before_up,
         self.after_up, self.down, self.before_down, self.after_down) = tables
        self.walls, self.both_sides = walls, both_sides
        self.coefficients, self.qx, self.qy = coefficients, qx, qy
        self.outside, self.inside, self.densities = outside, inside, qx.shape[0]

    def poles_to_boxes(self, Py_ssize_t first, Py_ssize_t last):
        """Write the expansions outside boxes first to last of the poles that are their own."""
        cdef Py_ssize_t box
        cdef double *room = <double *>malloc((6 * BLOCK + 2 * self.terms * WIDTH) * sizeof(double))
        if room == NULL:
            raise MemoryError
        with nogil:
            for box in range(first, last):
                self._clear(self.outside[box])
                self._add_own(box, self.centre_x[box], self.centre_y[box], self.side[box], False,
                              room, self.outside[box])
        free(room)

    def boxes_to_parents(self):
        """Add to the expansion of each box those of its children, the smallest boxes first."""
        cdef Py_ssize_t box, child, k
        with nogil:
            for box in range(self.children.shape[0] - 1, -1, -1):
                for child in range(self.children[box, 0], self.children[box, 1]):
                    k = self.place[child]
                    self._translate(self.outside[child], self.before_up[k], self.up,
                                    self.after_up[k], self.outside[box])

    def boxes_to_targets(self, Py_ssize_t first, Py_ssize_t last, cplx[:, ::1] out):
        """Write the sums at all targets of target boxes first to last.

        Parents come before their children, here or in an earlier call.
        """
        cdef Block block = Block(<int>self.densities)
        cdef double *room = <double *>malloc((6 * BLOCK + 2 * self.terms * WIDTH) * sizeof(double))
        cdef Py_ssize_t box, i, j, width = self.columns.shape[0]
        if room == NULL:
            raise MemoryError
        try:
            with nogil:
                for box in range(first, last):
                    if self.needed[box] > 0:
                        self._expand(box, room)
                    block.n = 0
                    for j in range(self.ranges[box, 2], self.ranges[box, 3]):
                        for i in range(self.ranges[box, 0], self.ranges[box, 1]):
                            block.x[block.n] = self.columns[i]
                            block.y[block.n] = self.rows[j] if self.grid else self.rows[i]
                            block.where[block.n] = j * width + i if self.grid else self.where[i]
                            block.n += 1
                            if block.n == BLOCK:
                                self._evaluate(box, block, out)
                                block.n = 0
                    if block.n > 0:
                        self._evaluate(box, block, out)
        finally:
            free(room)

    cdef void _clear(self, double[:, ::1] expansion) noexcept nogil:
        cdef Py_ssize_t r, k
        for r in range(expansion.shape[0]):
            for k in range(expansion.shape[1]):
                expansion[r, k] = 0.0

    cdef void _translate(self, const double[:, ::1] start, const double[::1] before,
                         const double[:, ::1] matrix, const double[::1] after,
                         double[:, ::1] to) noexcept nogil:
        cdef Py_ssize_t r
        for r in range(self.densities):
            translate(self.terms, &start[r, 0], &before[0], &matrix[0, 0], &after[0], &to[r, 0])

    cdef void _add_own(self, Py_ssize_t box, double cx, double cy, double d, bint inward,
                       double *room, double[:, ::1] expansion) noexcept nogil:
        """Add the own poles of a source box to the expansion outside it or inside another box."""
        cdef double *px = room
        cdef double *py = room + BLOCK
        cdef double *wx = room + 2 * BLOCK
        cdef double *wy = room + 3 * BLOCK
        cdef double *vx = room + 4 * BLOCK
        cdef double *vy = room + 5 * BLOCK
        cdef Py_ssize_t first = self.own[box, 0], last = self.own[box, 1], r
        cdef int n, whole, j
        cdef double cx_, cy_
        while first < last:
            n = <int>min(<Py_ssize_t>BLOCK, last - first)
            whole = (n + WIDTH - 1) // WIDTH * WIDTH
            for j in range(whole):
                px[j] = self.x[first + min(j, n - 1)]
                py[j] = self.y[first + min(j, n - 1)]
                vx[j] = 0.0
                vy[j] = 0.0
            if inward:
                out_of_box(whole, px, py, cx, cy, d, wx, wy)
            else:
                into_box(whole, px, py, cx, cy, d, wx, wy)
            for r in range(self.densities):
                for j in range(n):
                    cx_, cy_ = self.qx[r, first + j], self.qy[r, first + j]
                    if inward:
                        vx[j] = cy_ * wy[j] - cx_ * wx[j]
                        vy[j] = -cx_ * wy[j] - cy_ * wx[j]
                    else:
                        vx[j] = cx_
                        vy[j] = cy_
                add_powers(whole, wx, wy, vx, vy, self.terms, room + 6 * BLOCK, &expansion[r, 0])
            first += n

    cdef void _expand(self, Py_ssize_t box, double *room) noexcept nogil:
        """The expansion inside a target box: its parent's, those across, larger boxes' poles."""
        cdef Py_ssize_t parent = self.target_parent[box], e, k
        self._clear(self.inside[box])
        if parent >= 0 and self.needed[parent] > 0:
            k = self.target_place[box]
            self._translate(self.inside[parent], self.before_down[k], self.down,
                            self.after_down[k], self.inside[box])
        for e in range(self.across[box], self.across[box + 1]):
            k = self.across_way[e]
            self._translate(self.outside[self.across_box[e]], self.before_over[k], self.over,
                            self.after_over[k], self.inside[box])
        for e in range(self.entering[box], self.entering[box + 1]):
            self._add_own(self.entering_box[e], self.target_x[box], self.target_y[box],
                          self.target_side[box], True, room, self.inside[box])

    cdef int _evaluate(self, Py_ssize_t box, Block block, cplx[:, ::1] out) except -1 nogil:
        """Write the sums at a block of targets of one box."""
        cdef Py_ssize_t e, s, r
        cdef int n, i
        cdef cplx c
        block.begin()
        n = block.whole()
        if self.needed[box] > 0:
            into_box(n, block.x, block.y, self.target_x[box], self.target_y[box],
                     self.target_side[box], block.wx, block.wy)
            for r in range(self.densities):
                add_series(n, block.wx, block.wy, <int>self.needed[box], &self.inside[box, r, 0],
                           &self.inside[box, r, self.terms], 1.0 / self.target_side[box],
                           block.re + r * BLOCK, block.im + r * BLOCK)
        for e in range(self.outer[box], self.outer[box + 1]):
            s = self.outer_box[e]
            out_of_box(n, block.x, block.y, self.centre_x[s], self.centre_y[s], self.side[s],
                       block.wx, block.wy)
            for r in range(self.densities):
                for i in range(n):
                    block.series_re[i] = 0.0
                    block.series_im[i] = 0.0
                add_series(n, block.wx, block.wy, self.terms, &self.outside[s, r, 0],
                           &self.outside[s, r, self.terms], 1.0 / self.side[s], block.series_re,
                           block.series_im)
                add_times(n, block.series_re, block.series_im, block.wx, block.wy,
                          block.re + r * BLOCK, block.im + r * BLOCK)
        if self.walls is not None:
            for e in range(self.direct[box], self.direct[box + 1]):
                for s in range(self.direct_first[e], self.direct_last[e]):
                    if self.leads[s]:
                        block.find_near(self.walls, self.panel[s])
        for e in range(self.direct[box], self.direct[box + 1]):
            self._add_run(self.direct_first[e], self.direct_last[e], block)
        if block.near > 0 and self.coefficients.shape[2] > 0:
            self._add_near(block)
        for r in range(self.densities):
            for i in range(block.n):
                c.real = block.re[r * BLOCK + i]
                c.imag = block.im[r * BLOCK + i]
                out[r, block.where[i]] = c
        return 0

    cdef void _add_run(self, Py_ssize_t first, Py_ssize_t last, Block block) noexcept nogil:
        """Add poles first to last one by one, each where its panel is far."""
        cdef Py_ssize_t stop
        cdef double *far
        while first < last:
            stop = last
            far = NULL
            if block.near > 0:
                stop = first + 1
                far = block.mask(self.panel[first])
                while stop < last and self.panel[stop] == self.panel[first]:
                    stop += 1
            if far == NULL and self.densities == 1:
                add_poles(block.whole(), block.x, block.y, <int>(stop - first), &self.x[first],
                          &self.y[first], &self.qx[0, first], &self.qy[0, first], block.re,
                          block.im)
            else:
                add_far_poles(block.whole(), block.x, block.y,
                              block.all_far if far == NULL else far, <int>(stop - first),
                              &self.x[first], &self.y[first],
                              &self.qx[0, first], &self.qy[0, first], <int>self.densities,
                              self.qx.shape[1], BLOCK, block.re, block.im)
            first = stop

    cdef void _add_near(self, Block block) noexcept nogil:
        """Add the closed form of each panel that is near, where it is."""
        cdef int k, i, n, whole, terms = <int>self.coefficients.shape[2]
        cdef Py_ssize_t r, p
        cdef double *far
        cdef double *re = block.near_sums
        cdef double *im = block.near_sums + self.densities * BLOCK
        for k in range(block.near):
            p, far = block.panels[k], block.far + k * BLOCK
            n = 0
            for i in range(block.n):
                if far[i] == 0.0:
                    block.chosen[n] = i
                    self.walls.moments(block.x[i], block.y[i], p, 1, block.wx + n, block.wy + n,
                                       block.series_re + n, block.series_im + n)
                    if self.both_sides and self.walls.in_bulge(block.wx[n], block.wy[n], p):
                        block.series_im[n] += TAU
                    n += 1
            whole = (n + WIDTH - 1) // WIDTH * WIDTH
            for i in range(n, whole):
                block.wx[i] = block.wy[i] = block.series_re[i] = block.series_im[i] = 0.0
            sum_moments(whole, block.wx, block.wy, block.series_re, block.series_im, terms,
                        <const double *>&self.coefficients[0, p, 0], <int>self.densities,
                        self.coefficients.shape[1] * terms, BLOCK, re, im)
            for r in range(self.densities):
                for i in range(n):
                    block.re[r * BLOCK + block.chosen[i]] += re[r * BLOCK + i]
                    block.im[r * BLOCK + block.chosen[i]] += im[r * BLOCK + i]
