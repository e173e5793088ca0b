/* Sums of panel influences: the arithmetic of offbody, on plain arrays.
 *
 * One panel runs along the true wall from a to b, h = (b - a)/2, m = (a + b)/2. In its local coordinate
 * s = (zeta - m)/h, t = (z - m)/h a density of `terms` Legendre coefficients c_k gives at z
 *
 *     sum_k c_k p_k(t),    p_k(t) = integral over the panel of P_k(s)/(s - t) ds = -2 Q_k(t),
 *
 * the Legendre functions of the second kind (Neumann's integral), by Bonnet's recursion
 *
 *     p_0 = log((1 - t)/(-1 - t)),  p_1 = t p_0 + 2,  (k + 1) p_(k+1) = (2k + 1) t p_k - k p_(k-1).
 *
 * Upward recursion loses digits like rho^k away from the panel (rho: the Bernstein ellipse through t),
 * but multiplies them onto coefficients that a resolved density has small, and beyond `reach`
 * half-chords the panel's nodes serve as point strengths, charge/(z - zeta), and it is not used.
 *
 * Branch: the imaginary part of p_0 is the angle that the curve sweeps seen from z, for z outside the
 * body (to the right of the panel) or on the wall, which counts as outside. The principal value
 * jumps on the chord; a target above the chord but not above the curve has 2 pi taken off. The curve
 * stands above the chord by (1 - x^2) sum_j bulge_j P_j(x), x = Re s, known to (1 - x^2) slack_0, from
 * the tail of this sum, + slack_1, from the rounding of places.
 *
 * Flops per pair: a node 13 (1 division) for the first density and 8 for each further one; an order-1
 * panel 35 + 8 a term of the odd series (2 terms beyond 1750 lengths, 16 at `reach`); a near panel
 * about 60 + 20 a term, with one logarithm and one arctangent. Bytes: targets stay in the first cache, a
 * node is read once for each block of targets.
 */
#ifndef OFFBODY_CLOSED_FORM_H
#define OFFBODY_CLOSED_FORM_H

#include <math.h>

#define BLOCK 128      /* targets that share a pass over the panels, or panels over a target */
#define LANES 16       /* targets whose sums stay in registers */

/* One portable build, the widest vectors that the processor has, chosen when the module is loaded. */
#if defined(__x86_64__) && defined(__GNUC__) && !defined(__clang__) && defined(__linux__)
#include <features.h>
#if defined(__GLIBC__)
#define WIDEST_VECTORS __attribute__((target_clones("default", "avx2,fma", "arch=x86-64-v4")))
#endif
#endif
#ifndef WIDEST_VECTORS
#define WIDEST_VECTORS
#endif

#define TAU 6.283185307179586476925286766559

/* 1/k: the recursion would wait for divisions. */
static const double OVER[] = {0.0, 1.0, 1.0 / 2, 1.0 / 3, 1.0 / 4, 1.0 / 5, 1.0 / 6, 1.0 / 7,
                              1.0 / 8, 1.0 / 9, 1.0 / 10, 1.0 / 11, 1.0 / 12, 1.0 / 13, 1.0 / 14,
                              1.0 / 15, 1.0 / 16, 1.0 / 17, 1.0 / 18, 1.0 / 19, 1.0 / 20};

/* Where a panel's curve stands above its chord at x = Re s, in half-chords. */
static double curve_height(double x, int order, const double *bulge)
{
    double before = 1.0, here = x, sum = bulge[0];
    for (int k = 1; k < order; k++) {
        sum += bulge[k] * here;
        double next = ((2 * k + 1) * x * here - k * before) / (k + 1);
        before = here;
        here = next;
    }
    return (1.0 - x * x) * sum;
}

/* How well curve_height knows the wall at x. */
static double wall_slack(double x, const double *slack)
{
    return fmax(0.0, 1.0 - x * x) * slack[0] + slack[1];
}

/* p_0 ... p_(terms - 1) at one target. (ax, ay) = (a - z)/h and (bx, by) = (b - z)/h are kept apart
 * from t because near an end they are exact where 1 - t is not. */
static void panel_moments(double ax, double ay, double bx, double by, int terms, int order,
                          const double *bulge, const double *slack, double *re, double *im)
{
    double tx = -0.5 * (ax + bx), ty = -0.5 * (ay + by);
    double angle = atan2(by * ax - bx * ay, bx * ax + by * ay);
    if (fabs(tx) < 1.0 && angle > 0.0) {
        if (ty <= curve_height(tx, order, bulge) + wall_slack(tx, slack))
            angle -= TAU;
    }
    re[0] = 0.5 * log((bx * bx + by * by) / (ax * ax + ay * ay));
    im[0] = angle;
    if (terms > 1) {
        re[1] = tx * re[0] - ty * im[0] + 2.0;
        im[1] = tx * im[0] + ty * re[0];
    }
    for (int k = 1; k + 1 < terms; k++) {
        double down = k * OVER[k + 1], up = 1.0 + down;
        re[k + 1] = up * (tx * re[k] - ty * im[k]) - down * re[k - 1];
        im[k + 1] = up * (tx * im[k] + ty * re[k]) - down * im[k - 1];
    }
}

/* The moments of the panel from a to b at z, all of them pairs of doubles. On an end point the two
 * panels that meet there have logarithms that cancel; z is moved off it along their common outward
 * normal, for both alike. */
static void moments_at(const double *z, const double *a, const double *b, const double *normal_a,
                       const double *normal_b, double touch, int terms, int order,
                       const double *bulge, const double *slack, double *re, double *im)
{
    double chord_x = b[0] - a[0], chord_y = b[1] - a[1];
    double ax = a[0] - z[0], ay = a[1] - z[1], bx = b[0] - z[0], by = b[1] - z[1];
    double scale = 2.0 / (chord_x * chord_x + chord_y * chord_y);
    double gx = chord_x * scale, gy = -chord_y * scale; /* 1/h */
    if (ax * ax + ay * ay < touch * touch) {
        ax = -touch * normal_a[0], ay = -touch * normal_a[1];
        bx = ax + chord_x, by = ay + chord_y;
    } else if (bx * bx + by * by < touch * touch) {
        bx = -touch * normal_b[0], by = -touch * normal_b[1];
        ax = bx - chord_x, ay = by - chord_y;
    }
    panel_moments(ax * gx - ay * gy, ax * gy + ay * gx, bx * gx - by * gy, bx * gy + by * gx,
                  terms, order, bulge, slack, re, im);
}

/* t = (z - m)/h of n targets for one panel, (gx, gy) = 1/h. */
WIDEST_VECTORS
static void local_targets(int n, const double *restrict x, const double *restrict y, double mx,
                          double my, double gx, double gy, double *restrict tx,
                          double *restrict ty)
{
    for (int i = 0; i < n; i++) {
        double dx = x[i] - mx, dy = y[i] - my;
        tx[i] = dx * gx - dy * gy;
        ty[i] = dx * gy + dy * gx;
    }
}

/* t = (z - m)/h of one target for n panels. */
WIDEST_VECTORS
static void local_panels(int n, double x, double y, const double *restrict mx,
                         const double *restrict my, const double *restrict gx,
                         const double *restrict gy, double *restrict tx, double *restrict ty)
{
    for (int i = 0; i < n; i++) {
        double dx = x - mx[i], dy = y - my[i];
        tx[i] = dx * gx[i] - dy * gy[i];
        ty[i] = dx * gy[i] + dy * gx[i];
    }
}

/* far = 1 where |t|^2 > reach2, else 0; returns how many are not far, and the least |t|^2 of those
 * that are. Whole vectors of LANES are read and written. */
WIDEST_VECTORS
static int mark_far(int n, const double *restrict tx, const double *restrict ty, double reach2,
                    double *restrict far, double *least)
{
    double closest[LANES];
    int near = 0;
    for (int i = 0; i < LANES; i++)
        closest[i] = INFINITY;
    for (int first = 0; first < n; first += LANES) {
        const double *px = tx + first, *py = ty + first;
        double *flag = far + first;
        for (int i = 0; i < LANES; i++) {
            double t2 = px[i] * px[i] + py[i] * py[i];
            double counted = t2 > reach2 ? t2 : INFINITY;
            flag[i] = t2 > reach2 ? 1.0 : 0.0;
            closest[i] = counted < closest[i] ? counted : closest[i];
        }
    }
    for (int i = 0; i < n; i++)
        near += far[i] == 0.0;
    *least = closest[0];
    for (int i = 1; i < LANES; i++)
        *least = closest[i] < *least ? closest[i] : *least;
    return near;
}

/* re + i im += sum of charge/(z - node) over the nodes, for n targets, a multiple of LANES, that are
 * all far. Nodes and charges are complex: pairs of doubles. The sums stay in registers. */
WIDEST_VECTORS
static void add_nodes(int n, const double *restrict x, const double *restrict y, int count,
                      const double *restrict nodes, const double *restrict charges,
                      double *restrict re, double *restrict im)
{
    for (int first = 0; first < n; first += LANES) {
        double sum_re[LANES] = {0.0}, sum_im[LANES] = {0.0};
        const double *px = x + first, *py = y + first;
        double *to_re = re + first, *to_im = im + first;
        for (int j = 0; j < count; j++) {
            double nx = nodes[2 * j], ny = nodes[2 * j + 1];
            double cx = charges[2 * j], cy = charges[2 * j + 1];
            for (int i = 0; i < LANES; i++) {
                double dx = px[i] - nx, dy = py[i] - ny;
                double inverse = 1.0 / (dx * dx + dy * dy);
                sum_re[i] += (cx * dx + cy * dy) * inverse;
                sum_im[i] += (cy * dx - cx * dy) * inverse;
            }
        }
        for (int i = 0; i < LANES; i++) {
            to_re[i] += sum_re[i];
            to_im[i] += sum_im[i];
        }
    }
}

/* real + i imag = factor weight/(z - node) for one target and a row of nodes. */
WIDEST_VECTORS
static void write_nodes(int n, double x, double y, double fx, double fy, const double *restrict nx,
                        const double *restrict ny, const double *restrict weight,
                        double *restrict real, double *restrict imag)
{
    for (int j = 0; j < n; j++) {
        double dx = x - nx[j], dy = y - ny[j];
        double scale = weight[j] / (dx * dx + dy * dy);
        real[j] = (fx * dx + fy * dy) * scale;
        imag[j] = (fy * dx - fx * dy) * scale;
    }
}

/* re + i im = moments (terms) times a matrix (terms, n) of complex numbers, pairs of doubles. */
WIDEST_VECTORS
static void moments_by_modes(int terms, int n, const double *restrict moment_re,
                             const double *restrict moment_im, const double *restrict modes,
                             double *restrict re, double *restrict im)
{
    for (int j = 0; j < n; j++)
        re[j] = im[j] = 0.0;
    for (int k = 0; k < terms; k++) {
        const double *row = modes + 2 * k * n;
        double mx = moment_re[k], my = moment_im[k];
        for (int j = 0; j < n; j++) {
            re[j] += mx * row[2 * j] - my * row[2 * j + 1];
            im[j] += mx * row[2 * j + 1] + my * row[2 * j];
        }
    }
}

/* real + i imag = factor (re + i im) (wx + i wy) */
WIDEST_VECTORS
static void write_products(int n, double fx, double fy, const double *restrict re,
                           const double *restrict im, const double *restrict wx,
                           const double *restrict wy, double *restrict real,
                           double *restrict imag)
{
    for (int j = 0; j < n; j++) {
        double px = re[j] * wx[j] - im[j] * wy[j], py = re[j] * wy[j] + im[j] * wx[j];
        real[j] = fx * px - fy * py;
        imag[j] = fx * py + fy * px;
    }
}

/* The reciprocals far/(z - node) themselves, when several densities share them. Where far = 0 they
 * are zero, also at the node itself. */
WIDEST_VECTORS
static void reciprocals(int n, const double *x, const double *y, double nx, double ny,
                        const double *far, double *restrict re, double *restrict im)
{
    for (int i = 0; i < n; i++) {
        double dx = x[i] - nx, dy = y[i] - ny;
        double inverse = far[i] / (dx * dx + dy * dy + (1.0 - far[i]));
        re[i] = dx * inverse;
        im[i] = -dy * inverse;
    }
}

/* out += (cx + i cy) (re + i im) */
WIDEST_VECTORS
static void add_product(int n, double cx, double cy, const double *re, const double *im,
                        double *restrict out_re, double *restrict out_im)
{
    for (int i = 0; i < n; i++) {
        out_re[i] += cx * re[i] - cy * im[i];
        out_im[i] += cx * im[i] + cy * re[i];
    }
}

/* u = 1/t, and w = sum_(j>=1) u^2j/(2j + 1) up to the term ``last``, of far panels of order 1:
 * p_0 = -2 u (1 + w), p_1 = t p_0 + 2 = -2 w. Zero where far = 0. Only with ``last`` a constant is
 * the loop over pairs the vector loop. ``USE`` says what becomes of u and w. */
#define ODD_SERIES(last, USE)                                                                      \
    for (int i = 0; i < n; i++) {                                                                  \
        double inverse = far[i] / (tx[i] * tx[i] + ty[i] * ty[i] + (1.0 - far[i]));                \
        double ux = tx[i] * inverse, uy = -ty[i] * inverse;                                        \
        double vx = ux * ux - uy * uy, vy = 2.0 * ux * uy;                                         \
        double sx = 1.0 / (2 * (last) + 1), sy = 0.0;                                              \
        _Pragma("GCC unroll 17") for (int j = (last) - 1; j >= 1; j--) {                           \
            double next = sx * vx - sy * vy + 1.0 / (2 * j + 1);                                   \
            sy = sx * vy + sy * vx;                                                                \
            sx = next;                                                                             \
        }                                                                                          \
        double wx = sx * vx - sy * vy, wy = sx * vy + sy * vx;                                     \
        double px = ux + (ux * wx - uy * wy), py = uy + (ux * wy + uy * wx); /* p_0 = -2 p */      \
        USE                                                                                        \
    }

/* As many terms as double precision can see at the least |t|^2 of them all. */
#define FITTING_SERIES(USE)                                                                        \
    if (least > 1.2e7)                                                                             \
        ODD_SERIES(2, USE)                                                                         \
    else if (least > 5.5e4)                                                                        \
        ODD_SERIES(3, USE)                                                                         \
    else if (least > 3.5e3)                                                                        \
        ODD_SERIES(4, USE)                                                                         \
    else if (least > 2.2e2)                                                                        \
        ODD_SERIES(6, USE)                                                                         \
    else if (least > 35.0)                                                                         \
        ODD_SERIES(9, USE)                                                                         \
    else                                                                                           \
        ODD_SERIES(16, USE)

/* p_0 and p_1 themselves. */
WIDEST_VECTORS
static void far_moments(int n, const double *restrict tx, const double *restrict ty,
                        const double *restrict far, double least, double *restrict re0,
                        double *restrict im0, double *restrict re1, double *restrict im1)
{
    FITTING_SERIES(re0[i] = -2.0 * px; im0[i] = -2.0 * py; re1[i] = -2.0 * wx; im1[i] = -2.0 * wy;)
}

/* re + i im += (cx + i cy) p_0 for targets of one panel. */
WIDEST_VECTORS
static void add_constant(int n, const double *restrict tx, const double *restrict ty,
                         const double *restrict far, double least, double cx, double cy,
                         double *restrict re, double *restrict im)
{
    cx *= -2.0, cy *= -2.0;
    FITTING_SERIES(re[i] += cx * px - cy * py; im[i] += cx * py + cy * px;)
}

/* real + i imag = factor p_0 (wx + i wy) for panels of one target. */
WIDEST_VECTORS
static void write_constants(int n, const double *restrict tx, const double *restrict ty,
                            const double *restrict far, double least, double fx, double fy,
                            const double *restrict wx_, const double *restrict wy_,
                            double *restrict real, double *restrict imag)
{
    fx *= -2.0, fy *= -2.0;
    FITTING_SERIES(double qx = px * wx_[i] - py * wy_[i]; double qy = px * wy_[i] + py * wx_[i];
                   real[i] = fx * qx - fy * qy; imag[i] = fx * qy + fy * qx;)
}

#endif
