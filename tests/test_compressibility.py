"""Corrections for compressibility, by name, and the Mach number at which they end."""

import numpy as np
import pytest

import offbody as ob


@pytest.mark.parametrize("rule, bound", [("karman-tsien", 0.02), ("prandtl-glauert", 0.03)])
def test_a_circle_turns_sonic_at_mach_040(rule, bound):
    # Compressible-flow handbooks, from memory: about 0.40. The linear rule says a little more.
    np.testing.assert_allclose(ob.critical_mach(-3.0, rule), 0.40, rtol=0, atol=bound)


@pytest.mark.parametrize("rule", ["karman-tsien", "prandtl-glauert"])
@pytest.mark.parametrize("least", [-0.1, -0.5, -1.0, -3.0])
def test_at_the_critical_mach_number_the_corrected_pressure_is_sonic(rule, least):
    mach = ob.critical_mach(least, rule)
    # Isentropic flow of air from rest: 0.5283 of the total pressure where it is sonic.
    total = (1 + 0.2 * mach**2) ** 3.5
    sonic = (1.2**-3.5 * total - 1) / (0.7 * mach**2)
    # brentq's 1e-12, times the pressure's slope.
    np.testing.assert_allclose(ob.compressible_pressure(least, mach, rule), sonic, rtol=1e-8)


def test_the_rules_agree_for_small_pressures_and_leave_low_speed_alone():
    small = np.array([-1e-6, 1e-6])
    both = [ob.compressible_pressure(small, 0.6, rule)
            for rule in ("karman-tsien", "prandtl-glauert")]
    np.testing.assert_allclose(both[0], both[1], rtol=1e-6)
    np.testing.assert_allclose(both[1], small / 0.8, rtol=1e-12)
    given = np.array([[1.0, -3.0], [np.nan, 0.0]])
    np.testing.assert_array_equal(ob.compressible_pressure(given, 0.0), given)


def test_karman_and_tsiens_rule_deepens_a_suction_more_than_prandtl_and_glauerts():
    deep, linear = (ob.compressible_pressure(-1.0, 0.5, rule)
                    for rule in ("karman-tsien", "prandtl-glauert"))
    np.testing.assert_array_less(deep, linear)


@pytest.mark.parametrize("call, message", [
    (lambda: ob.compressible_pressure(-1.0, 1.2), "mach must be less than 1, got 1.2"),
    (lambda: ob.compressible_pressure(-1.0, -0.1), "mach must be at least 0"),
    (lambda: ob.compressible_pressure(-1.0, 0.3, "karman-tsein"), "did you mean 'karman-tsien'"),
    (lambda: ob.compressible_pressure(-9.0, 0.8), "beyond the rule 'karman-tsien'"),
    (lambda: ob.critical_mach(0.2), "least_pressure_coefficient must be below zero, got 0.2"),
    (lambda: ob.critical_mach(-1.0, "linear"), "rule = 'linear' is not known"),
])
def test_what_cannot_be_used_is_named(call, message):
    with pytest.raises(ob.InputError, match=message):
        call()


def test_a_survey_above_mach_03_says_what_low_speed_leaves_out():
    tube, sensor = ob.solve(ob.circle(0.3), wakes=ob.Wake(1.2)), ob.PointSensor(-1.0, 1.0)
    assert ob.survey(tube, sensor, [0.0], mach=0.3).notes == ()
    (note,) = ob.survey(tube, sensor, [0.0], mach=0.35).notes
    assert "Mach number 0.35" in note and "compressible_pressure" in note, note
    (note,) = ob.survey(tube, sensor, [0.0], mach=0.6).notes
    assert note.endswith("beyond it neither holds."), note
    with pytest.raises(ob.InputError, match="mach must be less than 1"):
        ob.survey(tube, sensor, [0.0], mach=1.0)
