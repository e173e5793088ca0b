"""Meteorological bearings (where the wind comes FROM) and directions (where the stream goes TO)."""

import numpy as np

from offbody.checks import as_reals


def within_turn(degrees):
    """The same angles within [0, 360)."""
    turned = np.mod(degrees, 360.0)
    # The remainder of a tiny negative angle rounds to 360 itself.
    return np.where(turned == 360.0, 0.0, turned)


def from_bearing(bearing):
    """Direction in which the stream goes when the wind comes from a bearing.

    Parameters
    ----------
    bearing : float or array_like of any shape
        Where the wind comes FROM, degrees clockwise from north (north is +y, east is +x).

    Returns
    -------
    float or ndarray of the same shape
        Where the stream goes TO, degrees counter-clockwise from +x, in [0, 360).

    Raises
    ------
    ob.InputError
        If the bearing is not a finite number or an array of them.

    Examples
    --------
    >>> import offbody as ob
    >>> ob.from_bearing(270.0)
    0.0
    >>> ob.from_bearing([0, 90, 225])
    array([270., 180.,  45.])
    """
    return _reversed_and_mirrored("bearing", bearing)


def to_bearing(direction):
    """Bearing from which the wind comes when the stream goes in a direction.

    Parameters
    ----------
    direction : float or array_like of any shape
        Where the stream goes TO, degrees counter-clockwise from +x.

    Returns
    -------
    float or ndarray of the same shape
        Where the wind comes FROM, degrees clockwise from north (+y), in [0, 360).

    Raises
    ------
    ob.InputError
        If the direction is not a finite number or an array of them.

    Examples
    --------
    >>> import offbody as ob
    >>> ob.to_bearing(0.0)
    270.0
    """
    return _reversed_and_mirrored("direction", direction)


def _reversed_and_mirrored(name, angle):
    # From and to, clockwise from +y and counter-clockwise from +x: each way is the same formula.
    turned = within_turn(270.0 - as_reals(name, angle))
    return float(turned) if turned.ndim == 0 else turned
