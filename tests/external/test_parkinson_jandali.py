"""Wakes with a base pressure against the wake-source model and against measurement.

G. V. Parkinson and T. Jandali, J. Fluid Mech. 40 (1970) 577-594: the wetted front is mapped to part
of a circle, two sources behind it are placed so that the flow leaves it where it is told to, with
the speed that the base pressure sets. Their model, for an arc, is built here from its statement.
Measured figures are from memory, as handbooks plot them.
"""

from functools import cache

import numpy as np
import pytest
from scipy.optimize import brentq

import offbody as ob

# Pressure coefficients of a circle below the drag crisis against degrees from the front, as
# handbooks plot them (Schlichting; Roshko): a curve recalled from memory.
MEASURED = {0: 1.0, 20: 0.62, 30: 0.22, 40: -0.25, 50: -0.70, 60: -1.03, 70: -1.20}


class WakeSource:
    """The wake-source model of an arc of the unit circle, wetted to ``leaving`` degrees."""

    def __init__(self, leaving, base_pressure):
        self.leaving = np.radians(leaving)
        half, self.middle = np.sin(self.leaving), -np.cos(self.leaving)
        self.rise = np.tan(0.5 * self.leaving)  # centre of the mapped circle, on its axis
        self.radius = np.hypot(1.0, self.rise)
        self.scale = 1j * half
        self.tip = (1.0 - 1j * self.rise) / self.radius
        speed = np.sqrt(1.0 - base_pressure)
        grid = np.radians(np.linspace(2.0, 80.0, 200))
        miss = np.array([self._tip_speed(place) - speed for place in grid])
        crossing = np.flatnonzero((miss[1:] * miss[:-1] < 0) & (np.abs(np.diff(miss)) < 2))[0]
        self.place = brentq(lambda place: self._tip_speed(place) - speed,
                            grid[crossing], grid[crossing + 1])
        self.flux = self._flux(self.place)
        self.base_pressure = base_pressure

    def _velocity(self, t, flux, place):
        """Complex velocity in the plane of the unit circle; its onset is that of the map."""
        onset = 0.5 * self.scale * self.radius
        first, second = -1j * np.exp(1j * place), -1j * np.exp(-1j * place)
        sources = 2 / (t - first) + 2 / (t - second) - 2 / t
        return onset - np.conj(onset) / t**2 + flux / (2 * np.pi) * sources

    def _flux(self, place):
        """Of each source, so that the flow rests at the tip in that plane."""
        still, one = ((1j * self.tip * self._velocity(self.tip, flux, place)).real
                      for flux in (0.0, 1.0))
        return still / (still - one)

    def _tip_speed(self, place):
        flux, turn = self._flux(place), np.exp(1e-4j)
        ends = self.tip * turn, self.tip / turn
        slope = np.subtract(*(self._velocity(t, flux, place) for t in ends)) / np.subtract(*ends)
        # dz/dw = scale (1 - 1/w^2) / 2 vanishes at the tip w = 1; its slope there is the scale.
        return abs(slope / (self.scale * self.radius**2))

    def front(self, count=800):
        """Degrees from the front, and pressure coefficients, up to the tip."""
        angle = np.linspace(0.5 * np.pi, np.angle(self.tip), count)[:-1]
        t = np.exp(1j * angle)
        w = 1j * self.rise + self.radius * t
        z = self.middle + 0.5 * self.scale * (w + 1 / w)
        speed = self._velocity(t, self.flux, self.place) / (
            0.5 * self.scale * (1 - 1 / w**2) * self.radius)
        return np.degrees(np.pi - np.abs(np.angle(z))), 1 - np.abs(speed) ** 2

    def drag_coefficient(self):
        """By the arc's breadth: its front's pressure less that of the base."""
        degrees, pressure = self.front()
        angle = np.append(np.radians(degrees), self.leaving)
        over = np.append(pressure, self.base_pressure) * np.cos(angle)
        return np.trapezoid(over, angle) / np.sin(self.leaving) - self.base_pressure


@cache
def circle(**wake):
    return ob.solve(ob.circle(1.0), wakes=ob.Wake(**wake) if wake else None)


def pressures(model, degrees):
    return np.array([model.port_pressure(0, (180 - angle) / 360) for angle in degrees])


@pytest.mark.parametrize("base_pressure", [-0.96, -1.2])
def test_the_front_of_a_circle_has_the_pressure_of_the_wake_source_model(base_pressure):
    theirs = WakeSource(80.0, base_pressure)
    degrees = np.arange(0, 80, 5)
    found = pressures(circle(base_pressure=base_pressure, separation=80.0), degrees)
    # 0.08: theirs blows from two points behind an arc, ours from the lee of the circle itself; the
    # pressure without a wake differs by 1.3.
    np.testing.assert_allclose(found, np.interp(degrees, *theirs.front()), rtol=0, atol=0.08)


@pytest.mark.parametrize("base_pressure", [-0.96, -1.2])
def test_the_drag_of_a_circle_is_that_of_the_wake_source_model(base_pressure):
    wake = circle(base_pressure=base_pressure, separation=80.0).wake(0)
    theirs = WakeSource(80.0, base_pressure).drag_coefficient() * np.sin(np.radians(80))
    # Theirs by the arc's breadth, ours by the circle's: sin 80. The fronts differ by up to 0.08.
    np.testing.assert_allclose(wake.drag_coefficient, theirs, rtol=0.05)
    # Measured 1.0 to 1.2 at such base pressures.
    assert 0.9 < wake.drag_coefficient < 1.3, wake.drag_coefficient


def test_a_plate_square_to_the_stream_has_the_measured_drag_at_the_measured_base_pressure():
    # Fage and Johansen, Proc. R. Soc. Lond. A 116 (1927): base pressure -1.38 and drag 2.13; the
    # wake-source model of a plate, here of a very flat arc, has 2.13 as well.
    theirs = WakeSource(0.5, -1.38).drag_coefficient()
    np.testing.assert_allclose(theirs, 2.13, rtol=0.02)
    plate = ob.solve(ob.ellipse(0.02, 1.0), wakes=ob.Wake(base_pressure=-1.38))
    # 8 percent: an ellipse of 2 percent thickness has no sharp edges, and ours blows through its
    # lee close to them.
    np.testing.assert_allclose(plate.wake(0).drag_coefficient, 2.13, rtol=0.08)


def test_the_drag_given_the_base_pressure_found_is_that_which_gives_the_drag():
    given = circle(drag_coefficient=1.2, separation=80.0).wake(0)
    back = circle(base_pressure=float(given.base_pressure), separation=80.0).wake(0)
    np.testing.assert_allclose(back.drag_coefficient, 1.2, rtol=1e-9)


def test_the_march_and_the_wake_together_leave_a_circle_where_measurement_does():
    model = circle(drag_coefficient=1.2, reynolds=1e5)
    found = ob.separation(model)
    assert (found.state == "laminar").all(), found.state
    # Measured near 80 degrees (Schlichting); 5 for the scatter of measurement and method. The march
    # on potential flow has 103.
    np.testing.assert_allclose(found.turning, 80.0, rtol=0, atol=5)
    # Measured base pressure -0.9 to -1.2 where the drag is 1.2 (Roshko, NACA TN 3169).
    assert -1.3 < model.wake(0).base_pressure < -0.9, model.wake(0).base_pressure


def test_the_front_of_a_circle_is_where_potential_flow_is_good():
    degrees, measured = (np.array(list(one)) for one in (MEASURED.keys(), MEASURED.values()))
    misses = {
        name: pressures(model, degrees) - measured
        for name, model in (("none", circle()), ("displacement", circle(drag_coefficient=1.2)),
                            ("march", circle(drag_coefficient=1.2, reynolds=1e5)))
    }
    for name, miss in misses.items():
        print(f"wake {name}: pressure less the measured, by {degrees.tolist()} degrees: "
              f"{miss.round(2).tolist()}")
    # A plotted curve recalled to 0.05, and its scatter of 0.05.
    np.testing.assert_allclose(misses["march"], 0, atol=0.1)
    # Without a wake it is good to a tenth over the first 20 degrees, to 0.25 over 30.
    np.testing.assert_allclose(misses["none"][degrees <= 20], 0, atol=0.1 + 0.05)
    assert abs(misses["none"][degrees == 70]).item() > 1.0
    assert np.all(abs(misses["displacement"])[1:] < abs(misses["none"])[1:])


def test_a_wakes_strip_is_as_wide_as_the_far_wake_of_schlichting():
    found = ob.separation(circle(drag_coefficient=1.2, reynolds=1e5))
    distance = np.array([1.0, 2.0, 4.0, 8.0, 12.0, 16.0])
    # Half-width 0.57 sqrt(Cd b x) (Schlichting, Boundary-Layer Theory; from memory): 4 percent, as
    # the strip is narrower by 3 between 2 and 4 breadths, where that law is stretched.
    edge = 0.96 * 0.57 * np.sqrt(1.2 * distance)
    assert (found.holds(np.stack([distance, edge], axis=-1)) == 2).all()
    assert (found.holds(np.stack([distance, -edge], axis=-1)) == 2).all()
