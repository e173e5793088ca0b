"""Scans of places: the errors that sensors would have there, and how good sets of places are."""

import itertools
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from scipy.spatial import cKDTree

from offbody.checks import as_number
from offbody.choices import Asked
from offbody.errors import InputError
from offbody.model import inside
from offbody.sensors import PointSensor
from offbody.surroundings import holds
from offbody.surveys import survey

DIRECTION_LIMIT = 1.0  # degrees; a rule of this project, for sensors that read no speed
READINGS_AT_ONCE = 1_500_000  # winds times sample points
SETS_AT_ONCE = 2_000_000  # winds times sets of places
WALL_POINTS = 4000  # of every outline, among which the nearest is sought
WITHIN = 1 + 1e-6  # times a limit: the refinement rests on the limit to rounding


@dataclass(frozen=True, eq=False)
class Site:
    """What stands where: the errors of what a mount carries, at any place."""

    asked: Asked
    carried: tuple
    limit: float
    direction_limit: float | None
    keep_out: tuple
    spacing: float
    clearance: float

    def __post_init__(self):
        given = self.direction_limit
        if given is not None:
            given = as_number("direction_limit", given, positive=True)
        elif not any(sensor.reads in ("speed", "both") for sensor in self.carried):
            given = DIRECTION_LIMIT
        object.__setattr__(self, "direction_limit", given)
        if not self._parts:
            raise InputError(
                "sensors: none of them reads speed, or direction beside a direction_limit: there "
                "is no error to keep small"
            )

    @cached_property
    def _parts(self):
        """(which sensor, quantity) of every error that counts."""
        wanted = ["speed"] if self.direction_limit is None else ["speed", "direction"]
        return [
            (place, quantity)
            for place, sensor in enumerate(self.carried)
            for quantity in wanted
            if sensor.reads in ("both", quantity)
        ]

    @cached_property
    def _walls(self):
        model = self.asked.model
        return cKDTree(np.concatenate([outline.points(WALL_POINTS) for outline in model.outlines]))

    def wall_distance(self, z):
        """(m,) distance of places from the nearest wall of a body or of the surroundings."""
        home = self.asked.model._home(z)
        distance = self._walls.query(pairs(home))[0]
        for wall in self.asked.model.surroundings.walls:
            distance = np.minimum(distance, np.abs(z.imag - wall))
        return distance

    def leeway(self, z, room):
        """(m,) how far places are from where no mount may stand; negative where none may.

        That is: nearer than the room to a wall, in a body, in a keep-out area.
        """
        shape, z = np.shape(z), np.ravel(z)
        distance = self.wall_distance(z)
        inside_wall = inside(self.asked.model, pairs(z)) | ~holds(self.asked.model.surroundings, z)
        leeway = np.where(inside_wall, -distance - room, distance - room)
        for outline, ring in zip(self.keep_out, self._rings, strict=True):
            distance = ring.query(pairs(z))[0]
            leeway = np.minimum(
                leeway, np.where(inside(outline, pairs(z)), -distance, distance)
            )
        return leeway.reshape(shape)

    @cached_property
    def _rings(self):
        return [cKDTree(outline.points(WALL_POINTS)) for outline in self.keep_out]

    def clear(self, z, room):
        """(m,) whether mounts, and all that they carry, may stand at places z.

        ``room``: at least so far from walls.
        """
        clear = self.leeway(z, room) >= 0
        points = z[clear, None] + self._offsets
        blocked = np.zeros(points.shape, bool)
        for outline in self.keep_out:
            blocked |= inside(outline, pairs(points))
        clear[clear] = self.stands(z[clear]) & ~blocked.any(axis=1)
        return clear

    def stands(self, z):
        """(m,) whether all that a mount carries stands in the flow, allowed or not."""
        model = self.asked.model
        points = z[:, None] + self._offsets
        in_flow = ~inside(model, pairs(points)) & holds(model.surroundings, points)
        stands = in_flow.all(axis=1)
        walls = [wall @ [1, 1j] for wall in model.walls]
        for sensor in self.carried:
            if len(sensor.points) > 1:
                for place in np.flatnonzero(stands):
                    here = sensor.moved(z[place].real, z[place].imag)
                    stands[place] = not any(here.meets(wall) for wall in walls)
        return stands

    @cached_property
    def _offsets(self):
        """Sample points of all that a mount carries, from its place, complex."""
        return np.concatenate([sensor.points for sensor in self.carried]) @ [1, 1j]

    def sensors(self, z):
        """What the mounts at z carry, end to end, without names."""
        return [sensor.moved(*place) for place in pairs(z) for sensor in self._nameless]

    @cached_property
    def _nameless(self):
        return tuple(replace(sensor, name=None) for sensor in self.carried)

    @cached_property
    def _lighter(self):
        """What a scan reads in place of discs, and the shares (s, k) in which it is averaged.

        Four points at the root of a half of the radius: exact for a speed of third degree.
        """
        points, shares = [], np.zeros((0, len(self.carried)))
        for place, sensor in enumerate(self._nameless):
            own = [sensor]
            if sensor.kind == "disc":
                ring = sensor.radius * np.sqrt(0.5) * np.array([1, 1j, -1, -1j])
                middle = pairs(ring) + sensor.centre
                own = [PointSensor(*point, reads=sensor.reads) for point in middle]
            points += own
            share = np.eye(len(self.carried))[[place] * len(own)] / len(own)
            shares = np.concatenate([shares, share])
        return tuple(points), shares

    @property
    def samples(self):
        """How many points a scan reads at a place."""
        return sum(len(sensor.points) for sensor in self._lighter[0])

    def read(self, z, directions, slopes=True, trust=True, exactly=True):
        """Errors (q, n, m) of every part, with signs; their slopes (q, n, m, 2); trust (n, m).

        If not exactly, as a scan does.
        """
        carried, shares = self._lighter
        if exactly:
            carried, shares = self._nameless, np.eye(len(self.carried))
        samples = sum(len(sensor.points) for sensor in carried)
        at_once = max(1, READINGS_AT_ONCE // (len(directions) * samples))
        errors = np.empty((len(self._parts), len(directions), len(z)))
        gradients = np.empty((*errors.shape, 2)) if slopes else None
        trusted = np.ones(errors.shape[1:], bool)
        for first in range(0, len(z), at_once):
            part = slice(first, first + at_once)
            places = pairs(z[part])
            table = survey(
                self.asked.model,
                [sensor.moved(*place) for place in places for sensor in carried],
                directions,
                reynolds=self.asked.reynolds if trust else None,
            )
            shape = (len(directions), len(places), len(carried))
            if trust:
                trusted[:, part] = table.trust.reshape(shape).all(axis=2)
            for row, (sensor, quantity) in enumerate(self._parts):
                mine = np.flatnonzero(shares[:, sensor])
                share = shares[mine, sensor]
                column, slope, scale = (
                    (table.speed_ratio - 1, "speed_ratio_gradient", 1.0)
                    if quantity == "speed" else
                    (table.direction_error, "direction_error_gradient",
                     self.limit / self.direction_limit)
                )
                errors[row, :, part] = scale * column.reshape(shape)[..., mine] @ share
                if slopes:
                    values = getattr(table, slope).reshape(*shape, 2)[:, :, mine]
                    gradients[row, :, part] = scale * np.einsum("nmsa,s->nma", values, share)
        return errors, gradients, trusted

    def trust(self, z):
        """(n, m) whether all that a mount carries is trusted, at places that are clear."""
        directions, carried = self.asked.directions, self._lighter[0]
        trust = np.ones((len(directions), len(z)), bool)
        at_once = max(1, READINGS_AT_ONCE // (len(directions) * self.samples))
        for first in range(0, len(z), at_once):
            part = slice(first, first + at_once)
            sensors = [one.moved(*place) for place in pairs(z[part]) for one in carried]
            table = survey(self.asked.model, sensors, directions, reynolds=self.asked.reynolds)
            trust[:, part] = table.trust.reshape(len(directions), -1, len(carried)).all(axis=2)
        return trust

    def errors(self, z):
        """(n, m) errors of the places alone: the greatest of the parts, infinite without trust."""
        errors, _, trust = self.read(z, self.asked.directions, slopes=False)
        return _greatest(errors, trust)


def _greatest(errors, trust):
    """(n, m) greatest of the parts' errors; infinite where one has no meaning or no trust."""
    greatest = np.abs(errors).max(axis=0)
    return np.where(trust & np.isfinite(greatest), greatest, np.inf)


@dataclass(frozen=True, eq=False)
class Ratings:
    """How good sets of places are, (t,) each; ``sets`` (t, k) are indices of the scan's places."""

    sets: np.ndarray
    worst: np.ndarray
    share: np.ndarray
    mean: np.ndarray

    @classmethod
    def of(cls, errors, weights, limit, sets):
        """Of the errors (m, n) of places, taking the best place of a set in each wind."""
        worst, share, mean = np.empty((3, len(sets)))
        at_once = max(1, SETS_AT_ONCE // errors.shape[1])
        for first in range(0, len(sets), at_once):
            part = slice(first, first + at_once)
            least = errors[sets[part, 0]]
            for member in sets[part, 1:].T:
                np.minimum(least, errors[member], out=least)
            worst[part] = least.max(axis=1)
            share[part] = (least <= limit * WITHIN) @ weights
            mean[part] = np.minimum(least, 1.0) @ weights
        return cls(sets, worst, share, mean)

    def keys(self, limit, lengths=None):
        """(t, 3) what to sort sets by, the best first; see the notes of ``best_mounts``."""
        worst, share = self.worst, self.share
        level = np.where(worst <= limit * WITHIN, 0, np.where(np.isfinite(worst), 1, 2))
        first = np.where(level == 2, -share, worst)
        second = np.where(level == 2, self.mean, 0.0)
        if lengths is not None:
            first = np.where(level == 0, lengths, first)
            some = (level == 2) & (share > 0)
            second = np.where(level == 0, worst, np.where(some, lengths, self.mean))
        # Mirror images are equal but for rounding.
        return np.stack([level, first.round(12), second.round(12)], axis=1)


class Scan:
    """The errors at the places of a grid (rows, columns), and what lies between them.

    half_steps (rows, columns, 2) are complex displacements: half a step along either axis; the
    columns may close to a ring; clear (rows, columns) says which places are allowed.
    """

    def __init__(self, site, places, half_steps, closes, clear):
        self.site, self.shape, self.closes = site, places.shape, closes
        self.places, self.clear = places.ravel(), clear.ravel()
        self.half_steps = half_steps.reshape(-1, 2)
        readings = site.read(self.places[self.clear], site.asked.directions, exactly=False)
        self.errors = self._spread(_greatest(readings[0], readings[2]), np.inf).T
        self.changes = self._changes(readings[1])
        self.hopes = self._hopes(readings[0], readings[2])

    def _spread(self, values, empty):
        full = np.full((len(values), len(self.places)), empty)
        full[:, self.clear] = values
        return full

    def _around(self, values, operation):
        """(n, m) values joined with those of the eight neighbours of every place."""
        grid = values.reshape(-1, *self.shape)
        for axis in (1, 2):
            ahead, behind = (np.roll(grid, step, axis) for step in (1, -1))
            if not (axis == 2 and self.closes):
                np.moveaxis(ahead, axis, 0)[0] = np.moveaxis(grid, axis, 0)[0]
                np.moveaxis(behind, axis, 0)[-1] = np.moveaxis(grid, axis, 0)[-1]
            grid = operation(operation(grid, ahead), behind)
        return grid.reshape(len(values), -1)

    def _changes(self, slopes):
        """(2, q, n, m) the most that errors could change over half a step along either axis.

        By the slopes at a place and at its neighbours.
        """
        steps = pairs(self.half_steps)[self.clear]
        changes = np.abs(np.einsum("qnma,msa->sqnm", slopes, steps))
        return np.stack([
            [self._around(self._spread(np.nan_to_num(part), 0.0), np.maximum) for part in axis]
            for axis in changes
        ])

    def _hopes(self, errors, trust):
        """(m, n) the least that the errors could be within half a step of every place."""
        hopes = None
        for part, change in zip(np.abs(errors), self.changes.sum(axis=0), strict=True):
            value = self._spread(part, np.nan)
            # Beside a place that is not allowed, half a step may lead to one that is.
            beside = self._around(value - change, np.fmin)
            value = np.maximum(np.where(np.isnan(value), beside, value) - change, 0.0)
            hopes = value if hopes is None else np.fmax(hopes, value)
        trusted = self._around(self._spread(trust, False).astype(bool), np.logical_or)
        return np.where(trusted & np.isfinite(hopes), hopes, np.inf).T

    @cached_property
    def allowed(self):
        """Whether a place is allowed, or one beside it."""
        return self._around(self.clear[None], np.logical_or)[0]

    def rate(self, errors, sets):
        """Ratings of sets by the errors, or by the hopes."""
        asked = self.site.asked
        return Ratings.of(errors, asked.weights, self.site.limit, sets)


def sets_of(places, allowed, count, spacing, room):
    """(t, count) indices of the places allowed, as sets no closer together than the spacing."""
    indices = np.flatnonzero(allowed)
    if count == 1:
        return indices[:, None]
    combinations = itertools.combinations(indices.tolist(), count)
    sets = np.array(list(combinations), dtype=np.intp).reshape(-1, count)
    for one, other in itertools.combinations(range(count), 2):
        apart = np.abs(places[sets[:, one]] - places[sets[:, other]])
        sets = sets[apart >= spacing - room]
    return sets


def pairs(z):
    return np.stack([z.real, z.imag], axis=-1)
