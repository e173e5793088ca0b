"""Where to mount sensors: every place of a grid is looked at, and the best are refined.

A search runs in three steps. The scan reads all places of a grid, all winds at once, and rates
every set of one, two or three of them (``scans``). The best few are refined by sequential quadratic
programming with the exact gradients of the flow (``searches``). Then the scan's cells are looked at
again, each error lowered by what its slope could take off within half a step: what even that cannot
reach is excluded, and the cells of the rest are split until nothing is left that would be better by
a hundredth, or patience ends (``exclusions``). What remains bounds what any search could find.

An error is the departure of the speed ratio from 1; an error of direction counts as the share of
its own limit that it takes, times the limit of the speed.
"""

from collections.abc import Mapping

import numpy as np

from offbody.bearings import from_bearing, within_turn
from offbody.checks import as_count, as_directions, as_number, as_reals, nearest_name
from offbody.choices import Asked, Mount, Mounts, PortMount, Reach, Search, Stretch
from offbody.errors import InputError
from offbody.outlines import Outline
from offbody.ports import Ports
from offbody.scans import Site
from offbody.searches import AreaSearch, BoomSearch
from offbody.sensors import SENSORS, PointSensor
from offbody.surroundings import usual_directions

__all__ = ["LIMITS", "Mount", "Mounts", "PortMount", "Reach", "Search", "Stretch", "best_mounts"]

# IEC 61400-12-1 (from memory): greatest distortion of the speed by what stands beside the sensor.
LIMITS = {"mast": 0.01, "boom": 0.005}


def best_mounts(
    model, where, sensors=None, *, count=1, directions=None, bearings=None, weights=None,
    limit="mast", direction_limit=None, keep_out=(), spacing=0.0, clearance=0.0, reynolds=None,
    choices=3,
):
    """The best places for sensors under limits, and how sure it is that there are none better.

    Parameters
    ----------
    model : Model
        What ``ob.solve`` returned.
    where : Reach, Outline or Stretch
        Booms from one foot; an area within an outline; or a stretch of wall, for ports.
    sensors : sensor or sequence of sensors, optional
        What each mount carries, all of it together: the place (0, 0) is the end of the boom, or
        the place in the area. A sensor moves with its mount and does not turn. None: a point that
        reads the speed. None in a stretch of wall, where ports stand.
    count : int
        How many mounts share the work: in every wind one of them must do. For ports: 1 seeks the
        static port that stays nearest the undisturbed pressure, 2 the pair whose pressure
        difference turns fastest with the wind.
    directions, bearings : array_like of shape (n,), optional
        The winds that must be served, as in ``ob.survey``. None: all.
    weights : mapping of angle to frequency, optional
        The wind climate, by the middles of its sectors, in the convention of the winds; winds
        share evenly what their nearest sector has, and those of frequency zero need not be served.
        None: all winds alike.
    limit : {"mast", "boom"} or float
        Greatest error of the speed ratio: "mast" 0.01 and "boom" 0.005 are those of IEC 61400-12-1
        (from memory) for the distortion by the mast and by the boom. For a static port, of the
        pressure coefficient.
    direction_limit : float, optional
        Greatest error of direction, degrees. None: not looked at; 1 where no sensor reads speed.
    keep_out : sequence of Outline
        Where no sensor may stand.
    spacing : float
        Least distance between mounts, in the caller's unit.
    clearance : float
        Least distance between a mount and any wall.
    reynolds : float or sequence, optional
        As ``ob.survey`` takes it.
    choices : int
        How many to return.

    Returns
    -------
    Mounts

    Raises
    ------
    ob.InputError
        If an argument cannot be used, or no place in the region is allowed.

    Notes
    -----
    Booms: first the shortest with which every wind has a trusted sensor within the limit. If none
    will do, the least worst error with all winds trusted; failing that, the greatest share of the
    wind. Areas: the same without the length. ``Mounts.notes`` says which it came to. Trust is that
    of ``ob.survey``.

    Close to a wall errors pass through zero, and a short boom may end just there, where nothing
    about the flow is certain: give a clearance.

    Beside the standard's own figures for a tube (IEC 61400-12-1, from memory: 6.1 diameters for 1
    percent, 8.2 for 0.5) the booms found are shorter without a wake (5.0 and 7.1), about equal with
    a drag coefficient of 0.3 (6.3 and 10), and longer with 1.2 (11.7 and 21).

    References
    ----------
    D. Kraft, DFVLR-FB 88-28 (1988), for sequential quadratic programming.

    Examples
    --------
    >>> import offbody as ob
    >>> mast = ob.solve(ob.circle(0.3))
    >>> found = ob.best_mounts(mast, ob.Reach(3.0), directions=range(-45, 46))
    >>> round(found.best.length, 3)                 # five diameters
    1.5
    >>> port = ob.best_mounts(mast, ob.Stretch(0, 0.5, 1.0), directions=[0.0]).best
    >>> port.arc_fractions.round(4)                 # 30 degrees off the front, at one half
    array([0.5833])
    """
    if not hasattr(model, "velocity_gradient"):
        raise InputError(f"model must be what ob.solve returned, got {model!r}")
    count = as_count("count", count, least=1, greatest=3)
    choices = as_count("choices", choices, least=1)
    angles, by_bearing = _as_winds(model, directions, bearings)
    weights = _as_weights(angles, weights)
    angles, weights = angles[weights > 0], weights[weights > 0]
    asked = Asked(model, angles, by_bearing, weights, count, choices, reynolds)
    if isinstance(where, Stretch):
        if sensors is not None:
            raise InputError("sensors: a stretch of wall takes ports, and nothing else; leave out")
        return Ports(asked, where, _as_limit(limit)).found()
    site = Site(
        asked,
        _as_carried(sensors),
        _as_limit(limit),
        direction_limit,
        _as_keep_out(keep_out),
        as_number("spacing", spacing, least=0.0),
        as_number("clearance", clearance, least=0.0),
    )
    if isinstance(where, Reach):
        return BoomSearch(site, where).found()
    if isinstance(where, Outline):
        return AreaSearch(site, where).found()
    raise InputError(f"where must be ob.Reach, an outline or ob.Stretch, got {where!r}")


def _as_winds(model, directions, bearings):
    """The winds as they were given, and whether they are bearings."""
    if directions is not None and bearings is not None:
        raise InputError("directions and bearings are both given: give one of them")
    if directions is None and bearings is None:
        return usual_directions(model.surroundings), False
    name, given = ("directions", directions) if bearings is None else ("bearings", bearings)
    angles = np.atleast_1d(as_directions(name, given))
    if not angles.size:
        raise InputError(f"{name} is empty: give at least one angle, or leave it out")
    model.surroundings.admit(from_bearing(angles) if bearings is not None else angles)
    return angles, bearings is not None


def _as_weights(angles, table):
    """(n,) frequencies of the winds, with sum 1."""
    if table is None:
        return np.full(len(angles), 1.0 / len(angles))
    if not isinstance(table, Mapping) or not table:
        raise InputError(f"weights must map the middles of sectors to frequencies, got {table!r}")
    middles = as_reals("weights' angles", list(table.keys()))
    frequencies = as_reals("weights' frequencies", list(table.values()))
    if frequencies.min() < 0:
        raise InputError(f"weights must not be negative, got {frequencies.min():g}")
    away = np.abs(within_turn(angles[:, None] - middles + 180.0) - 180.0)
    sector = away.argmin(axis=1)
    weights = frequencies[sector] / np.bincount(sector, minlength=len(middles))[sector]
    if weights.sum() <= 0:
        raise InputError("weights: none of the winds asked for lies in a sector with a frequency")
    return weights / weights.sum()


def _as_limit(limit):
    if isinstance(limit, str):
        if limit not in LIMITS:
            raise InputError(f"limit = {limit!r} is not known; {nearest_name(limit, LIMITS)}")
        return LIMITS[limit]
    return as_number("limit", limit, positive=True)


def _as_carried(sensors):
    """What a mount carries, as a tuple of sensors."""
    if sensors is None:
        return (PointSensor(0.0, 0.0, reads="speed"),)
    carried = tuple(sensors) if isinstance(sensors, list | tuple) else (sensors,)
    for sensor in carried:
        if not isinstance(sensor, SENSORS) or sensor.kind == "port":
            raise InputError(
                f"sensors must be sensors that stand in the flow, such as ob.PointSensor(0, 0), "
                f"got {sensor!r}"
            )
    if not carried:
        raise InputError("sensors is empty: leave it out, or give at least one")
    return carried


def _as_keep_out(keep_out):
    outlines = (keep_out,) if isinstance(keep_out, Outline) else tuple(keep_out)
    for outline in outlines:
        if not isinstance(outline, Outline):
            raise InputError(f"keep_out must hold outlines such as ob.circle(...), got {outline!r}")
    return outlines
