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
 * stands above the chord by (1 - x^2) sum_j bulge_j P_j(x), x = Re s, known to `slack`.
 *
 * Flops per pair: a node 9 (1 division) for the first density and 8 for each further one; an order-1
 * panel 10 + 8 a term of the odd series (two terms at 1e8 lengths, 13 at `reach`); a near panel about
 * 60 + 20 a term, with one logarithm and one arctangent. Bytes: targets stay in the first cache, a
 * node is read once for each block of targets.
 */
#ifndef OFFBODY_CLOSED_FORM_H
#define OFFBODY_CLOSED_FORM_H

#include <math.h>

#define BLOCK 128      /* targets that share a pass over the panels */

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

/* p_0 ... p_(terms - 1) at one target. (ax, ay) = (a - z)/h and (bx, by) = (b - z)/h are kept apart
 * from t because near an end they are exact where 1 - t is not. */
static void panel_moments(double ax, double ay, double bx, double by, int terms, int order,
                          const double *bulge, double slack, double *re, double *im)
{
    double tx = -0.5 * (ax + bx), ty = -0.5 * (ay + by);
    double angle = atan2(by * ax - bx * ay, bx * ax + by * ay);
    if (ty > -slack && fabs(tx) < 1.0 && angle > 0.0) {
        if (ty <= curve_height(tx, order, bulge) + slack * (1.0 - tx * tx))
            angle -= TAU;
    }
    re[0] = 0.5 * log((bx * bx + by * by) / (ax * ax + ay * ay));
    im[0] = angle;
    if (terms > 1) {
        re[1] = tx * re[0] - ty * im[0] + 2.0;
        im[1] = tx * im[0] + ty * re[0];
    }
    for (int k = 1; k + 1 < terms; k++) {
        double up = (2.0 * k + 1.0) / (k + 1.0), down = k / (k + 1.0);
        re[k + 1] = up * (tx * re[k] - ty * im[k]) - down * re[k - 1];
        im[k + 1] = up * (tx * im[k] + ty * re[k]) - down * im[k - 1];
    }
}

/* 1 for the targets of a block farther than sqrt(reach2) from (mx, my), 0 for the others; returns
 * how many are near, and the least squared distance of the far ones. */
WIDEST_VECTORS
static int mark_far(int n, const double *x, const double *y, double mx, double my, double reach2,
                    double *far, double *least)
{
    double near = 0.0, closest = INFINITY;
    for (int i = 0; i < n; i++) {
        double dx = x[i] - mx, dy = y[i] - my, d2 = dx * dx + dy * dy;
        far[i] = d2 > reach2 ? 1.0 : 0.0;
    }
    for (int i = 0; i < n; i++) {
        double dx = x[i] - mx, dy = y[i] - my, d2 = dx * dx + dy * dy;
        double counted = d2 > reach2 ? d2 : INFINITY;
        near += 1.0 - far[i];
        closest = counted < closest ? counted : closest;
    }
    *least = closest;
    return (int)near;
}

/* re + i im += charge/(z - node), charge = cx + i cy, for a block of targets that are all far. */
WIDEST_VECTORS
static void add_node(int n, const double *x, const double *y, double nx, double ny, double cx,
                     double cy, double *restrict re, double *restrict im)
{
    for (int i = 0; i < n; i++) {
        double dx = x[i] - nx, dy = y[i] - ny;
        double inverse = 1.0 / (dx * dx + dy * dy);
        re[i] += (cx * dx + cy * dy) * inverse;
        im[i] += (cy * dx - cx * dy) * inverse;
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

/* p_0, and p_1 if wanted, of a panel of order 1 far away, by the odd series in 1/t:
 * p_0 = -2 sum_j t^-(2j+1)/(2j+1), p_1 = t p_0 + 2 = -2 sum_(j>=1) t^-2j/(2j+1). Zero where far = 0. */
WIDEST_VECTORS
static void far_moments(int n, const double *x, const double *y, double mx, double my, double hx,
                        double hy, const double *far, int last, double *restrict re0,
                        double *restrict im0, double *restrict re1, double *restrict im1)
{
    for (int i = 0; i < n; i++) {
        double dx = x[i] - mx, dy = y[i] - my;
        double inverse = far[i] / (dx * dx + dy * dy + (1.0 - far[i]));
        double ux = (hx * dx + hy * dy) * inverse, uy = (hy * dx - hx * dy) * inverse;
        double vx = ux * ux - uy * uy, vy = 2.0 * ux * uy;
        double sx = 1.0 / (2 * last + 1), sy = 0.0;
        for (int j = last - 1; j >= 1; j--) {
            double next = sx * vx - sy * vy + 1.0 / (2 * j + 1);
            sy = sx * vy + sy * vx;
            sx = next;
        }
        double wx = sx * vx - sy * vy, wy = sx * vy + sy * vx; /* p_1 = -2 w */
        re0[i] = -2.0 * (ux * (1.0 + wx) - uy * wy);
        im0[i] = -2.0 * (ux * wy + uy * (1.0 + wx));
        re1[i] = -2.0 * wx;
        im1[i] = -2.0 * wy;
    }
}

/* The last term of that series that double precision can see at a squared distance of t2. */
static int last_term(double t2)
{
    int last = 1;
    double size = 1.0;
    while (last < 24) {
        size /= t2;
        if (size < 1e-16 * (2 * last + 1))
            break;
        last++;
    }
    return last;
}

#endif
