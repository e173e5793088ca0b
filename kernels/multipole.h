/* Expansions of a sum of poles, and the sums that they leave to be done one by one.
 *
 * In a square box of side d about c, with u = (zeta - c)/d and w = (z - c)/d,
 *
 *     sum_j q_j/(z - zeta_j) = (1/d) sum_k a_k w^-(k+1),   a_k = sum_j q_j u_j^k,   outside,
 *                            = (1/d) sum_l b_l w^l,        b_l = -sum_j q_j u_j^-(l+1), inside
 *
 * a box that is clear of the poles (Greengard and Rokhlin, J. Comput. Phys. 73 (1987) 325-348).
 * Each of the three translations between boxes is a REAL matrix of binomials, the same for all
 * directions, between two complex diagonals that hold the direction. With delta the way from the
 * one centre to the other, in units of the larger side:
 *
 *     across, to a box of the same side    b_l = (-delta)^-l sum_k C(k+l, l) delta^-(k+1) a_k
 *     up, to the box of twice the side     a_k = delta^k sum_j C(k, j) (2 delta)^-j a_j
 *     down, to a box of half the side      b_m = (2 delta)^-m/2 sum_l C(l, m) delta^l b_l
 *
 * which halves their cost and keeps the matrix in the first cache. Expansions are planar, `terms`
 * real parts and then `terms` imaginary ones, `terms` a multiple of WIDTH.
 *
 * Flops: a translation 4 terms^2 + 16 terms; a target 8 for each term of an expansion, and 16 with
 * half a division for each pole; a pole 8 for each term. Bytes: none leaves the first cache.
 */
#ifndef OFFBODY_MULTIPOLE_H
#define OFFBODY_MULTIPOLE_H

#if defined(__GNUC__)
#pragma GCC diagnostic ignored "-Wunused-function" /* closed_form.h has more than is used here */
#endif

#include "closed_form.h"

#define MOST_TERMS 64      /* of an expansion */
#define MOST_MOMENTS 32    /* of a panel */

/* WIDTH numbers that are worked on together; elsewhere the same code runs number by number. */
#if defined(__GNUC__)
#define WIDTH 8
typedef double vector __attribute__((vector_size(64), aligned(8), may_alias));
#else
#define WIDTH 1
typedef double vector;
#endif

#define AT(array, i) (*(vector *)((array) + (i)))
#define OF(array, i) (*(const vector *)((array) + (i)))

/* w = (z - c)/d for n targets. */
WIDEST_VECTORS
static void into_box(int n, const double *x, const double *y, double cx, double cy, double d,
                     double *restrict wx, double *restrict wy)
{
    double over = 1.0 / d;
    for (int i = 0; i < n; i += WIDTH) {
        AT(wx, i) = (OF(x, i) - cx) * over;
        AT(wy, i) = (OF(y, i) - cy) * over;
    }
}

/* d/(z - c) */
WIDEST_VECTORS
static void out_of_box(int n, const double *x, const double *y, double cx, double cy, double d,
                       double *restrict wx, double *restrict wy)
{
    for (int i = 0; i < n; i += WIDTH) {
        vector dx = OF(x, i) - cx, dy = OF(y, i) - cy;
        vector scale = d / (dx * dx + dy * dy);
        AT(wx, i) = dx * scale;
        AT(wy, i) = -(dy * scale);
    }
}

/* out += factor sum_(k < count) c_k w^k, by Horner's rule; two vectors hide its latency. */
WIDEST_VECTORS
static void add_series(int n, const double *wx, const double *wy, int count, const double *cx,
                       const double *cy, double factor, double *restrict re, double *restrict im)
{
    const vector zero = {0.0};
    int i = 0;
    for (; i + WIDTH < n; i += 2 * WIDTH) {
        vector ux = OF(wx, i), uy = OF(wy, i), vx = OF(wx, i + WIDTH), vy = OF(wy, i + WIDTH);
        vector sx = zero, sy = zero, tx = zero, ty = zero;
        for (int k = count - 1; k >= 0; k--) {
            vector next = sx * ux - (sy * uy - cx[k]), other = tx * vx - (ty * vy - cx[k]);
            sy = sx * uy + (sy * ux + cy[k]);
            ty = tx * vy + (ty * vx + cy[k]);
            sx = next;
            tx = other;
        }
        AT(re, i) += factor * sx;
        AT(im, i) += factor * sy;
        AT(re, i + WIDTH) += factor * tx;
        AT(im, i + WIDTH) += factor * ty;
    }
    if (i < n) {
        vector ux = OF(wx, i), uy = OF(wy, i), sx = zero, sy = zero;
        for (int k = count - 1; k >= 0; k--) {
            vector next = sx * ux - (sy * uy - cx[k]);
            sy = sx * uy + (sy * ux + cy[k]);
            sx = next;
        }
        AT(re, i) += factor * sx;
        AT(im, i) += factor * sy;
    }
}

/* out += (re + i im) (wx + i wy): what an expansion outside lacks after Horner's rule. */
WIDEST_VECTORS
static void add_times(int n, const double *re, const double *im, const double *wx, const double *wy,
                      double *restrict out_re, double *restrict out_im)
{
    for (int i = 0; i < n; i += WIDTH) {
        vector a = OF(re, i), b = OF(im, i), x = OF(wx, i), y = OF(wy, i);
        AT(out_re, i) += a * x - b * y;
        AT(out_im, i) += a * y + b * x;
    }
}

/* out_k += sum_j v_j w_j^k, k < terms. `room` holds WIDTH partial sums for each k and part. */
WIDEST_VECTORS
static void add_powers(int n, const double *wx, const double *wy, const double *vx,
                       const double *vy, int terms, double *restrict room, double *restrict out)
{
    const vector zero = {0.0};
    for (int k = 0; k < 2 * terms * WIDTH; k += WIDTH)
        AT(room, k) = zero;
    for (int i = 0; i < n; i += WIDTH) {
        vector ux = OF(wx, i), uy = OF(wy, i), px = OF(vx, i), py = OF(vy, i);
        for (int k = 0; k < terms; k++) {
            AT(room, 2 * k * WIDTH) += px;
            AT(room, (2 * k + 1) * WIDTH) += py;
            vector next = px * ux - py * uy;
            py = px * uy + py * ux;
            px = next;
        }
    }
    for (int k = 0; k < terms; k++) {
        double re = 0.0, im = 0.0;
        for (int i = 0; i < WIDTH; i++) {
            re += room[2 * k * WIDTH + i];
            im += room[(2 * k + 1) * WIDTH + i];
        }
        out[k] += re;
        out[terms + k] += im;
    }
}

/* to += after * (matrix^T (before * from)): one translation of one expansion. */
WIDEST_VECTORS
static void translate(int terms, const double *from, const double *before, const double *matrix,
                      const double *after, double *restrict to)
{
    double x[MOST_TERMS], y[MOST_TERMS];
    const vector zero = {0.0};
    for (int k = 0; k < terms; k += WIDTH) {
        vector ax = OF(from, k), ay = OF(from, terms + k);
        vector px = OF(before, k), py = OF(before, terms + k);
        AT(x, k) = ax * px - ay * py;
        AT(y, k) = ax * py + ay * px;
    }
    int l = 0;
    for (; l + WIDTH < terms; l += 2 * WIDTH) {
        vector sx = zero, sy = zero, tx = zero, ty = zero;
        for (int k = 0; k < terms; k++) {
            vector m = OF(matrix, k * terms + l), next = OF(matrix, k * terms + l + WIDTH);
            sx += m * x[k];
            sy += m * y[k];
            tx += next * x[k];
            ty += next * y[k];
        }
        vector px = OF(after, l), py = OF(after, terms + l);
        AT(to, l) += sx * px - sy * py;
        AT(to, terms + l) += sx * py + sy * px;
        px = OF(after, l + WIDTH), py = OF(after, terms + l + WIDTH);
        AT(to, l + WIDTH) += tx * px - ty * py;
        AT(to, terms + l + WIDTH) += tx * py + ty * px;
    }
    if (l < terms) {
        vector sx = zero, sy = zero;
        for (int k = 0; k < terms; k++) {
            vector m = OF(matrix, k * terms + l);
            sx += m * x[k];
            sy += m * y[k];
        }
        vector px = OF(after, l), py = OF(after, terms + l);
        AT(to, l) += sx * px - sy * py;
        AT(to, terms + l) += sx * py + sy * px;
    }
}

/* out += sum_j q_j/(z - zeta_j) over m poles for n targets, none on a pole. Two poles share a
 * division. */
WIDEST_VECTORS
static void add_poles(int n, const double *x, const double *y, int m, const double *px,
                      const double *py, const double *qx, const double *qy, double *restrict re,
                      double *restrict im)
{
    for (int i = 0; i < n; i += WIDTH) {
        vector zx = OF(x, i), zy = OF(y, i), sx = OF(re, i), sy = OF(im, i);
        int j = 0;
        for (; j + 1 < m; j += 2) {
            vector ax = zx - px[j], ay = zy - py[j], bx = zx - px[j + 1], by = zy - py[j + 1];
            vector a = ax * ax + ay * ay, b = bx * bx + by * by;
            vector both = 1.0 / (a * b);
            a *= both;
            b *= both;
            sx += (ax * qx[j] + ay * qy[j]) * b + (bx * qx[j + 1] + by * qy[j + 1]) * a;
            sy += (ax * qy[j] - ay * qx[j]) * b + (bx * qy[j + 1] - by * qx[j + 1]) * a;
        }
        if (j < m) {
            vector ax = zx - px[j], ay = zy - py[j], one = 1.0 / (ax * ax + ay * ay);
            sx += (ax * qx[j] + ay * qy[j]) * one;
            sy += (ax * qy[j] - ay * qx[j]) * one;
        }
        AT(re, i) = sx;
        AT(im, i) = sy;
    }
}

/* The same for targets of which `far` leaves some out, and for several densities, whose sums and
 * charges lie `stride` and `poles` apart. */
WIDEST_VECTORS
static void add_far_poles(int n, const double *x, const double *y, const double *far, int m,
                          const double *px, const double *py, const double *qx, const double *qy,
                          int densities, long poles, int stride, double *restrict re,
                          double *restrict im)
{
    for (int i = 0; i < n; i += WIDTH) {
        vector zx = OF(x, i), zy = OF(y, i), chosen = OF(far, i);
        for (int j = 0; j < m; j++) {
            vector ax = zx - px[j], ay = zy - py[j];
            vector one = chosen / (ax * ax + ay * ay + (1.0 - chosen));
            ax *= one;
            ay *= one;
            for (int r = 0; r < densities; r++) {
                double cx = qx[r * poles + j], cy = qy[r * poles + j];
                AT(re, r * stride + i) += ax * cx + ay * cy;
                AT(im, r * stride + i) += ax * cy - ay * cx;
            }
        }
    }
}

/* The end points (ax, ay), (bx, by) of a panel seen from z, in half-chords, as `moments_at` has
 * them: z is moved off an end point, outward. */
static void ends_from(const double *z, const double *a, const double *b, const double *normal_a,
                      const double *normal_b, double touch, double *seen)
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
    seen[0] = ax * gx - ay * gy, seen[1] = ax * gy + ay * gx;
    seen[2] = bx * gx - by * gy, seen[3] = bx * gy + by * gx;
}

/* out = sum_k c_k p_k(t) at n targets near a panel, by the recursion of closed_form.h from p_0; c
 * has `terms` complex numbers for each of several densities, which lie `between` numbers apart. */
WIDEST_VECTORS
static void sum_moments(int n, const double *tx, const double *ty, const double *re,
                        const double *im, int terms, const double *c, int densities, long between,
                        int stride, double *restrict out_re, double *restrict out_im)
{
    double mx[MOST_MOMENTS * WIDTH], my[MOST_MOMENTS * WIDTH];
    const vector zero = {0.0};
    for (int i = 0; i < n; i += WIDTH) {
        vector x = OF(tx, i), y = OF(ty, i), hx = OF(re, i), hy = OF(im, i), bx = zero, by = zero;
        AT(mx, 0) = hx;
        AT(my, 0) = hy;
        for (int k = 0; k + 1 < terms; k++) {
            double down = k * OVER[k + 1], up = 1.0 + down, more = k == 0 ? 2.0 : 0.0;
            vector nx = up * (x * hx - y * hy) - (down * bx - more);
            vector ny = up * (x * hy + y * hx) - down * by;
            bx = hx;
            by = hy;
            hx = nx;
            hy = ny;
            AT(mx, (k + 1) * WIDTH) = hx;
            AT(my, (k + 1) * WIDTH) = hy;
        }
        for (int r = 0; r < densities; r++) {
            const double *cr = c + 2 * r * between;
            vector sx = zero, sy = zero;
            for (int k = 0; k < terms; k++) {
                vector px = OF(mx, k * WIDTH), py = OF(my, k * WIDTH);
                sx += cr[2 * k] * px - cr[2 * k + 1] * py;
                sy += cr[2 * k] * py + cr[2 * k + 1] * px;
            }
            AT(out_re, r * stride + i) = sx;
            AT(out_im, r * stride + i) = sy;
        }
    }
}

#endif
