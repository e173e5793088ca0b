"""Streamlines, all those of one call at once, by SciPy's eighth-order Runge-Kutta steps."""

import numpy as np
from scipy.integrate import DOP853

POINTS_PER_LENGTH = 400  # kept along a line
ACCURACY = 1e-9          # of the length, per step
SLOW = 1e-2              # speeds well below this shorten the step, so that rest is neared smoothly
REST = 1e-5              # slower than this a line ends


def trace(model, starts, direction, length, domain, both_ways):
    """A list of (k, 2) arrays, one per start; see Model.streamlines."""
    z = starts[:, 0] + 1j * starts[:, 1]
    velocity = model._field(direction)
    lines = _one_way(velocity, z, length, domain)
    if both_ways:
        back = _one_way(velocity, z, -length, domain)
        lines = [np.concatenate([b[:0:-1], f]) for b, f in zip(back, lines, strict=True)]
    return [np.stack([line.real, line.imag], axis=-1) for line in lines]


def _one_way(velocity, z, length, domain):
    """Complex points of each line, from its start to where it ends."""
    usable = _usable(velocity, z, domain)
    pieces = [[z[k : k + 1]] if usable[k] else [z[:0]] for k in range(len(z))]
    live = np.flatnonzero(usable)
    place, run, step = z[live], 0.0, None
    spacing = abs(length) / POINTS_PER_LENGTH
    while len(live) and run < abs(length) * (1 - 1e-12):
        solver = DOP853(
            _right_hand_side(velocity, np.sign(length)), run, _apart(place), abs(length),
            rtol=1e-12, atol=ACCURACY * abs(length), max_step=abs(length) / 20, first_step=step,
        )
        ended = np.zeros(len(live), bool)
        while solver.status == "running" and not ended.any():
            solver.step()
            if solver.status == "failed":
                ended[:] = True
                break
            points = _between(solver, spacing)
            good = _usable(velocity, points.ravel(), domain).reshape(points.shape)
            good = np.logical_and.accumulate(good, axis=0)
            for column, line in enumerate(live):
                pieces[line].append(points[good[:, column], column])
            ended = ~good[-1]
        run = solver.t
        step = min(solver.step_size or spacing, max(abs(length) - run, spacing))
        step = min(step, abs(length) - run) or None
        live, place = live[~ended], _together(solver.y)[~ended]
    return [np.concatenate(parts) for parts in pieces]


def _right_hand_side(velocity, sign):
    """Unit velocity, slowed near rest; none inside a body, so that a step into one is refused."""

    def derivative(_, state):
        w = np.nan_to_num(velocity(_together(state)))
        return _apart(sign * w.conj() / np.sqrt(w.real**2 + w.imag**2 + SLOW**2))

    return derivative


def _between(solver, spacing):
    """(k, lines) complex points within the last step, the last of them its end."""
    count = max(1, int(np.ceil((solver.t - solver.t_old) / spacing - 1e-9)))
    run = np.linspace(solver.t_old, solver.t, count + 1)[1:]
    return _together(solver.dense_output()(run)).T


def _usable(velocity, z, domain):
    """Where a line may go on: outside bodies, not at rest, within the domain."""
    good = np.abs(velocity(z)) > REST
    if domain is not None:
        x0, x1, y0, y1 = domain
        good &= (z.real >= x0) & (z.real <= x1) & (z.imag >= y0) & (z.imag <= y1)
    return good


def _apart(z):
    return np.concatenate([z.real, z.imag])


def _together(state):
    half = len(state) // 2
    return state[:half] + 1j * state[half:]
