"""Where panels end: by curvature, sharp edges, jumps of curvature, and gaps.

The length of panels follows a field along the wall: the least of what curvature, a sharp edge, a
jump of curvature and the nearest other wall ask for, made to change slowly, so that neighbours
differ by less than a factor of about e. Panels share the integral of 1/length equally.
"""

import warnings

import numpy as np
from scipy.spatial import cKDTree

from offbody.arcs import Arcs
from offbody.errors import AccuracyWarning, InputError
from offbody.surroundings import copies_of

GROWTH = 1.0              # greatest slope of the length field: neighbours within a factor of e
PER_CURVATURE = 0.5       # panel length over the least radius of curvature on it
PER_PERIMETER = 1.0 / 6.0
EDGE_FLOOR = 1e-8         # least panel at a sharp edge, of the perimeter
JOIN_FLOOR = 1.0 / 8.0    # least panel at a jump of curvature, of what curvature asks for there
PER_GAP = 1.0             # panel length over the scale on which a gap changes along the wall
LEAST = 1e-9              # no floor is less, of the perimeter: rounding would tell in the nodes
ROUNDING = 1e-11          # nor is one less than this share of the distance from the origin
FAR_PLACED = 10.0         # times EDGE_FLOOR: coarser than this at an edge is worth a warning
SPACING = 1.0 / 8.0       # of the samples, at the most, over the stretch that holds them
TOUCH = 1e-9              # bodies closer than this fraction of the smaller one touch



def measure(outlines, surroundings):
    """The walls of outlines as Arcs, and the gap that each sample of them faces.

    Raises InputError where bodies overlap, touch, or reach beyond a plane wall.
    """
    walls = [Arcs(outline) for outline in outlines]
    return walls, _gaps(walls, surroundings)


def lay(walls, gaps, counts, coarseness=1.0, floor=1.0):
    """Arc positions of the panel ends of each body, from its first break to its return there.

    counts : panels per body, or None for as many as the length field asks for, times
    ``coarseness``; floor : factor on the least panels, at edges and jumps of curvature.
    """
    ends = []
    for wall, gap, count in zip(walls, gaps, counts, strict=True):
        arcs, lengths = _length_field(wall, gap, floor)
        ends.append(_ends(wall, arcs, coarseness * lengths, count))
    return ends


def _gaps(walls, surroundings):
    """Per body, each sample's gap scale to the nearest other wall or image; overlaps are refused.

    Stretches are halved until the samples see the gap as it is.
    """
    sizes = [np.ptp(w.sample_points.real) + np.ptp(w.sample_points.imag) for w in walls]
    for body, wall in enumerate(walls):
        _refuse_beyond_walls(wall, body, surroundings, sizes[body])
    if len(walls) == 1 and not copies_of(surroundings, walls[0].sample_points[:1]):
        return [np.full(len(walls[0].sample_points), np.inf)]
    for _ in range(40):
        found = [_nearest(walls, body, surroundings, sizes) for body in range(len(walls))]
        coarse = [_is_coarse(wall, *facing) for wall, facing in zip(walls, found, strict=True)]
        if not any(c.any() for c in coarse):
            break
        for wall, marked in zip(walls, coarse, strict=True):
            if marked.any():
                wall.refine(marked)
    for body, wall in enumerate(walls):
        for other, around in enumerate(walls):
            if other != body and _holds(around, wall.sample_points[:1]).any():
                _refuse_overlap(walls, body, other, wall.sample_points[0], surroundings)
    return [_gap_scale(*facing) for facing in found]


def _nearest(walls, body, surroundings, sizes):
    """Distance from each sample of a body to the nearest other wall, and both curvatures in sum.

    It is the distance to the tangent at the nearest sample, where that lies abreast: parallel walls
    need no finer samples however close they are.
    """
    here = walls[body].sample_points
    places, tangents, others = [], [], []
    for k, wall in enumerate(walls):
        seen = copies_of(surroundings, wall.sample_points)
        along = -wall.sample_tangents.conj() if surroundings.walls else wall.sample_tangents
        others += [k] * (len(seen) + (k != body))
        places += seen if k == body else [wall.sample_points, *seen]
        tangents += ([] if k == body else [wall.sample_tangents]) + [along] * len(seen)
    owner = np.repeat(others, [len(points) for points in places])
    curvature = np.concatenate([np.abs(walls[k].sample_curvature) for k in others])
    spacing = np.concatenate([SPACING * walls[k].sample_stretch for k in others])
    cloud, tangents = np.concatenate(places), np.concatenate(tangents)
    tree = cKDTree(np.stack([cloud.real, cloud.imag], 1))
    _, which = tree.query(np.stack([here.real, here.imag], 1))
    apart = (here - cloud[which]) / tangents[which]
    distance = np.where(np.abs(apart.real) < spacing[which], -apart.imag, np.abs(apart))
    curvature = np.abs(walls[body].sample_curvature) + curvature[which]
    limits = TOUCH * np.minimum(sizes[body], np.asarray(sizes)[owner[which]])
    met = distance < limits
    met &= ~_is_coarse(walls[body], distance, curvature) | (np.abs(distance) < limits)
    if met.any():
        first = int(np.flatnonzero(met)[0])
        _refuse_overlap(walls, body, int(owner[which[first]]), here[first], surroundings)
    return distance, curvature


def _is_coarse(wall, distance, curvature):
    """Samples too far apart to see that two walls curve away from each other by their distance.

    They cannot by more than samples are apart, however much curvature a singular parameter shows.
    """
    apart = SPACING * wall.sample_stretch
    return np.minimum(apart, apart**2 * curvature) > 0.5 * np.abs(distance)


def _gap_scale(distance, curvature):
    """How far along the wall a gap stays about as wide, from the two walls' curvatures in sum.

    A gap d between radii that combine to R widens as d + x^2/(2 R): within x = sqrt(d R). Where
    the walls are farther apart than R, it is the distance that counts; parallel walls, never.
    """
    with np.errstate(divide="ignore"):
        return np.sqrt(distance * (distance + 1.0 / curvature))


def _refuse_beyond_walls(wall, body, surroundings, size):
    for k, height in enumerate(surroundings.walls):
        sign = 1.0 if k == 0 else -1.0
        clear = np.min(sign * (wall.sample_points.imag - height))
        if clear < TOUCH * size:
            _refuse_wall(wall, body, surroundings, k)


def _refuse_wall(wall, body, surroundings, k):
    way = "up" if k == 0 else "down"
    raise InputError(
        f"body {body} ({wall.outline.name}) touches or crosses the wall "
        f"y = {surroundings.walls[k]:g} of {surroundings!r}; move it {way}"
    )


def _refuse_overlap(walls, body, other, place, surroundings):
    where = f"near ({place.real:.6g}, {place.imag:.6g})"
    if body == other and surroundings.walls:
        nearest = np.argmin([abs(place.imag - height) for height in surroundings.walls])
        _refuse_wall(walls[body], body, surroundings, int(nearest))
    if body == other:
        raise InputError(
            f"body {body} ({walls[body].outline.name}) overlaps or touches its own copy {where}; "
            "make the pitch larger"
        )
    first, second = sorted((body, other))
    raise InputError(
        f"bodies {first} ({walls[first].outline.name}) and {second} "
        f"({walls[second].outline.name}) overlap or touch {where}; move them apart or join them "
        "to one outline"
    )


def _holds(wall, z):
    """Whether the polygon through the samples of a wall holds the points."""
    angles = np.angle(
        (np.roll(wall.sample_points, -1)[None, :] - z[:, None])
        / (wall.sample_points[None, :] - z[:, None])
    )
    return np.abs(angles.sum(axis=1)) > np.pi


def _length_field(wall, gap, scale):
    """Arc positions from 0 to the perimeter, and the panel length wanted at each.

    ``scale`` is a factor on the floors at breaks.
    """
    arcs, total = wall.sample_arcs, wall.length
    curvature = np.abs(wall.sample_curvature)
    if wall.edge is not None:  # on the last stretch a singular parameter makes noise of it
        curvature[np.minimum(arcs, total - arcs) < EDGE_FLOOR * total] = 0.0
    widest = PER_PERIMETER * total
    wanted = widest / np.maximum(1.0, widest / PER_CURVATURE * curvature)
    wanted = _slowly(arcs, np.minimum(wanted, PER_GAP * gap), total)
    if not wall.is_broken:
        grid = np.concatenate([[0.0], arcs, [total]])
        return grid, np.interp(grid, arcs, wanted, period=total)
    nearby = np.concatenate([[0.0], 0.125 * total * 0.5 ** np.arange(34)])
    around = (wall.breaks[:, None] + np.concatenate([nearby, -nearby])) % total
    grid = np.unique(np.concatenate([arcs, around.ravel(), [0.0, total]]))
    field = np.interp(grid, arcs, wanted, period=total)
    rounding = ROUNDING * np.abs(wall.sample_points).max()
    least = max(LEAST * total, rounding)
    if wall.edge is not None and rounding > FAR_PLACED * EDGE_FLOOR * total:
        warnings.warn(
            f"{wall.outline.name} stands so far from the origin that the rounding of coordinates "
            "limits the panels at its sharp edge; move everything nearer to (0, 0)",
            AccuracyWarning, stacklevel=4,
        )
    for place in wall.breaks:
        if place == wall.edge:
            floor = EDGE_FLOOR * total
        else:
            floor = JOIN_FLOOR * np.interp(place, arcs, wanted, period=total)
        away = np.abs((grid - place + 0.5 * total) % total - 0.5 * total)
        field = np.minimum(field, max(least, scale * floor) + GROWTH * away)
    return grid, field


def _slowly(arcs, wanted, total):
    """The greatest field below ``wanted`` on a closed curve whose slope stays below GROWTH."""
    around = np.concatenate([arcs - total, arcs, arcs + total])
    field_ = np.tile(wanted, 3)
    rising = np.minimum.accumulate(field_ - GROWTH * around) + GROWTH * around
    falling = np.minimum.accumulate((field_ + GROWTH * around)[::-1])[::-1] - GROWTH * around
    return np.minimum(rising, falling)[len(arcs) : 2 * len(arcs)]


def _ends(wall, arcs, lengths, count):
    """Arc positions of the panel ends of one body, from its first break to its return there."""
    density = 1.0 / lengths
    shares = np.concatenate(
        [[0.0], np.cumsum(0.5 * (density[1:] + density[:-1]) * np.diff(arcs))]
    )
    breaks = np.append(wall.breaks, wall.length)
    at_breaks = np.interp(breaks, arcs, shares)
    needs = np.diff(at_breaks)
    if count is None:
        numbers = np.maximum(1, np.ceil(needs - 1e-9)).astype(int)
    else:
        numbers = _apportion(needs, count, wall.outline.name)
    pieces = []
    for k, number in enumerate(numbers):
        steps = np.linspace(at_breaks[k], at_breaks[k + 1], number + 1)[1:-1]
        pieces += [[breaks[k]], np.interp(steps, shares, arcs)]
    return np.concatenate([*pieces, [wall.length]])


def _apportion(needs, count, name):
    """``count`` panels shared out to the pieces between breaks, each at least one."""
    least = max(len(needs), 2)
    if count < least:
        raise InputError(
            f"panels = {count}: {name} has {len(needs)} smooth pieces and needs at least "
            f"{least} panels"
        )
    numbers = np.ones(len(needs), int)
    for _ in range(count - len(needs)):
        numbers[np.argmax(needs / numbers)] += 1
    return numbers


