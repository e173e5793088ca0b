"""Karman-Trefftz sections, edge 12 degrees, about 12 percent thick (Milne-Thomson, exact)."""

from functools import cache

import numpy as np
import pytest

import exact
import offbody as ob

MOST_NODES = 700
PLAIN = exact.KarmanTrefftz()
CAMBERED = exact.KarmanTrefftz(bending=0.04)
CASES = pytest.mark.parametrize(
    "section, direction",
    [(section, direction) for section in (PLAIN, CAMBERED) for direction in (0.0, 5.0, 10.0)],
)


@cache
def solved(section):
    model = ob.solve([ob.curve(exact.as_function(section), sharp=0.0)],
                     panels=MOST_NODES // 8, order=8)
    assert model.node_count <= MOST_NODES, f"{model.node_count} nodes, {MOST_NODES} allowed"
    return model


@CASES
def test_the_kutta_condition_gives_the_exact_circulation(section, direction):
    # Promised: 1e-6 of unit chord and speed.
    np.testing.assert_allclose(solved(section).circulation(direction),
                               [section.circulation(direction)], rtol=0, atol=1e-6)


@CASES
def test_the_field_is_exact_a_fivehundredth_of_the_chord_off_the_wall(section, direction):
    # Both sides' crowding points at the edge, and a ring of points behind it.
    sides = np.concatenate([np.linspace(0.001, 0.999, 800), np.logspace(-9, -3, 40),
                            1 - np.logspace(-9, -3, 40)])
    behind = section.edge + 0.002 * np.exp(1j * np.radians(np.linspace(-80, 80, 41)))
    points = np.concatenate([section.offset_points(sides, 0.002), behind])
    # Promised: 1e-5 of the undisturbed speed.
    np.testing.assert_allclose(solved(section).velocity(exact.as_pairs(points), direction),
                               exact.as_velocity(section.velocity(points, direction)),
                               rtol=0, atol=1e-5)


@CASES
def test_the_surface_speed_is_exact_but_for_the_last_tenthousandth_of_the_chord(
        section, direction):
    surface = solved(section).surface(0, direction)
    z = exact.as_complex(surface.points)
    expected = exact.along_wall(surface.points,
                                exact.as_velocity(section.velocity(z, direction)))
    away = abs(z - section.edge) > 1e-4
    # Promised: 1e-4 of the undisturbed speed.
    np.testing.assert_allclose(surface.speed[away], expected[away], rtol=0, atol=1e-4)


@CASES
def test_the_velocity_gradient_is_exact_off_the_wall_and_behind_the_edge(section, direction):
    ring = np.exp(2j * np.pi * np.arange(48) / 48)
    behind = section.edge + np.array([0.02, 0.1 + 0.1j, 0.05 - 0.3j])
    points = np.concatenate([section.offset_points(np.linspace(0.1, 0.9, 9), 0.05), behind])
    around = section.velocity(points[:, None] + 0.01 * ring, direction)
    slope = (around / ring).mean(axis=1) / 0.01   # Cauchy's formula, to 48 powers of a half
    expected = np.stack([np.stack([slope.real, -slope.imag], -1),
                         np.stack([-slope.imag, -slope.real], -1)], -2)
    found = solved(section).velocity_gradient(exact.as_pairs(points), direction)
    # The velocity is good to 1e-5 at 0.002 from the wall, to 1e-7 here: over 0.01, its slope.
    np.testing.assert_allclose(found, expected, rtol=0, atol=1e-5)
