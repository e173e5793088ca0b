"""Random smooth bodies and pairs of them, for the tests and the benchmarks: Fourier outlines."""

import numpy as np

import offbody as ob

WAVES = 6            # of the radius round a body, about 1
LEAST_RADIUS = 0.3
GAPS = 0.03, 1.0     # between two bodies
SAMPLES = np.arange(600) / 600
DIRECTIONS = np.arange(0.0, 180.0, 20.0)


def random_bodies(seed):
    """Return one body (even seeds) or two (odd ones), each a smooth closed curve."""
    generator = np.random.default_rng(seed)
    first = _radii(generator)
    if seed % 2 == 0:
        return [_outline(first)]
    second, size = _radii(generator), generator.uniform(0.3, 1.0)
    aside = np.exp(2j * np.pi * generator.uniform())
    gap = GAPS[0] * (GAPS[1] / GAPS[0]) ** generator.uniform()
    here, there = _points(first, SAMPLES), size * _points(second, SAMPLES)
    near, far = 0.0, 10.0   # distances of the centres with a narrower and a wider gap than wanted
    for _ in range(30):
        middle = (near + far) / 2
        apart = np.abs(here[:, None] - there - middle * aside).min()
        # A body that is still inside the other, or across it, comes out when the gap has grown.
        outside = np.all(_beyond(here, there + middle * aside))
        near, far = (near, middle) if apart > gap and outside else (middle, far)
    shift = far * aside
    return [_outline(first), _outline(second, size, shift)]


def judged(bodies, model):
    """Return a model's greatest error of surface speed by far finer panels, and these' own."""
    judge = ob.solve(bodies, panels=[3 * count // 2 for count in model.panel_counts])
    if judge.estimated_error > max(0.01 * model.estimated_error, 1e-11):
        judge = ob.solve(bodies, panels=[3 * count // 2 for count in judge.panel_counts])
    wrong = 0.0
    for body in range(len(bodies)):
        wall = judge.surface(body, DIRECTIONS)
        speed = np.hypot(*np.moveaxis(model.velocity(wall.points, DIRECTIONS), -1, 0))
        wrong = max(wrong, np.abs(speed - np.abs(wall.speed)).max())
    return wrong, judge.estimated_error


def _radii(generator):
    """Coefficients of a radius that stays above the least."""
    falling = 0.35 / np.arange(1, WAVES + 1)
    while True:
        sizes = falling * generator.normal(size=(2, WAVES))
        coefficients = sizes[0] - 1j * sizes[1]
        if np.abs(_points(coefficients, SAMPLES)).min() > LEAST_RADIUS:
            return coefficients


def _points(coefficients, s):
    around = np.exp(2j * np.pi * np.asarray(s))
    waves = around[..., None] ** np.arange(1, WAVES + 1)
    radius = 1 + (waves @ coefficients).real
    return radius * around


def _outline(coefficients, size=1.0, shift=0j):
    def function(s):
        z = size * _points(coefficients, s) + shift
        return np.stack([z.real, z.imag], axis=-1)

    return ob.curve(function)


def _beyond(here, there):
    """Whether a body lies outside the one through the points ``here``."""
    turns = np.angle((np.roll(here, -1) - there[::20, None]) / (here - there[::20, None]))
    return np.abs(turns.sum(axis=1)) < np.pi
