"""What low speed leaves out: pressures at a Mach number from those of incompressible flow.

Two published corrections for a section in subsonic flow, and the Mach number at which the flow
first turns sonic somewhere. The ratio of specific heats is that of air, 1.4.
"""

import numpy as np
from scipy.optimize import brentq

from offbody.checks import as_number, as_reals, nearest_name
from offbody.errors import InputError

RATIO = 1.4  # of specific heats
RULES = ("karman-tsien", "prandtl-glauert")
LOW_SPEED = 0.3  # Mach number below which compressibility is left out (common practice)


def compressible_pressure(pressure_coefficient, mach, rule="karman-tsien"):
    """Pressure coefficients at a Mach number from those of incompressible flow.

    Parameters
    ----------
    pressure_coefficient : array_like
        Of the incompressible flow; NaN stays NaN.
    mach : float
        Of the undisturbed stream, from 0 to less than 1.
    rule : {"karman-tsien", "prandtl-glauert"}
        Prandtl and Glauert's rule is the linear one; Karman and Tsien's holds nearer to the
        critical Mach number.

    Returns
    -------
    array of the same shape, or float

    Raises
    ------
    InputError
        If the Mach number or the rule cannot be used, or the pressure lies beyond the rule.

    References
    ----------
    H. Glauert, Proc. R. Soc. Lond. A 118 (1928) 113-119; T. von Karman, J. Aeronaut. Sci. 8 (1941)
    337-356; H.-S. Tsien, J. Aeronaut. Sci. 6 (1939) 399-407.

    Examples
    --------
    >>> import offbody as ob
    >>> round(ob.compressible_pressure(-1.0, 0.5), 3)
    -1.252
    """
    mach = as_mach(mach)
    if rule not in RULES:
        raise InputError(f"rule = {rule!r} is not known; {nearest_name(rule, RULES)}")
    given = np.asarray(pressure_coefficient, float)
    as_reals("pressure_coefficient", given[~np.isnan(given)])
    corrected = _corrected(given, mach, rule)
    return corrected if np.ndim(corrected) else float(corrected)


def critical_mach(least_pressure_coefficient, rule="karman-tsien"):
    """The Mach number of the stream at which the flow first turns sonic.

    Parameters
    ----------
    least_pressure_coefficient : float
        The least on the body in incompressible flow, below zero.
    rule : {"karman-tsien", "prandtl-glauert"}

    Returns
    -------
    float

    Raises
    ------
    InputError
        If the pressure coefficient is not below zero, or the rule is not known.

    Notes
    -----
    Where the corrected least pressure is that of the speed of sound in isentropic flow. On a bluff
    body both rules are used beyond their small disturbances: a circle has 0.395 by Karman and
    Tsien, 0.418 by Prandtl and Glauert, and about 0.40 by the handbooks (from memory).

    Examples
    --------
    >>> import offbody as ob
    >>> round(ob.critical_mach(-3.0), 2)                     # a circle
    0.4
    """
    least = as_number("least_pressure_coefficient", least_pressure_coefficient)
    if least >= 0.0:
        raise InputError(
            f"least_pressure_coefficient must be below zero, got {least:g}: where the flow is "
            "nowhere faster than the stream it does not turn sonic first"
        )
    if rule not in RULES:
        raise InputError(f"rule = {rule!r} is not known; {nearest_name(rule, RULES)}")

    def excess(mach):
        # Cleared of the correction's denominator, so that it stays finite.
        root, heads = np.sqrt(1.0 - mach**2), _heads(mach, least, rule)
        return least - _sonic_pressure(mach) * (root + heads)

    return brentq(excess, 1e-3, 1.0 - 1e-12)


def _heads(mach, pressure, rule):
    """What Karman and Tsien add to the root of 1 - mach^2 below the pressure coefficient."""
    if rule == "prandtl-glauert":
        return 0.0
    return mach**2 / (1.0 + np.sqrt(1.0 - mach**2)) * 0.5 * pressure


def _corrected(pressure, mach, rule):
    below = np.sqrt(1.0 - mach**2) + _heads(mach, pressure, rule)
    if (below <= 0.0).any():
        raise InputError(
            f"pressure_coefficient = {np.nanmin(pressure):g} lies beyond the rule {rule!r} at mach "
            f"= {mach:g}: use a lower Mach number"
        )
    return pressure / below


def _sonic_pressure(mach):
    """Pressure coefficient at which the local Mach number is one."""
    half = 0.5 * (RATIO - 1.0)
    ratio = ((1.0 + half * mach**2) / (1.0 + half)) ** (RATIO / (RATIO - 1.0))
    return (ratio - 1.0) / (0.5 * RATIO * mach**2)


def as_mach(mach):
    """A Mach number of a subsonic stream, or an InputError."""
    mach = as_number("mach", mach, least=0.0)
    if mach >= 1.0:
        raise InputError(f"mach must be less than 1, got {mach:g}: the stream is not subsonic")
    return mach
