# cython: language_level=3, boundscheck=False, wraparound=False, cdivision=True, initializedcheck=False
"""Panel influences on plain arrays: closed forms near, nodes or series far.

Walls run counter-clockwise. A ``geometry`` is the tuple that ``offbody.panels.Panels.geometry``
makes, of P panels with ``order`` nodes each, N = P * order in all:

    a, b        (P,) complex: end points            normal_a, normal_b  (P,) complex: outward there
    nodes       (N,) complex                        tangents            (N,) complex, unit
    weights     (N,) arc-length quadrature
    bulge       (P, order): the curve over its chord, see closed_form.h
    slack       (P,): how well bulge knows it, in half-chords
    reach       beyond this many half-chords from its middle a panel is far
    size        a length of the whole, for the distance at which an end point counts as touched

Signs: a strength g = gamma + i v (vortex, counter-clockwise positive; source, outward positive) on
a wall with tangent T is the complex velocity W = g conj(T), and at z it induces
u - i v = (1/(2 pi i)) integral of W d zeta / (z - zeta). Targets inside a body get what the
formula gives there; callers mask them. Everything here runs without the interpreter's lock.
"""

from libc.math cimport INFINITY, fabs, hypot
from libc.stdlib cimport free, malloc

cdef extern from "closed_form.h" nogil:
    const int BLOCK
    double curve_height(double x, int order, const double *bulge)
    void panel_moments(double ax, double ay, double bx, double by, int terms, int order,
                       const double *bulge, double slack, double *re, double *im)
    int mark_far(int n, const double *x, const double *y, double mx, double my, double reach2,
                 double *far, double *least)
    void add_node(int n, const double *x, const double *y, double nx, double ny, double cx,
                  double cy, double *re, double *im)
    void reciprocals(int n, const double *x, const double *y, double nx, double ny,
                     const double *far, double *re, double *im)
    void add_product(int n, double cx, double cy, const double *re, const double *im,
                     double *out_re, double *out_im)
    void far_moments(int n, const double *x, const double *y, double mx, double my, double hx,
                     double hy, const double *far, int last, double *re0, double *im0,
                     double *re1, double *im1)
    int last_term(double t2)

ctypedef double complex cplx

cdef double ON_END = 1e-14   # of the whole's size: nearer than this, a target is ON an end point


cdef void moments_at(cplx z, cplx a, cplx b, cplx normal_a, cplx normal_b, double touch,
                     int terms, int order, const double *bulge, double slack,
                     double *re, double *im) noexcept nogil:
    """The moments of one panel at z. On an end point the two panels that meet there have
    logarithms that cancel; z is moved off it along their common outward normal, for both alike."""
    cdef cplx h = 0.5 * (b - a), to_a = a - z, to_b = b - z
    if hypot(to_a.real, to_a.imag) < touch:
        to_a = -touch * normal_a
        to_b = to_a + (b - a)
    elif hypot(to_b.real, to_b.imag) < touch:
        to_b = -touch * normal_b
        to_a = to_b - (b - a)
    to_a = to_a / h
    to_b = to_b / h
    panel_moments(to_a.real, to_a.imag, to_b.real, to_b.imag, terms, order, bulge, slack, re, im)


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
    cdef const double[::1] slack = geometry[8]
    cdef double reach = geometry[9], touch = ON_END * <double>geometry[10]
    cdef Py_ssize_t targets = z.shape[0], densities = charges.shape[0], panels = a.shape[0]
    cdef int order = bulge.shape[1], terms = coefficients.shape[2]
    cdef Py_ssize_t first, r, p
    cdef int n, i, j, k, near, last
    cdef cplx m, h, c, sum_
    cdef double half2, least
    cdef double *room
    cdef double *x
    cdef double *y
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
    room = <double *>malloc((7 + 2 * densities) * BLOCK * sizeof(double))
    if room == NULL:
        raise MemoryError
    x, y, far, re, im, re1, im1 = (room, room + BLOCK, room + 2 * BLOCK, room + 3 * BLOCK,
                                   room + 4 * BLOCK, room + 5 * BLOCK, room + 6 * BLOCK)
    sums = room + 7 * BLOCK
    with nogil:
        first = 0
        while first < targets:
            n = <int>min(<Py_ssize_t>BLOCK, targets - first)
            for i in range(n):
                x[i] = z[first + i].real
                y[i] = z[first + i].imag
            for i in range(2 * <int>densities * BLOCK):
                sums[i] = 0.0
            for p in range(panels):
                h = 0.5 * (b[p] - a[p])
                m = 0.5 * (a[p] + b[p])
                half2 = h.real * h.real + h.imag * h.imag
                near = mark_far(n, x, y, m.real, m.imag, reach * reach * half2, far, &least)
                if near < n and order == 1:
                    last = last_term(least / half2)
                    far_moments(n, x, y, m.real, m.imag, h.real, h.imag, far, last,
                                re, im, re1, im1)
                    for r in range(densities):
                        c = coefficients[r, p, 0]
                        add_product(n, c.real, c.imag, re, im,
                                    sums + 2 * r * BLOCK, sums + (2 * r + 1) * BLOCK)
                        if terms > 1:
                            c = coefficients[r, p, 1]
                            add_product(n, c.real, c.imag, re1, im1,
                                        sums + 2 * r * BLOCK, sums + (2 * r + 1) * BLOCK)
                elif near == 0 and densities == 1:
                    for j in range(order):
                        c = charges[0, p * order + j]
                        add_node(n, x, y, nodes[p * order + j].real, nodes[p * order + j].imag,
                                 c.real, c.imag, sums, sums + BLOCK)
                elif near < n:
                    for j in range(order):
                        reciprocals(n, x, y, nodes[p * order + j].real,
                                    nodes[p * order + j].imag, far, re, im)
                        for r in range(densities):
                            c = charges[r, p * order + j]
                            add_product(n, c.real, c.imag, re, im,
                                        sums + 2 * r * BLOCK, sums + (2 * r + 1) * BLOCK)
                if near > 0:
                    for i in range(n):
                        if far[i] != 0.0:
                            continue
                        moments_at(z[first + i], a[p], b[p], normal_a[p], normal_b[p], touch,
                                   terms, order, &bulge[p, 0], slack[p], moment_re, moment_im)
                        for r in range(densities):
                            sum_ = 0.0
                            for k in range(terms):
                                c.real = moment_re[k]
                                c.imag = moment_im[k]
                                sum_ = sum_ + coefficients[r, p, k] * c
                            sums[2 * r * BLOCK + i] += sum_.real
                            sums[(2 * r + 1) * BLOCK + i] += sum_.imag
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
    cdef const double[::1] slack = geometry[8]
    cdef double reach = geometry[9], touch = ON_END * <double>geometry[10]
    cdef Py_ssize_t targets = z.shape[0], panels = a.shape[0], i, p, column
    cdef int order = bulge.shape[1], terms = modes.shape[1], places = modes.shape[2], j, k
    cdef cplx h, d, value, factor
    cdef double dx, dy, half2, d2
    cdef double moment_re[32]
    cdef double moment_im[32]
    cdef cplx over = -0.15915494309189535j   # 1/(2 pi i)
    with nogil:
        for i in range(targets):
            factor = over * turn[i]
            for p in range(panels):
                column = p * places
                h = 0.5 * (b[p] - a[p])
                d = z[i] - 0.5 * (a[p] + b[p])
                half2 = h.real * h.real + h.imag * h.imag
                d2 = d.real * d.real + d.imag * d.imag
                if d2 > reach * reach * half2 and order > 1:
                    for j in range(order):
                        dx = z[i].real - nodes[p * order + j].real
                        dy = z[i].imag - nodes[p * order + j].imag
                        d2 = weights[p * order + j] / (dx * dx + dy * dy)
                        real[i, column + j] = (factor.real * dx + factor.imag * dy) * d2
                        imag[i, column + j] = (factor.imag * dx - factor.real * dy) * d2
                    for j in range(order, places):
                        real[i, column + j] = 0.0
                        imag[i, column + j] = 0.0
                    continue
                if d2 > reach * reach * half2:
                    moment_re[0] = far_moment(h / d, d2 / half2, &moment_im[0])
                else:
                    moments_at(z[i], a[p], b[p], normal_a[p], normal_b[p], touch,
                               terms, order, &bulge[p, 0], slack[p], moment_re, moment_im)
                for j in range(places):
                    value = 0.0
                    for k in range(terms):
                        d.real = moment_re[k]
                        d.imag = moment_im[k]
                        value = value + d * modes[p, k, j]
                    value = -factor * value * tangents[p, j].conjugate()
                    real[i, column + j] = value.real
                    imag[i, column + j] = value.imag


cdef double far_moment(cplx u, double t2, double *imaginary) noexcept nogil:
    """p_0 of a far panel of order 1, u = 1/t: the odd series of closed_form.h for one target."""
    cdef cplx square = u * u, sum_ = 0.0
    cdef int j
    for j in range(last_term(t2), -1, -1):
        sum_ = sum_ * square + 1.0 / (2 * j + 1)
    sum_ = -2.0 * u * sum_
    imaginary[0] = sum_.imag
    return sum_.real


def point_field(const cplx[::1] nodes, const cplx[:, ::1] charges, const cplx[::1] z,
                cplx[:, :] out):
    """Add sum_j charges[r, j]/(z - nodes[j]) to ``out`` (R, len(z)); infinite on a node."""
    cdef Py_ssize_t targets = z.shape[0], first = 0, r, j
    cdef int n, i
    cdef double x[128]
    cdef double y[128]
    cdef double re[128]
    cdef double im[128]
    cdef cplx c
    with nogil:
        while first < targets:
            n = <int>min(<Py_ssize_t>128, targets - first)
            for i in range(n):
                x[i] = z[first + i].real
                y[i] = z[first + i].imag
            for r in range(charges.shape[0]):
                for i in range(n):
                    re[i] = 0.0
                    im[i] = 0.0
                for j in range(nodes.shape[0]):
                    c = charges[r, j]
                    add_node(n, x, y, nodes[j].real, nodes[j].imag, c.real, c.imag, re, im)
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
    cdef const double[::1] slack = geometry[8]
    cdef int order = bulge.shape[1], k
    cdef Py_ssize_t i, p, which
    cdef bint within
    cdef int side
    cdef double px, py, band, above, nearest
    cdef cplx h, t
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
                    h = 0.5 * (b[p] - a[p])
                    t = (z[i] - 0.5 * (a[p] + b[p])) / h
                    if fabs(t.real) > 1.0 + 1e-9:
                        continue
                    band = 0.0
                    for k in range(order):
                        band += fabs(bulge[p, k])
                    if fabs(t.imag) > band + slack[p]:
                        continue
                    above = t.imag - curve_height(t.real, order, &bulge[p, 0])
                    if fabs(above) * hypot(h.real, h.imag) < nearest:
                        nearest = fabs(above) * hypot(h.real, h.imag)
                        side = 1 if above > slack[p] else -1
                if side > 0 or (side == 0 and within):
                    body[i] = which
                    break
