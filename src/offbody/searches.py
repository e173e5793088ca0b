"""Searches for places in the flow: booms of one length from one foot, and areas."""

import itertools
from dataclasses import dataclass, replace

import numpy as np
from scipy.optimize import minimize
from scipy.spatial import cKDTree

from offbody.choices import Mount, Search
from offbody.errors import InputError
from offbody.exclusions import Exclusion
from offbody.model import inside
from offbody.scans import WITHIN, Ratings, Scan, pairs, sets_of
from offbody.surveys import survey

RINGS = 26  # lengths of a scan,
FINE_RINGS = 12  # and of the second one, for sets of booms
TRIAL_LENGTHS = 100  # among which the shortest that stands clear is sought
AROUND = {1: 100, 2: 90, 3: 36}  # angles of a scan, for one boom or for sets of two or three,
LEAST_AROUND = 36  # and where every place is read at many points
GRID = {1: 2500, 2: 350, 3: 70}  # places of a scan in an area,
DENSITIES = (1, 3, 10, 30)  # times as many, where little of it is allowed
DISTINCT = 12.0  # degrees between booms that count as another choice
DISTINCT_SHARE = 0.1  # the same in an area, of its size
WIDE_GAP = 0.1  # between what was found and the bound, beyond which a note says so
OFF_WALL = 1e-6  # of the region's size: a sensor stands clear of walls
ON_EDGE = 1e-9  # of the region's size: rounding puts no place beyond its edge
MOST_EXCHANGES = 6


class _RegionSearch:
    """What searches over booms and over an area share: ratings, refinement, and the result."""

    def __init__(self, site, where):
        self.site, self.where = site, where

    def _scanned(self, scan):
        """Sets of a scan with their ratings, and the ratings of what lies within half a step."""
        count, spacing = self.site.asked.count, self.site.spacing
        found, hoped = [], []
        for ring in self._rings(scan):
            for allowed, errors, room, rated in (
                (scan.clear, scan.errors, 0.0, found),
                (scan.allowed, scan.hopes, self._room(scan, ring), hoped),
            ):
                here = np.zeros(len(scan.places), bool)
                here[ring] = allowed[ring]
                rated.append(scan.rate(errors, sets_of(scan.places, here, count, spacing, room)))
        return _joined(found), _joined(hoped)

    def _refined(self, variables, steps):
        """The variables of a set, refined; as they were if that made it no better."""
        start = self._judged(variables)
        served = start.error <= self.site.limit * WITHIN
        by_length = start.key[0] != 1 and self._has_length
        if not served.any():
            return start
        if start.key[0] == 1:
            served = np.ones(len(served), bool)
        moved_to = _Refinement(self, variables, steps, start, served, by_length).run()
        for share in (1.0, 0.5, 0.25, 0.1, 0.03):
            # The way there may leave the limits of trust: go as far as it does not.
            tried = self._judged(variables + share * (moved_to - variables))
            if tried is not None and tried.key < start.key:
                return tried
        return start

    def _judged(self, variables):
        """The judgement of one set, or None where it may not stand."""
        site, z = self.site, self.place(variables)
        tolerance = 0.5 * OFF_WALL * self.size
        apart = self._apart(z) >= site.spacing - tolerance
        if not apart or not site.clear(z, self.room - tolerance).all():
            return None
        errors = site.errors(z)
        sets = np.arange(len(z))[None]
        ratings = Ratings.of(errors.T, site.asked.weights, site.limit, sets)
        lengths = self.lengths(variables)
        key = tuple(ratings.keys(site.limit, lengths)[0].tolist())
        return _Judged(
            variables, z, errors, errors.min(axis=1), errors.argmin(axis=1), ratings, key
        )

    @staticmethod
    def _apart(z):
        """Least distance between two places; infinite for one."""
        twos = itertools.combinations(z, 2)
        return min((abs(one - other) for one, other in twos), default=np.inf)

    def _best(self, ratings, lengths):
        """The best key of all ratings."""
        keys = ratings.keys(self.site.limit, lengths)
        return keys[np.lexsort(keys.T[::-1])[0]]

    def _refuse_none(self, ratings):
        if not len(ratings.sets):
            raise InputError(
                f"where = {self.where!r}: no place is allowed; a larger region, or less clearance, "
                "spacing or keep_out would help"
            )

    def _distinct(self, scan, ratings, lengths):
        """The best sets of a scan that differ from each other."""
        order = np.lexsort(ratings.keys(self.site.limit, lengths).T[::-1])
        places = scan.places[ratings.sets[order]]
        left = np.ones(len(order), bool)
        for _ in range(self.site.asked.choices):
            if left.any():
                first = int(left.argmax())
                yield ratings.sets[order[first]]
                left &= self._differs(places, places[first])

    def _result(self, scan, steps, step):
        """The Mounts of a scan's best sets, refined, and what the scan and its cells exclude."""
        site = self.site
        found, hoped = self._scanned(scan)
        self._refuse_none(found)
        lengths = self._lengths_of(scan, found)
        best = self._best(found, lengths)
        starts = [self._variables(scan, one) for one in self._distinct(scan, found, lengths)]
        judged = sorted((self._refined(start, steps) for start in starts), key=lambda j: j.key)
        bound, places = self._bound(best[0], scan, hoped), len(scan.places)
        by_length = self._has_length and judged[0].key[0] == 0
        looked_at = scan
        if by_length and site.asked.count > 1 and bound < judged[0].key[1]:
            # Of sets there are too many to split their cells: look at lengths more closely.
            looked_at = self._scan(np.linspace(max(bound, self.room), judged[0].key[1], FINE_RINGS))
            _, hoped = self._scanned(looked_at)
            bound = max(bound, self._bound(0, looked_at, hoped))
            places += len(looked_at.places)
        if judged[0].key[0] < 2:
            proof = Exclusion(self, looked_at, hoped, by_length, judged[0].key[1])
            bound, places = max(bound, proof.bound), places + proof.places
            if proof.better is not None and self._judged(proof.better) is not None:
                judged.insert(0, self._refined(proof.better, steps))
                judged = sorted(judged, key=lambda j: j.key)[: site.asked.choices]
        mounts = [self._mount(one) for one in judged]
        quantity = "length" if by_length else "share" if judged[0].key[0] == 2 else "worst error"
        search = Search(
            quantity=quantity,
            places=places,
            sets=len(found.sets),
            step=step,
            scan_best=abs(float(best[1])) if best[0] == judged[0].key[0] else np.nan,
            refined=getattr(mounts[0], quantity.replace(" ", "_")),
            bound=bound,
        )
        curve = self._curve(scan, found, mounts[0])
        notes = self._notes(judged[0], search)
        return site.asked.result(self.where, mounts, site.limit, curve, search, notes)

    def _mount(self, judged):
        """The Mount of a judged set."""
        site, asked = self.site, self.site.asked
        z, error = judged.z, judged.error
        trusted = np.isfinite(error)
        serves = np.where(trusted, judged.serves, -1)
        within = error <= site.limit * WITHIN
        per_length, per_degree = self._sensitivity(judged, within if within.any() else trusted)
        worst = int(np.where(trusted, error.round(9), np.inf).argmax())
        mounts = [f"{self.word} {number}" for number in range(1, len(z) + 1)]
        sensors = [
            replace(sensor, name=mount if own is None else f"{mount} {own}")
            for mount, place in zip(mounts, z, strict=True)
            for sensor, own in zip(site.sensors(np.array([place])), self._own_names, strict=True)
        ]
        return Mount(
            sensors=tuple(sensors),
            places=pairs(z),
            angles=self.angles(judged.variables),
            length=None if not self._has_length else float(self.lengths(judged.variables)[0]),
            error=error,
            serves=serves,
            worst_error=float(error.max()),
            worst_angle=float(asked.angles[worst]),
            mean_error=float(judged.ratings.mean[0]),
            share=float(judged.ratings.share[0]),
            margin=float(site.limit - error.max()),
            wall_distance=float(site.wall_distance(z).min()),
            spacing=float(self._apart(z)),
            error_per_length=per_length,
            error_per_degree=per_degree,
        )

    @property
    def _own_names(self):
        carried = self.site.carried
        if len(carried) == 1:
            return [carried[0].name]
        return [one.name or f"{one.kind} {k}" for k, one in enumerate(carried, start=1)]

    def _sensitivity(self, judged, winds):
        """Greatest change of the errors that count, per unit of length and per degree."""
        if not winds.any():
            return np.nan, np.nan
        directions = self.site.asked.directions[winds]
        _, slopes, _ = self.site.read(judged.z, directions, trust=False)
        mine = slopes[:, np.arange(len(directions)), judged.serves[winds]]
        mounts = judged.z[judged.serves[winds]]
        return self._rates(mine @ [1, -1j], mounts)

    def _notes(self, best, search):
        """What it came to, and what the survey of the best choice has to say."""
        site = self.site
        percent = f"{100 * site.limit:g} percent"
        if best.key[0] == 1:
            yield (
                f"No choice keeps every wind within {percent}: these have the least worst error "
                "with every wind trusted."
            )
        if best.key[0] == 2:
            yield (
                f"No choice has a trusted sensor in every wind: these keep the greatest share of "
                f"the wind within {percent}."
            )
        if not search.gap <= WIDE_GAP:
            yield (
                f"Between the places of the scan there is room for a {search.quantity} of "
                f"{search.bound:.3g}, against {search.refined:.3g} found: search a smaller region, "
                "where the scan is denser, to exclude it."
            )
        asked = site.asked
        table = survey(asked.model, site.sensors(best.z), asked.directions, reynolds=asked.reynolds)
        yield from table.notes


@dataclass(frozen=True, eq=False)
class _Judged:
    """One set: its variables, places (k,), errors (n, k), and in each wind the least and whose."""

    variables: np.ndarray
    z: np.ndarray
    errors: np.ndarray
    error: np.ndarray
    serves: np.ndarray
    ratings: Ratings
    key: tuple


class _Refinement:
    """Sequential quadratic programming on one set: the shortest length, or the least worst error.

    In each wind the mount that read it best at the start is held to the limit. A few winds stand
    for all: those at peaks of the error, joined by others as these come to exceed the limit.
    """

    def __init__(self, search, variables, steps, start, served, by_length):
        self.search, self.by_length = search, by_length
        self.start, self.steps, self.served = variables, steps, served
        self.serves = start.serves
        self.site = search.site
        self.level = self.site.limit if by_length else float(start.error[served].max())
        self._kept = None

    def run(self):
        """The refined variables."""
        winds = self._peaks(self._errors(self.start))
        best = self.start
        for _ in range(MOST_EXCHANGES):
            try:
                best, level = self._solved(winds)
            except InputError:  # a step led into a body
                return best
            errors = self._errors(best)
            over = self._peaks(np.where(errors > level * WITHIN + 1e-12, errors, 0.0))
            if not np.setdiff1d(over, winds).size:
                break
            winds = np.union1d(winds, over)
        return best

    def _errors(self, variables):
        """(n,) errors of the winds that are served, zero in the others."""
        try:
            values, _ = self._read(variables, np.flatnonzero(self.served), slopes=False)
        except InputError:
            return np.zeros(len(self.served))
        errors = np.zeros(len(self.served))
        errors[self.served] = np.abs(values).max(axis=0)
        return errors

    def _peaks(self, errors):
        """Winds where the error is greatest among neighbours and more than half the greatest."""
        padded = np.pad(errors, 1, mode="wrap")
        peak = (errors >= padded[:-2]) & (errors >= padded[2:]) & (errors > 0)
        # An arc has ends; and where mounts take over from each other there is a peak of either.
        serves = np.pad(self.serves, 1, mode="wrap")
        peak |= (self.serves != serves[:-2]) | (self.serves != serves[2:])
        peak[[0, -1]] = True
        return np.flatnonzero(peak & self.served & (errors > 0.5 * errors.max()))

    def _read(self, variables, winds, slopes=True):
        """Errors (q, w), with signs, of the mounts that serve the winds; slopes by variables."""
        z = self.search.place(variables)
        errors, gradients, _ = self.site.read(
            z, self.site.asked.directions[winds], slopes=slopes, trust=False
        )
        mine = (slice(None), np.arange(len(winds)), self.serves[winds])
        if not slopes:
            return errors[mine], None
        gradient, axes = gradients[mine], self.search.axes(len(variables))
        along = self.search.along(variables)[self.serves[winds]]
        both = gradient[..., :1] * along.real + gradient[..., 1:] * along.imag
        rates = np.zeros((*both.shape[:2], len(variables)))
        np.put_along_axis(rates, np.broadcast_to(axes[self.serves[winds]], both.shape), both, -1)
        return errors[mine], rates

    def _constraints(self, unknowns, winds):
        """Room to the limit on either side, and its slopes, at the same unknowns only once."""
        if self._kept is None or not np.array_equal(self._kept[0], unknowns):
            variables = unknowns[: len(self.start)]
            values, rates = self._read(variables, winds)
            values, rates = values.ravel(), rates.reshape(-1, len(variables))
            level = self.level if self.by_length else unknowns[-1]
            room = np.concatenate([level - values, level + values])
            slopes = np.concatenate([-rates, rates])
            if not self.by_length:
                slopes = np.column_stack([slopes, np.ones(len(slopes))])
            scale = self.site.limit
            self._kept = np.array(unknowns), np.nan_to_num(room / scale), slopes / scale
        return self._kept[1:]

    def _solved(self, winds):
        """Variables and the greatest error for a few winds."""
        search, site, self._kept = self.search, self.site, None
        size = len(self.start)
        unknowns, bounds = self.start, search.bounds(self.start, self.steps)
        if self.by_length:
            target = np.eye(size)[0]
        else:
            unknowns = np.append(unknowns, self.level)
            bounds = [*bounds, (0.0, self.level)]
            target = np.eye(size + 1)[-1] / site.limit
        constraints = [
            {
                "type": "ineq",
                "fun": lambda x: self._constraints(x, winds)[0],
                "jac": lambda x: self._constraints(x, winds)[1],
            },
            {
                "type": "ineq",
                "fun": lambda x: (site.wall_distance(search.place(x[:size])) - search.room)
                / search.size,
            },
        ]
        if site.spacing and len(search.place(self.start)) > 1:
            constraints.append({
                "type": "ineq",
                "fun": lambda x: (search._apart(search.place(x[:size])) - site.spacing)
                / search.size,
            })
        found = minimize(
            lambda x: target @ x, unknowns, jac=lambda x: target, bounds=bounds, method="SLSQP",
            constraints=constraints, options={"maxiter": 60, "ftol": 1e-12},
        )
        return found.x[:size], self.level if self.by_length else float(found.x[-1])


# --- booms ---------------------------------------------------------------------------------------


class BoomSearch(_RegionSearch):
    """Booms of one length: the variables are the length over the greatest, and the headings."""

    word = "boom"
    _has_length = True

    def __init__(self, site, where):
        super().__init__(site, where)
        self.size = where.greatest
        self.room = max(site.clearance, OFF_WALL * self.size)
        self.foot = complex(*where.foot)
        self.headings, self.turn, self.closes = self._headings()

    def _headings(self):
        """The headings of a scan, the step between them, and whether they close."""
        asked = self.site.asked
        count = max(LEAST_AROUND, int(AROUND[asked.count] / np.sqrt(self.site.samples)))
        if self.where.sector is None:
            return np.arange(count) * 2 * np.pi / count, 2 * np.pi / count, True
        first, last = self.where.sector
        sweep = (last - first) % 360.0 if last != first else 0.0
        if sweep == 0.0 and last != first:
            sweep = 360.0
        number = max(2 * asked.count, round(count * sweep / 360.0) + 1) if sweep else 1
        headings = asked.heading(first + np.linspace(0.0, sweep, number))
        return headings, np.radians(sweep) / max(number - 1, 1), False

    def found(self):
        scan = self._scan(self._first_lengths())
        step = float(np.diff(self._radii(scan)).max(initial=0.0))
        steps = np.array([step / self.size] + [self.turn] * self.site.asked.count)
        return self._result(scan, steps, (step, float(np.degrees(self.turn))))

    def _first_lengths(self):
        """Lengths of the first scan, from the shortest that may stand somewhere to the greatest."""
        least = max(self.where.least, 1e-3 * self.size)
        if least >= self.size:
            return np.array([self.size])
        trial = np.geomspace(least, self.size, TRIAL_LENGTHS)
        z = self.foot + trial[:, None] * np.exp(1j * self.headings)
        stands = ~inside(self.site.asked.model, pairs(z))
        stands[stands] = self.site.wall_distance(z[stands]) >= self.room
        first = int(stands.any(axis=1).argmax())
        return np.geomspace(trial[max(first - 1, 0)], self.size, RINGS)

    def _scan(self, lengths):
        z = np.exp(1j * self.headings)
        gaps = np.diff(lengths, prepend=lengths[0], append=lengths[-1])
        along = 0.5 * np.maximum(gaps[:-1], gaps[1:])[:, None] * z
        around = 0.5j * self.turn * lengths[:, None] * z
        places = self.foot + lengths[:, None] * z
        clear = self.site.clear(places.ravel(), self.room).reshape(places.shape)
        return Scan(self.site, places, np.stack([along, around], axis=-1), self.closes, clear)

    def _radii(self, scan):
        return np.abs(scan.places - self.foot).reshape(scan.shape)[:, 0]

    def _rings(self, scan):
        rows, columns = scan.shape
        return (slice(row * columns, (row + 1) * columns) for row in range(rows))

    def _room(self, scan, ring):
        """By how much two booms of a ring may come closer within half a step."""
        return self.turn * float(np.abs(scan.places[ring.start] - self.foot))

    def _lengths_of(self, scan, ratings):
        return np.abs(scan.places[ratings.sets[:, 0]] - self.foot)

    def _bound(self, level, scan, hoped):
        """What no finer search could pass."""
        if level == 1:
            return float(hoped.worst.min())
        if level == 2:
            return float(hoped.share.max())
        radii = self._radii(scan)
        below = radii - 0.5 * np.diff(radii, prepend=radii[0])
        rows = hoped.sets[hoped.worst <= self.site.limit * WITHIN, 0] // scan.shape[1]
        return float(below[rows].min(initial=radii[-1]))

    def _curve(self, scan, ratings, best):
        """Length, least worst error and greatest share of every ring, and those of the best."""
        radii, rows = self._radii(scan), ratings.sets[:, 0] // scan.shape[1]
        worst, share = np.full(len(radii), np.inf), np.zeros(len(radii))
        np.minimum.at(worst, rows, ratings.worst)
        np.maximum.at(share, rows, ratings.share)
        some = np.isin(np.arange(len(radii)), rows) & (radii != best.length)
        place = np.searchsorted(radii[some], best.length)
        return {
            name: np.insert(values[some], place, getattr(best, name))
            for name, values in (("length", radii), ("worst_error", worst), ("share", share))
        }

    def cells(self, scan, sets):
        """Middles and halves (t, d) of the cells round sets of a scan's places."""
        arms = scan.places[sets] - self.foot
        lengths = np.abs(arms[:, :1])
        along = np.abs(scan.half_steps[sets[:, :1], 0])
        halves = np.hstack([along / self.size, np.full(sets.shape, 0.5 * self.turn)])
        return np.hstack([lengths / self.size, np.angle(arms)]), halves

    def _variables(self, scan, one):
        arms = scan.places[one] - self.foot
        return np.array([np.abs(arms[0]) / self.size, *np.angle(arms)])

    def place(self, variables):
        """Places (..., k) of variables (..., d)."""
        return self.foot + variables[..., :1] * self.size * np.exp(1j * variables[..., 1:])

    def along(self, variables):
        """(..., k, 2) complex moves of places, per unit along the booms and round the foot."""
        ahead = self.size * np.exp(1j * variables[..., 1:])
        return np.stack([ahead, 1j * variables[..., :1] * ahead], axis=-1)

    @staticmethod
    def axes(dimensions):
        """(k, 2) which variable moves a place along each of them."""
        return np.array([[0, place] for place in range(1, dimensions)])

    def leeway(self, z):
        """(m,) how far places are from where no mount may stand; negative where none may."""
        arm = z - self.foot
        length = np.abs(arm)
        leeway = np.minimum(self.size - length, length - self.where.least) + ON_EDGE * self.size
        if self.where.sector is not None:
            middle, half = self.headings[[0, -1]].mean(), 0.5 * np.ptp(self.headings[[0, -1]])
            off = np.abs(np.angle(arm * np.exp(-1j * middle)))
            leeway = np.minimum(leeway, length * (half - off) + ON_EDGE * self.size)
        return np.minimum(leeway, self.site.leeway(z, self.room))

    def bounds(self, variables, steps):
        """How far the refinement may go: a step and a half, within the region."""
        low, high = variables - 1.5 * steps, variables + 1.5 * steps
        low[0] = max(low[0], self.where.least / self.size, 1e-6)
        high[0] = min(high[0], 1.0)
        if self.where.sector is not None:
            ends = np.sort(self.headings[[0, -1]])
            turns = np.round((variables[1:] - ends.mean()) / (2 * np.pi)) * 2 * np.pi
            low[1:] = np.maximum(low[1:], ends[0] + turns)
            high[1:] = np.minimum(high[1:], ends[1] + turns)
        low, high = np.minimum(low, variables), np.maximum(high, variables)
        return list(zip(low, high, strict=True))

    def lengths(self, variables):
        return np.array([variables[0] * self.size])

    def angles(self, variables):
        return self.site.asked.angle(variables[1:])

    def _differs(self, places, z):
        """(t,) whether sets of places point elsewhere than the booms to z."""
        arms, others = places - self.foot, z - self.foot
        turn = np.abs(np.angle(arms[:, :, None] * others.conj(), deg=True)).min(axis=2)
        return turn.max(axis=1) > DISTINCT

    def _rates(self, slopes, mounts):
        """Greatest error per length along the booms, and per degree that they turn."""
        arms = mounts - self.foot
        along, around = (slopes * (arms / np.abs(arms))).real, (slopes * 1j * arms).real
        return float(np.abs(along).max()), float(np.radians(np.abs(around).max()))


def _joined(ratings):
    """Ratings of several rings, end to end."""
    names = ("sets", "worst", "share", "mean")
    return Ratings(*(np.concatenate([getattr(one, name) for one in ratings]) for name in names))


# --- areas ---------------------------------------------------------------------------------------


class AreaSearch(_RegionSearch):
    """Places within an outline: the variables are x and y of each, over the area's size."""

    word = "mount"
    _has_length = False

    def __init__(self, site, where):
        super().__init__(site, where)
        ring = where.points(2000)
        self._ring = cKDTree(ring)
        self.low, self.sides = ring.min(axis=0), np.ptp(ring, axis=0)
        self.size = float(self.sides.max())
        self.room = max(site.clearance, OFF_WALL * self.size)

    def found(self):
        scan = self._scan()
        steps = np.tile(self.step, self.site.asked.count) / self.size
        return self._result(scan, steps, tuple(self.step.tolist()))

    def _scan(self):
        """The scan of a grid that is dense enough for the part of the area that is allowed."""
        wanted = GRID[self.site.asked.count]
        for density in DENSITIES:
            number = np.sqrt(density * wanted / np.prod(self.sides))
            counts = np.maximum(2, np.ceil(self.sides * number)).astype(int)
            self.step = self.sides / counts
            # Middles of cells: half a step round them covers the area.
            x, y = (
                low + size * (np.arange(count) + 0.5)
                for low, size, count in zip(self.low, self.step, counts, strict=True)
            )
            places = x + 1j * y[:, None]
            fence = inside(self.where, pairs(places))
            fence[fence] = self.site.clear(places[fence], self.room)
            if 3 * fence.sum() >= wanted:
                break
        half = np.broadcast_to([0.5 * self.step[0], 0.5j * self.step[1]], (*places.shape, 2))
        return Scan(self.site, places, half, False, fence)

    def _rings(self, scan):
        return [slice(0, len(scan.places))]

    def _room(self, scan, ring):
        """By how much two places may come closer within half a step."""
        return float(np.hypot(*self.step))

    def cells(self, scan, sets):
        """Middles and halves (t, d) of the cells round sets of a scan's places."""
        middles = pairs(scan.places[sets]).reshape(len(sets), -1) / self.size
        halves = np.tile(0.5 * self.step / self.size, (len(sets), sets.shape[1]))
        return middles, halves

    def place(self, variables):
        """Places (..., k) of variables (..., d)."""
        return self.size * (variables[..., ::2] + 1j * variables[..., 1::2])

    def along(self, variables):
        """(..., k, 2) complex moves of the places, per unit along x and y."""
        shape = (*variables.shape[:-1], variables.shape[-1] // 2, 2)
        return np.broadcast_to(self.size * np.array([1.0, 1j]), shape)

    @staticmethod
    def axes(dimensions):
        """(k, 2) which variable moves a place along each of them."""
        return np.arange(dimensions).reshape(-1, 2)

    def leeway(self, z):
        """(m,) how far places are from where no mount may stand; negative where none may."""
        distance = self._ring.query(pairs(z))[0]
        fence = np.where(inside(self.where, pairs(z)), distance, -distance)
        return np.minimum(fence, self.site.leeway(z, self.room))

    def _variables(self, scan, one):
        return (pairs(scan.places[one]) / self.size).ravel()

    def _lengths_of(self, scan, ratings):
        return None

    def _bound(self, level, scan, hoped):
        """What no finer search could pass."""
        return float(hoped.share.max() if level == 2 else hoped.worst.min())

    def _curve(self, scan, ratings, best):
        return None

    def bounds(self, variables, steps):
        """How far the refinement may go: a step and a half."""
        return list(zip(variables - 1.5 * steps, variables + 1.5 * steps, strict=True))

    def _judged(self, variables):
        if not inside(self.where, pairs(self.place(variables))).all():
            return None
        return super()._judged(variables)

    def lengths(self, variables):
        return None

    def angles(self, variables):
        return None

    def _differs(self, places, z):
        """(t,) whether one place of each set is far from all of z."""
        away = np.abs(places[:, :, None] - z).min(axis=2)
        return away.max(axis=1) > DISTINCT_SHARE * self.size

    def _rates(self, slopes, mounts):
        return float(np.abs(slopes).max()), np.nan
