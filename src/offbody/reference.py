"""The kernels again in plain NumPy: same names, same arguments, same mathematics.

For tests and benchmarks alone, as second opinion and as honest opponent: real arithmetic where it
is the faster, a logarithm and an arctangent from the vector library instead of NumPy's complex
logarithm, sums by BLAS, blocks of pairs that stay in the second cache, near pairs gathered and done
together. ``kernels/closed_form.h`` has the formulas, ``kernels/_kernels.pyx`` the signs and shapes.
"""

import numpy as np

PAIRS = 32768   # of targets and sources in a block: the fastest of 2^13 to 2^16
ON_END = 1e-14  # of the whole's size: nearer than this, a target is ON an end point
OVER_TWO_PI_I = 1.0 / (2j * np.pi)


def field(geometry, coefficients, charges, z, out):
    """Add the field of R densities at the targets z to ``out`` (R, len(z))."""
    if not len(z) or not len(charges):
        return
    terms = coefficients.shape[2]
    with np.errstate(all="ignore"):
        far = _far_constants if _order(geometry) == 1 else _far_nodes
        target, panel = far(geometry, coefficients, charges, z, out)
        for part in _blocks(len(target), 1):
            total = np.zeros((len(charges), len(target[part])), complex)
            for k, moment in enumerate(_moments(geometry, z[target[part]], panel[part], terms)):
                for row, coefficient in zip(total, coefficients[:, :, k], strict=True):
                    row += coefficient.take(panel[part]) * moment
            for row, values in zip(out, total, strict=True):
                row.real += np.bincount(target[part], values.real, len(z))
                row.imag += np.bincount(target[part], values.imag, len(z))


def _far_nodes(geometry, coefficients, charges, z, out):
    """Add what far panels give by their nodes; returns the near pairs, targets and panels."""
    target, panel = _near_pairs(geometry, z)
    starts = np.searchsorted(target, np.arange(len(z) + 1))
    for part in _blocks(len(z), len(geometry[4])):
        dx, dy, distance2 = _differences(z[part], geometry[4])
        near = slice(starts[part.start], starts[part.stop])
        _by_panel(geometry, distance2)[target[near] - part.start, panel[near]] = np.inf
        _add_products(charges, *_reciprocals(dx, dy, distance2), out[:, part])
    return target, panel


def _far_constants(geometry, coefficients, charges, z, out):
    """The same for panels of order 1, by the closed form itself."""
    pairs = []
    for part in _blocks(len(z), len(geometry[0])):
        moments, target, panel = _far_moments(geometry, z[part], coefficients.shape[2])
        for k, (re, im) in enumerate(moments):
            re[target, panel] = im[target, panel] = 0.0
            _add_products(coefficients[:, :, k], re, im, out[:, part])
        pairs.append((target + part.start, panel))
    return np.concatenate(pairs, axis=1)


def influence(geometry, modes, tangents, z, turn, real, imag):
    """Write turn[i] times the complex velocity at z[i] of a unit vortex strength at each place."""
    work = _constant_influence if _order(geometry) == 1 else _node_influence
    with np.errstate(all="ignore"):
        if len(z):
            work(geometry, modes, tangents, z, OVER_TWO_PI_I * turn, real, imag)


def _constant_influence(geometry, modes, tangents, z, factor, real, imag):
    """Order 1: p_0 times the outer product of two factors, of the target and of the panel."""
    of_panel = -modes[:, 0, 0] * tangents[:, 0].conj()
    pairs = []
    for part in _blocks(len(z), len(of_panel)):
        ((re, im),), target, panel = _far_moments(geometry, z[part], 1)
        # Each part of the outer product is one matrix product.
        x = _parts(factor[part], sign=-1) @ _parts(of_panel).T
        y = _parts(factor[part]) @ _parts(of_panel)[:, ::-1].T
        np.multiply(x, re, out=real[part])
        real[part] -= y * im
        np.multiply(x, im, out=imag[part])
        imag[part] += np.multiply(y, re, out=y)
        pairs.append((target + part.start, panel))
    target, panel = np.concatenate(pairs, axis=1)
    moment, = _moments(geometry, z[target], panel, 1)
    values = factor[target] * of_panel[panel] * moment
    real[target, panel], imag[target, panel] = values.real, values.imag


def _node_influence(geometry, modes, tangents, z, factor, real, imag):
    """Higher orders: nodes far away, closed forms near, panel by panel for BLAS."""
    nodes, weights, order = geometry[4], geometry[6], _order(geometry)
    panels, terms, places = modes.shape
    real, imag = (part.reshape(len(z), panels, places) for part in (real, imag))
    real[:, :, order:] = imag[:, :, order:] = 0.0
    for part in _blocks(len(z), len(nodes)):
        away = z[part, None].conj() - nodes.conj()
        distance2 = _square(away)
        away *= factor[part, None]
        scale = _by_panel(geometry, np.divide(weights, distance2, out=distance2))
        np.multiply(_by_panel(geometry, away.real), scale, out=real[part, :, :order])
        np.multiply(_by_panel(geometry, away.imag), scale, out=imag[part, :, :order])
    target, panel = _near_pairs(geometry, z)
    by_panel = np.argsort(panel, kind="stable")
    target, panel = target[by_panel], panel[by_panel]
    moments = np.empty((len(target), terms), complex)
    for k, moment in enumerate(_moments(geometry, z[target], panel, terms)):
        moments[:, k] = moment
    moments *= -factor[target, None]
    starts = np.searchsorted(panel, np.arange(panels + 1))
    for p in range(panels):
        part = slice(starts[p], starts[p + 1])
        values = moments[part] @ (modes[p] * tangents[p].conj())
        real[target[part], p], imag[target[part], p] = values.real, values.imag


def point_field(nodes, charges, z, out):
    """Add sum_j charges[r, j]/(z - nodes[j]) to ``out`` (R, len(z)); infinite on a node."""
    with np.errstate(all="ignore"):
        for part in _blocks(len(z), len(nodes)):
            differences = _differences(z[part], nodes)
            _add_products(charges, *_reciprocals(*differences), out[:, part])


def enclosing_body(geometry, starts, boxes, z, body):
    """Write the index of the body that holds each target, or -1: a wall counts as outside."""
    body[:] = -1
    for which, (x0, x1, y0, y1) in enumerate(boxes):
        boxed = (z.real >= x0) & (z.real <= x1) & (z.imag >= y0) & (z.imag <= y1)
        candidates = np.flatnonzero(boxed & (body < 0))
        panels = slice(starts[which], starts[which + 1])
        for part in _blocks(len(candidates), panels.stop - panels.start):
            held = _holds(geometry, panels, z[candidates[part]])
            body[candidates[part][held]] = which


def _holds(geometry, panels, z):
    """Which of the targets the body with these panels holds."""
    a, b = geometry[0][panels], geometry[1][panels]
    bulge, slack, h = geometry[7][panels], geometry[8][panels], 0.5 * (b - a)
    x, y = z.real[:, None], z.imag[:, None]
    with np.errstate(all="ignore"):
        slope = (b - a).real / (b - a).imag
        spans = (a.imag > y) != (b.imag > y)
        within = (np.count_nonzero(spans & (x < a.real + slope * (y - a.imag)), axis=1) % 2) == 1
    dx, dy, _ = _differences(z, 0.5 * (a + b))
    t_re, t_im = _over(h, dx, dy)
    band = np.abs(bulge).sum(axis=1) + slack.sum(axis=1)
    target, panel = np.nonzero(
        (np.abs(t_re) <= 1.0 + 1e-9 + slack[:, 1]) & (np.abs(t_im) <= band)
    )
    x = t_re[target, panel]
    above = t_im[target, panel] - _curve_height(x, bulge[panel])
    # Of each target's panels the nearest comes last and is the one that stays.
    order = np.argsort(-np.abs(above) * np.abs(h[panel]), kind="stable")
    within[target[order]] = (above > _wall_slack(x, slack[panel]))[order]
    return within


def _order(geometry):
    return geometry[7].shape[1]


def _blocks(targets, sources):
    """Slices of targets that make blocks of PAIRS with so many sources."""
    step = max(1, PAIRS // max(1, sources))
    return [slice(first, min(first + step, targets)) for first in range(0, targets, step)]


def _parts(values, sign=1):
    """(..., 2) real parts, and imaginary parts times a sign."""
    return np.stack([values.real, sign * values.imag], axis=-1)


def _differences(z, places):
    """(len(z), len(places)) the parts of z - places, and their sum of squares."""
    dx = np.subtract(z.real[:, None], places.real)
    dy = np.subtract(z.imag[:, None], places.imag)
    distance2 = dx * dx
    distance2 += dy * dy
    return dx, dy, distance2


def _over(h, dx, dy):
    """The parts of (dx + i dy)/h, h along the last axis."""
    inverse = 1.0 / h
    return dx * inverse.real - dy * inverse.imag, dx * inverse.imag + dy * inverse.real


def _reciprocals(dx, dy, distance2):
    """The parts of 1/(dx + i dy), in place."""
    dx /= distance2
    dy /= -distance2
    return dx, dy


def _add_products(factors, re, im, out):
    """out (R, T) += factors (R, S) times (re + i im) (T, S), as two real matrix products."""
    both = np.concatenate([factors.real, factors.imag]).T
    of_re, of_im, half = re @ both, im @ both, len(factors)
    out.real += (of_re[:, :half] - of_im[:, half:]).T
    out.imag += (of_re[:, half:] + of_im[:, :half]).T


def _by_panel(geometry, values):
    """(T, P, order) view of the values (T, N) at nodes."""
    return values.reshape(len(values), -1, _order(geometry))


def _near_pairs(geometry, z):
    """Targets and panels of all near pairs, target by target; a NaN is near to all."""
    a, b, reach = geometry[0], geometry[1], geometry[9]
    limit = reach * reach * _square(0.5 * (b - a))
    pairs = [np.empty((2, 0), np.intp)]
    for part in _blocks(len(z), len(a)):
        distance2 = _differences(z[part], 0.5 * (a + b))[2]
        target, panel = np.divmod(np.flatnonzero(~(distance2 > limit)), len(a))
        pairs.append((target + part.start, panel))
    return np.concatenate(pairs, axis=1)


def _square(z):
    """Squared absolute values."""
    square = z.real * z.real
    square += z.imag * z.imag
    return square


def _far_moments(geometry, z, terms):
    """p_0, and p_1 if there are two terms, of all panels of order 1: parts (len(z), P).

    p_0 = -2 artanh(1/t), its parts a real artanh and a real arctangent that lose no digits at any
    distance; p_1 by the odd series, as in the kernel. Then targets and panels of the near pairs,
    for which this is not the form to use.
    """
    a, b, reach = geometry[0], geometry[1], geometry[9]
    t = z[:, None] - 0.5 * (a + b)
    t *= 1.0 / (b - a)  # half of the panel's local coordinate
    size = _square(t)
    near = np.divmod(np.flatnonzero(~(size > 0.25 * reach * reach)), len(a))
    re = np.subtract(-0.25, size)
    np.divide(t.real, re, out=re)
    np.arctanh(re, out=re)
    im = np.subtract(size, 0.25, out=size)
    np.divide(t.imag, im, out=im)
    np.arctan(im, out=im)
    if terms == 1:
        return [(re, im)], *near
    second = _far_p1(0.25 / (t * t), int(np.ceil(16.0 / np.log10(reach**2))))
    return [(re, im), (second.real.copy(), second.imag.copy())], *near


def _far_p1(v, last):
    """p_1 = -2 sum_(j>=1) v^j/(2j + 1), v = t^-2."""
    total = np.full_like(v, 1.0 / (2 * last + 1))
    for j in range(last - 1, 0, -1):
        total *= v
        total += 1.0 / (2 * j + 1)
    return -2.0 * total * v


def _moments(geometry, z, panel, terms):
    """Yield p_0 ... p_(terms - 1) of panel[i] at z[i], by the closed form."""
    to_a, to_b = _to_ends(geometry, z, panel)
    t = -0.5 * (to_a + to_b)
    cross = to_b.imag * to_a.real - to_b.real * to_a.imag
    dot = to_b.real * to_a.real + to_b.imag * to_a.imag
    angle = np.arctan2(cross, dot)
    angle[_under_curve(geometry, t, panel, angle)] -= 2.0 * np.pi
    before, here = None, 0.5 * np.log(_square(to_b) / _square(to_a)) + 1j * angle
    yield here
    for k in range(terms - 1):
        following = t * here
        if k == 0:
            following += 2.0
        else:
            following *= (2.0 * k + 1.0) / (k + 1.0)
            before *= k / (k + 1.0)
            following -= before
        before, here = here, following
        yield here


def _to_ends(geometry, z, panel):
    """(a - z)/h and (b - z)/h; a target on an end moves off it along the outward normal there."""
    a, b, normal_a, normal_b = geometry[:4]
    touch = ON_END * geometry[10]
    to_a, to_b = a.take(panel) - z, b.take(panel) - z
    on_a = np.abs(to_a) < touch
    on_b = (np.abs(to_b) < touch) & ~on_a
    if on_a.any():
        to_a[on_a] = -touch * normal_a[panel[on_a]]
        to_b[on_a] = to_a[on_a] + (b - a)[panel[on_a]]
    if on_b.any():
        to_b[on_b] = -touch * normal_b[panel[on_b]]
        to_a[on_b] = to_b[on_b] - (b - a)[panel[on_b]]
    inverse = (2.0 / (b - a)).take(panel)
    return to_a * inverse, to_b * inverse


def _under_curve(geometry, t, panel, angle):
    """Indices of targets above the chord, but not above the curve."""
    bulge, slack = geometry[7], geometry[8]
    above = np.flatnonzero((np.abs(t.real) < 1.0) & (angle > 0.0))
    x, panel = t.real[above], panel[above]
    height = _curve_height(x, bulge[panel]) + _wall_slack(x, slack[panel])
    return above[t.imag[above] <= height]


def _wall_slack(x, slack):
    """How well _curve_height knows the wall at x (n,), slack (n, 2)."""
    return np.maximum(0.0, 1.0 - x * x) * slack[:, 0] + slack[:, 1]


def _curve_height(x, bulge):
    """Where the curves of ``bulge`` (n, order) stand above their chords at x (n,)."""
    before, here, total = 1.0, x, bulge[:, 0].copy()
    for k in range(1, bulge.shape[1]):
        total += bulge[:, k] * here
        before, here = here, ((2 * k + 1) * x * here - k * before) / (k + 1)
    return (1.0 - x * x) * total
