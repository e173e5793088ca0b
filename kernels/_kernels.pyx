# cython: language_level=3, boundscheck=False, wraparound=False, cdivision=True, initializedcheck=False
"""Panel influences on plain arrays: closed forms near, nodes or series far.

Walls run counter-clockwise. A ``geometry`` is the tuple that ``offbody.panels.Panels.geometry``
makes, of P panels with ``order`` nodes each, N = P * order in all:

    a, b        (P,) complex: end points            normal_a, normal_b  (P,) complex: outward there
    nodes       (N,) complex                        tangents            (N,) complex, unit
    weights     (N,) arc-length quadrature
    bulge       (P, order): the curve over its chord, see closed_form.h
    slack       (P, 2): how well bulge knows it, in half-chords, see closed_form.h
    reach       beyond this many half-chords from its middle a panel is far
    size        a length of the whole, for the distance at which an end point counts as touched

Signs: a strength g = gamma + i v (vortex, counter-clockwise positive; source, outward positive) on
a wall with tangent T is the complex velocity W = g conj(T), and at z it induces
u - i v = (1/(2 pi i)) integral of W d zeta / (z - zeta). Targets inside a body get what the
formula gives there; callers mask them. Everything here runs without the interpreter's lock.
"""

from libc.math cimport INFINITY, fabs, sqrt
from libc.stdlib cimport free, malloc

cdef extern from "closed_form.h" nogil:
    const int BLOCK
    const int LANES
    double curve_height(double x, int order, const double *bulge)
    double wall_slack(double x, const double *slack)
    void moments_at(const double *z, const double *a, const double *b, const double *normal_a,
                    const double *normal_b, double touch, int terms, int order,
                    const double *bulge, const double *slack, double *re, double *im)
    void local_targets(int n, const double *x, const double *y, double mx, double my, double gx,
                       double gy, double *tx, double *ty)
    void local_panels(int n, double x, double y, const double *mx, const double *my,
                      const double *gx, const double *gy, double *tx, double *ty)
    int mark_far(int n, const double *tx, const double *ty, double reach2, double *far,
                 double *least)
    void add_nodes(int n, const double *x, const double *y, int count, const double *nodes,
                   const double *charges, double *re, double *im)
    void write_nodes(int n, double x, double y, double fx, double fy, const double *nx,
                     const double *ny, const double *weight, double *real, double *imag)
    void moments_by_modes(int terms, int n, const double *moment_re, const double *moment_im,
                          const double *modes, double *re, double *im)
    void write_products(int n, double fx, double fy, const double *re, const double *im,
                        const double *wx, const double *wy, double *real, double *imag)
    void reciprocals(int n, const double *x, const double *y, double nx, double ny,
                     const double *far, double *re, double *im)
    void add_product(int n, double cx, double cy, const double *re, const double *im,
                     double *out_re, double *out_im)
    void far_moments(int n, const double *tx, const double *ty, const double *far, double least,
                     double *re0, double *im0, double *re1, double *im1)
    void add_constant(int n, const double *tx, const double *ty, const double *far, double least,
                      double cx, double cy, double *re, double *im)
    void write_constants(int n, const double *tx, const double *ty, const double *far,
                         double least, double fx, double fy, const double *wx, const double *wy,
                         double *real, double *imag)

ctypedef double complex cplx

cdef double OVER_TWO_PI = 0.15915494309189535
cdef double ON_END = 1e-14   # of the whole's size: nearer than this, a target is ON an end point


def field(tuple geometry, const cplx[:, :, ::1] coefficients, const cplx[:, ::1] charges,
          const cplx[::1] z, cplx[:, :] out):
    """Add the field of R densities at the targets z to ``out`` (R, len(z)).

    coefficients (R, P, terms): Legendre coefficients of the density on each panel, times
    -1/(2 pi i), for near panels; charges (R, N): density times tangent times weight, over 2 pi i,
    at the nodes, for far ones. Of order 1, the closed form serves near and far.
    """
    cdef const cplx[::1] a = geometry[0], b = geometry[1]
    cdef const cplx[::1] normal_a = geometry[2], normal_b = geometry[3]
    cdef const cplx[::1] nodes = geometry[4]
    cdef const double[:, ::1] bulge = geometry[7]
    cdef const double[:, ::1] slack = geometry[8]
    cdef double reach = geometry[9], touch = ON_END * <double>geometry[10]
    cdef Py_ssize_t targets = z.shape[0], densities = charges.shape[0], panels = a.shape[0]
    cdef int order = bulge.shape[1], terms = coefficients.shape[2]
    cdef Py_ssize_t first, r, p
    cdef int n, full, i, j, k, near
    cdef cplx m, h, c
    cdef double least, half2, sum_re, sum_im
    cdef double *room
    cdef double *x
    cdef double *y
    cdef double *tx
    cdef double *ty
    cdef double *far
    cdef double *re
    cdef double *im
    cdef double *re1
    cdef double *im1
    cdef double *sums
    cdef double moment_re[32]
    cdef double moment_im[32]
    if targets == 0 or densities == 0:
        return
    room = <double *>malloc((9 + 2 * densities) * BLOCK * sizeof(double))
    if room == NULL:
        raise MemoryError
    x, y, tx, ty, far = (room, room + BLOCK, room + 2 * BLOCK, room + 3 * BLOCK, room + 4 * BLOCK)
    re, im, re1, im1 = room + 5 * BLOCK, room + 6 * BLOCK, room + 7 * BLOCK, room + 8 * BLOCK
    sums = room + 9 * BLOCK
    with nogil:
        first = 0
        while first < targets:
            n = <int>min(<Py_ssize_t>BLOCK, targets - first)
            full = (n + LANES - 1) // LANES * LANES
            for i in range(full):   # the last target fills its vector
                x[i] = z[first + min(i, n - 1)].real
                y[i] = z[first + min(i, n - 1)].imag
            for i in range(2 * <int>densities * BLOCK):
                sums[i] = 0.0
            for p in range(panels):
                h.real = 0.5 * (b[p].real - a[p].real)
                h.imag = 0.5 * (b[p].imag - a[p].imag)
                half2 = h.real * h.real + h.imag * h.imag
                local_targets(full, x, y, 0.5 * (a[p].real + b[p].real),
                              0.5 * (a[p].imag + b[p].imag), h.real / half2, -h.imag / half2,
                              tx, ty)
                near = mark_far(full, tx, ty, reach * reach, far, &least)
                if near < full and order == 1 and densities == 1 and terms == 1:
                    c = coefficients[0, p, 0]
                    add_constant(full, tx, ty, far, least, c.real, c.imag, sums, sums + BLOCK)
                elif near < full and order == 1:
                    far_moments(full, tx, ty, far, least, re, im, re1, im1)
                    for r in range(densities):
                        c = coefficients[r, p, 0]
                        add_product(full, c.real, c.imag, re, im,
                                    sums + 2 * r * BLOCK, sums + (2 * r + 1) * BLOCK)
                        if terms > 1:
                            c = coefficients[r, p, 1]
                            add_product(full, c.real, c.imag, re1, im1,
                                        sums + 2 * r * BLOCK, sums + (2 * r + 1) * BLOCK)
                elif near == 0 and densities == 1:
                    add_nodes(full, x, y, order, <const double *>&nodes[p * order],
                              <const double *>&charges[0, p * order], sums, sums + BLOCK)
                elif near < full:
                    for j in range(order):
                        reciprocals(full, x, y, nodes[p * order + j].real,
                                    nodes[p * order + j].imag, far, re, im)
                        for r in range(densities):
                            c = charges[r, p * order + j]
                            add_product(full, c.real, c.imag, re, im,
                                        sums + 2 * r * BLOCK, sums + (2 * r + 1) * BLOCK)
                if near > 0:
                    for i in range(n):
                        if far[i] != 0.0:
                            continue
                        moments_at(<const double *>&z[first + i], <const double *>&a[p],
                                   <const double *>&b[p], <const double *>&normal_a[p],
                                   <const double *>&normal_b[p], touch, terms, order,
                                   &bulge[p, 0], &slack[p, 0], moment_re, moment_im)
                        for r in range(densities):
                            sum_re = sum_im = 0.0
                            for k in range(terms):
                                c = coefficients[r, p, k]
                                sum_re += c.real * moment_re[k] - c.imag * moment_im[k]
                                sum_im += c.real * moment_im[k] + c.imag * moment_re[k]
                            sums[2 * r * BLOCK + i] += sum_re
                            sums[(2 * r + 1) * BLOCK + i] += sum_im
            for r in range(densities):
                for i in range(n):
                    c.real = sums[2 * r * BLOCK + i]
                    c.imag = sums[(2 * r + 1) * BLOCK + i]
                    out[r, first + i] = out[r, first + i] + c
            first += BLOCK
    free(room)


def influence(tuple geometry, const cplx[:, :, ::1] modes, const cplx[:, ::1] tangents,
              const cplx[::1] z, const cplx[::1] turn, double[:, ::1] real, double[:, ::1] imag):
    """Write turn[i] times the complex velocity at z[i] of a unit vortex strength at each place.

    modes (P, terms, places) complex: values of the density at places of each panel, the nodes and,
    where ``modes`` has more than ``order`` of them, others that only a near target asks for, to
    Legendre coefficients; tangents (P, places) there; real, imag (len(z), P * places). With turn =
    the wall's tangent at z these are the tangential and the outward normal velocity of the vortices
    (and -imag, real those of the sources); with turn = 1 they are u and -v. At a wall the value is
    the outer limit: the principal value and the half-jump conj(T)/2 together; the inner limit is
    conj(T) less.
    """
    cdef const cplx[::1] a = geometry[0], b = geometry[1]
    cdef const cplx[::1] normal_a = geometry[2], normal_b = geometry[3]
    cdef const cplx[::1] nodes = geometry[4]
    cdef const double[::1] weights = geometry[6]
    cdef const double[:, ::1] bulge = geometry[7]
    cdef const double[:, ::1] slack = geometry[8]
    cdef double reach = geometry[9], touch = ON_END * <double>geometry[10]
    cdef Py_ssize_t targets = z.shape[0], panels = a.shape[0], count = nodes.shape[0], i, p, q
    cdef Py_ssize_t first, column
    cdef int order = bulge.shape[1], terms = modes.shape[1], places = modes.shape[2], j, n, near
    cdef double fx, fy, half2, least
    cdef double moment_re[32]
    cdef double moment_im[32]
    cdef double *room
    cdef double *mx
    cdef double *my
    cdef double *gx
    cdef double *gy
    cdef double *nx
    cdef double *ny
    cdef double *wx
    cdef double *wy
    cdef double *tx
    cdef double *ty
    cdef double *far
    cdef double *re
    cdef double *im
    cdef Py_ssize_t padded = panels + LANES
    room = <double *>malloc((4 * padded + 2 * count + 2 * panels * places + 5 * BLOCK)
                            * sizeof(double))
    if room == NULL:
        raise MemoryError
    mx, my, gx, gy = room, room + padded, room + 2 * padded, room + 3 * padded
    nx = gy + padded
    ny = nx + count
    wx = ny + count
    wy = wx + panels * places
    tx = wy + panels * places
    ty, far, re, im = tx + BLOCK, tx + 2 * BLOCK, tx + 3 * BLOCK, tx + 4 * BLOCK
    with nogil:
        for p in range(padded):   # the last panel fills its vector
            q = min(p, panels - 1)
            fx, fy = 0.5 * (b[q].real - a[q].real), 0.5 * (b[q].imag - a[q].imag)
            half2 = fx * fx + fy * fy
            mx[p], my[p] = 0.5 * (a[q].real + b[q].real), 0.5 * (a[q].imag + b[q].imag)
            gx[p], gy[p] = fx / half2, -fy / half2
        for i in range(count):
            nx[i], ny[i] = nodes[i].real, nodes[i].imag
        for p in range(panels):   # minus conj(tangent), with its mode for order 1
            for j in range(places):
                wx[p * places + j] = -tangents[p, j].real
                wy[p * places + j] = tangents[p, j].imag
            if order == 1:
                fx, fy = wx[p], wy[p]
                wx[p] = fx * modes[p, 0, 0].real - fy * modes[p, 0, 0].imag
                wy[p] = fx * modes[p, 0, 0].imag + fy * modes[p, 0, 0].real
        for i in range(targets):
            fx, fy = OVER_TWO_PI * turn[i].imag, -OVER_TWO_PI * turn[i].real
            first = 0
            while first < panels:
                n = <int>min(<Py_ssize_t>BLOCK, panels - first)
                local_panels((n + LANES - 1) // LANES * LANES, z[i].real, z[i].imag, mx + first,
                             my + first, gx + first, gy + first, tx, ty)
                near = mark_far(n, tx, ty, reach * reach, far, &least)
                if order == 1:
                    write_constants(n, tx, ty, far, least, fx, fy, wx + first, wy + first,
                                    &real[i, first], &imag[i, first])
                elif places == order and near == 0:
                    write_nodes(n * order, z[i].real, z[i].imag, fx, fy, nx + first * order,
                                ny + first * order, &weights[first * order],
                                &real[i, first * order], &imag[i, first * order])
                else:
                    for p in range(first, first + n):
                        column = p * places
                        write_nodes(order, z[i].real, z[i].imag, fx, fy, nx + p * order,
                                    ny + p * order, &weights[p * order], &real[i, column],
                                    &imag[i, column])
                        for j in range(order, places):
                            real[i, column + j] = imag[i, column + j] = 0.0
                for p in range(first, first + (n if near else 0)):
                    if far[p - first] != 0.0:
                        continue
                    moments_at(<const double *>&z[i], <const double *>&a[p],
                               <const double *>&b[p], <const double *>&normal_a[p],
                               <const double *>&normal_b[p], touch, terms, order, &bulge[p, 0],
                               &slack[p, 0], moment_re, moment_im)
                    column = p * places
                    if order == 1:
                        write_products(1, fx, fy, moment_re, moment_im, wx + p, wy + p,
                                       &real[i, column], &imag[i, column])
                        continue
                    moments_by_modes(terms, places, moment_re, moment_im,
                                     <const double *>&modes[p, 0, 0], re, im)
                    write_products(places, fx, fy, re, im, wx + column, wy + column,
                                   &real[i, column], &imag[i, column])
                first += BLOCK
    free(room)


def point_field(const cplx[::1] nodes, const cplx[:, ::1] charges, const cplx[::1] z,
                cplx[:, :] out):
    """Add sum_j charges[r, j]/(z - nodes[j]) to ``out`` (R, len(z)); not a number on a node."""
    cdef Py_ssize_t targets = z.shape[0], first = 0, r, j
    cdef int n, full, i
    cdef double x[128]
    cdef double y[128]
    cdef double re[128]
    cdef double im[128]
    cdef cplx c
    with nogil:
        while first < targets:
            n = <int>min(<Py_ssize_t>128, targets - first)
            full = (n + LANES - 1) // LANES * LANES
            for i in range(full):
                x[i] = z[first + min(i, n - 1)].real
                y[i] = z[first + min(i, n - 1)].imag
            for r in range(charges.shape[0]):
                for i in range(full):
                    re[i] = 0.0
                    im[i] = 0.0
                add_nodes(full, x, y, <int>nodes.shape[0], <const double *>&nodes[0],
                          <const double *>&charges[r, 0], re, im)
                for i in range(n):
                    c.real = re[i]
                    c.imag = im[i]
                    out[r, first + i] = out[r, first + i] + c
            first += 128


def enclosing_body(tuple geometry, const Py_ssize_t[::1] starts, const double[:, ::1] boxes,
                   const cplx[::1] z, Py_ssize_t[::1] body):
    """Write the index of the body that holds each target, or -1: a wall counts as outside.

    starts (bodies + 1,): first panel of each body; boxes (bodies, 4): xmin, xmax, ymin, ymax of
    chords and curves. Where a target lies over or under a panel within the height of its curve, the
    side of the nearest such curve decides; elsewhere the crossings of a ray with the chords do.
    """
    cdef const cplx[::1] a = geometry[0], b = geometry[1]
    cdef const double[:, ::1] bulge = geometry[7]
    cdef const double[:, ::1] slack = geometry[8]
    cdef int order = bulge.shape[1], k
    cdef Py_ssize_t i, p, which
    cdef bint within
    cdef int side
    cdef double px, py, hx, hy, half2, dx, dy, tx, ty, band, above, nearest
    with nogil:
        for i in range(z.shape[0]):
            body[i] = -1
            px = z[i].real
            py = z[i].imag
            for which in range(boxes.shape[0]):
                if px < boxes[which, 0] or px > boxes[which, 1] or py < boxes[which, 2] \
                        or py > boxes[which, 3]:
                    continue
                within = False
                side = 0
                nearest = INFINITY
                for p in range(starts[which], starts[which + 1]):
                    if (a[p].imag > py) != (b[p].imag > py):
                        if px < a[p].real + (b[p].real - a[p].real) \
                                * ((py - a[p].imag) / (b[p].imag - a[p].imag)):
                            within = not within
                    hx = 0.5 * (b[p].real - a[p].real)
                    hy = 0.5 * (b[p].imag - a[p].imag)
                    half2 = hx * hx + hy * hy
                    dx = px - 0.5 * (a[p].real + b[p].real)
                    dy = py - 0.5 * (a[p].imag + b[p].imag)
                    tx = (dx * hx + dy * hy) / half2
                    if fabs(tx) > 1.0 + 1e-9 + slack[p, 1]:
                        continue
                    ty = (dy * hx - dx * hy) / half2
                    band = slack[p, 0] + slack[p, 1]
                    for k in range(order):
                        band += fabs(bulge[p, k])
                    if fabs(ty) > band:
                        continue
                    above = ty - curve_height(tx, order, &bulge[p, 0])
                    if fabs(above) * sqrt(half2) < nearest:
                        nearest = fabs(above) * sqrt(half2)
                        side = 1 if above > wall_slack(tx, &slack[p, 0]) else -1
                if side > 0 or (side == 0 and within):
                    body[i] = which
                    break
