"""Ports in a wall: the static port that stays nearest the undisturbed pressure, the best pair."""

import numpy as np
from scipy.optimize import brentq, minimize, minimize_scalar

from offbody.bearings import to_bearing, within_turn
from offbody.checks import as_body
from offbody.choices import PortMount, Search
from offbody.errors import InputError
from offbody.scans import pairs
from offbody.sensors import PointSensor, WallPort
from offbody.surveys import survey

DISTINCT_PORTS = 0.02  # of the wall's length, between ports that count as another choice
TURN_STEP = 0.05  # degrees, for slopes of a pressure against the wind


class Ports:
    """Ports in a stretch of wall; its places are the nodes of the wall."""

    def __init__(self, asked, where, limit):
        self.asked, self.where, self.limit = asked, where, limit
        self.model = asked.model
        self.body = as_body("body", where.body, len(self.model.outlines))
        if asked.count > 2:
            raise InputError(f"count = {asked.count}: ports are sought alone or in pairs")
        wall = self.model.surface(self.body, asked.directions)
        fractions = wall.arc / self.model._arcs[self.body].length
        order = np.argsort((fractions - where.first) % 1.0)
        order = order[where.holds(fractions[order])]
        if len(order) < 3:
            raise InputError(f"where = {where!r}: too short to hold three nodes of the wall")
        # Unrolled, so that they grow across the outline's first point.
        self.fractions = where.first + (fractions[order] - where.first) % 1.0
        self.closed = where.first == 0.0 and where.last == 1.0
        self.points, self.pressure = wall.points[order], wall.pressure_coefficient[:, order]
        self.table = survey(
            self.model, [PointSensor(*point) for point in self.points], asked.directions,
            reynolds=asked.reynolds,
        )
        self.trust = self.table.trust & np.isfinite(self.pressure)

    @property
    def _turns(self):
        """Whether the wind can turn at all."""
        return not self.model.surroundings.walls

    def pressures(self, fractions, directions):
        """(k, n) pressure coefficients at arc fractions."""
        return np.stack([
            self.model.port_pressure(self.body, float(fraction % 1.0), directions)
            for fraction in fractions
        ])

    def slopes(self, fractions, directions):
        """(k, n) their slopes per degree of direction."""
        if not self._turns:
            return np.full((len(fractions), len(directions)), np.nan)
        ahead = self.pressures(fractions, directions + TURN_STEP)
        return (ahead - self.pressures(fractions, directions - TURN_STEP)) / (2 * TURN_STEP)

    def found(self):
        if self.asked.count == 1:
            return self._static()
        if not self._turns:
            raise InputError(
                f"count = 2 in {self.model.surroundings!r}: the stream cannot turn there, so no "
                "pair of ports can tell its direction"
            )
        return self._pair()

    # --- a static port

    def _static(self):
        errors = np.where(self.trust, np.abs(self.pressure), np.inf)
        worst = errors.max(axis=0)
        before, after = self._neighbours(worst, np.inf)
        lowest = np.flatnonzero(np.isfinite(worst) & (worst <= before) & (worst <= after))
        if not lowest.size:
            raise InputError(
                f"where = {self.where!r}: no port there is trusted in every wind asked for; ask "
                "for fewer winds or another stretch"
            )
        found = sorted(
            (self._port([self._polished_static(node)]) for node in lowest),
            key=lambda port: (round(port.worst_pressure, 6), round(abs(port.slope), 6)),
        )
        chosen = []
        for port in found:
            away = [np.abs(port.arc_fractions - one.arc_fractions) for one in chosen]
            if all(min(gap[0], 1 - gap[0]) > DISTINCT_PORTS for gap in away):
                chosen.append(port)
        search = Search(
            "worst pressure", len(worst), len(worst), (self._step(),),
            float(worst.min()), chosen[0].worst_pressure, self._least_pressure(errors),
        )
        return self._result(chosen, search)

    def _least_pressure(self, errors):
        """What the worst pressure could be within half a step of a node, at the least."""
        ends = np.roll(self.points, -1, axis=0) - np.roll(self.points, 1, axis=0)
        along = ends / np.hypot(*ends.T)[:, None]
        slope = np.abs(np.einsum("nma,ma->nm", self.table.speed_ratio_gradient, along))
        slope = np.nan_to_num(2 * np.abs(self.table.speed_ratio) * slope)
        before, after = self._neighbours(slope, 0.0)
        reach = 0.5 * self._gaps() * self.model._arcs[self.body].length
        hope = np.maximum(errors - np.maximum(slope, np.maximum(before, after)) * reach, 0.0)
        return float(hope.max(axis=0).min())

    def _polished_static(self, node):
        """The arc fraction of the least worst pressure between the neighbours of a node."""
        low, high = self._between(node)

        def worst(fraction):
            return np.abs(self.pressures([fraction], self.asked.directions)).max()

        found = minimize_scalar(worst, bounds=(low, high), method="bounded",
                                options={"xatol": 1e-12, "maxiter": 200})
        return found.x if found.fun <= worst(self.fractions[node]) else self.fractions[node]

    # --- a pair

    def _pair(self):
        slopes = self.slopes(self.fractions, self.asked.directions)
        slopes[~self.trust.all(axis=0)] = np.nan
        least = self._least_differences(slopes)
        if not np.isfinite(least).any():
            raise InputError(
                f"where = {self.where!r}: no two ports there are trusted in every wind asked for; "
                "ask for fewer winds or a longer stretch"
            )
        starts = []
        best = np.nanmax(least)
        taken = np.where(np.isnan(least), -np.inf, least)
        while len(starts) < self.asked.choices and np.isfinite(taken).any():
            pair = np.unravel_index(taken.argmax(), taken.shape)
            if taken[pair] <= 0:
                break
            starts.append(pair)
            near = [
                np.abs(self.fractions - self.fractions[node]) < DISTINCT_PORTS for node in pair
            ]
            taken[np.ix_(*near)] = -np.inf
        if not starts:
            raise InputError(
                f"where = {self.where!r}: no pair of ports there tells the direction over the "
                "whole arc; ask for a narrower arc"
            )
        chosen = sorted(
            (self._port(self._polished_pair(pair)) for pair in starts),
            key=lambda port: -abs(port.slope),
        )
        before, after = self._neighbours(slopes.T, np.nan)
        doubt = np.fmax(np.abs(slopes.T - before), np.abs(slopes.T - after)).T
        hope = self._least_differences(slopes, np.nan_to_num(doubt))
        search = Search(
            "sensitivity", len(slopes), len(slopes) * (len(slopes) - 1), (self._step(),),
            float(best), abs(chosen[0].slope), float(np.nanmax(hope)),
        )
        return self._result(chosen, search)

    @staticmethod
    def _least_differences(slopes, doubt=None):
        """(N, N) least over the winds of how much faster one port's pressure grows than another's.

        With a doubt (N, n), the most that it could be.
        """
        doubt = np.zeros(slopes.shape) if doubt is None else doubt
        least = np.full((len(slopes),) * 2, np.inf)
        for column, room in zip(slopes.T, doubt.T, strict=True):
            np.minimum(least, (column + room)[:, None] - (column - room), out=least)
        return least

    def _polished_pair(self, pair):
        """The arc fractions of greatest least slope near a pair of nodes."""
        start = self.fractions[list(pair)]
        bounds = [self._between(node) for node in pair]

        def loss(fractions):
            slopes = self.slopes(fractions, self.asked.directions)
            return -(slopes[0] - slopes[1]).min()

        # Not smooth where two winds share the least: a simplex, from a scan that is dense.
        size = np.ptp(bounds, axis=1) / 4
        simplex = np.array([start, start + [size[0], 0], start + [0, size[1]]])
        found = minimize(loss, start, method="Nelder-Mead", bounds=bounds, options={
            "initial_simplex": np.clip(simplex, *np.transpose(bounds)), "xatol": 1e-9,
            "fatol": 1e-12, "maxiter": 200,
        })
        return found.x if found.fun < loss(start) else start

    def _saturation(self, sensors, fractions):
        """Winds between which the pressure difference of a pair grows all the way, and why."""
        directions = self.asked.directions
        middle = _middle(directions)
        away = np.arange(181.0)
        ends, reasons = [], []

        def slope(direction):
            slopes = self.slopes(fractions, np.array([direction]))
            return float(slopes[0, 0] - slopes[1, 0])

        sense = np.sign(slope(middle))
        for side in (-1.0, 1.0):
            line = middle + side * away
            trust = survey(self.model, sensors, line, reynolds=self.asked.reynolds)
            trusted = np.append(trust.trust.all(axis=1), False)
            slopes = self.slopes(fractions, line)
            rising = np.append((slopes[0] - slopes[1]) * sense > 0, False)
            last_trusted, last_rising = int(trusted.argmin()), int(rising.argmin())
            if last_rising <= last_trusted and last_rising < len(line):
                before, after = line[last_rising - 1], line[last_rising]
                # At the turn itself rounding decides: it may be there already.
                turns = slope(before) * slope(after) < 0
                ends.append(brentq(slope, before, after, xtol=1e-9) if turns else float(after))
                reasons.append("the slope turns")
            else:
                ends.append(float(line[min(last_trusted, len(line)) - 1]))
                reasons.append("trust ends")
        if self.asked.by_bearing:
            ends, reasons = [float(to_bearing(end)) for end in ends[::-1]], reasons[::-1]
        return tuple(float(within_turn(end)) for end in ends), tuple(reasons)

    # --- both

    def _gaps(self):
        """(N,) distance of every node from the farther of its neighbours, as arc fractions."""
        gaps = np.diff(self.fractions, append=self.fractions[0] + 1.0)
        if not self.closed:
            gaps[-1] = 0.0
        return np.maximum(gaps, np.roll(gaps, 1))

    def _step(self):
        return float(self._gaps().max())

    def _neighbours(self, values, beyond):
        """Values (..., N) of the neighbours before and after; ``beyond`` those of the ends."""
        before, after = np.roll(values, 1, axis=-1), np.roll(values, -1, axis=-1)
        if not self.closed:
            before[..., 0] = after[..., -1] = beyond
        return before, after

    def _between(self, node):
        """Arc fractions of a node's neighbours."""
        last = len(self.fractions) - 1
        low = self.fractions[node - 1] if node else (
            self.fractions[-1] - 1.0 if self.closed else self.fractions[0])
        high = self.fractions[node + 1] if node < last else (
            self.fractions[0] + 1.0 if self.closed else self.fractions[-1])
        return low, high

    def _port(self, fractions):
        """The PortMount of one or two arc fractions."""
        fractions = np.asarray(fractions, float)
        directions = self.asked.directions
        pressure = self.pressures(fractions, directions)
        slopes = self.slopes(fractions, directions)
        names = ["port"] if len(fractions) == 1 else ["port 1", "port 2"]
        sensors = tuple(
            WallPort(self.body, float(fraction % 1.0), name=name)
            for fraction, name in zip(fractions, names, strict=True)
        )
        saturates, because = (np.nan, np.nan), ("", "")
        if len(fractions) == 2:
            pressure, slope = pressure[0] - pressure[1], slopes[0] - slopes[1]
            slope = slope[np.abs(slope).argmin()]
            saturates, because = self._saturation(sensors, fractions)
        else:
            pressure, slope = pressure[0], slopes[0]
            slope = slope[np.abs(np.nan_to_num(slope)).argmax()]
        worst = float(np.abs(pressure).max())
        arcs = (fractions % 1.0) * self.model._arcs[self.body].length
        arcs = (arcs + self.model._arcs[self.body].start) % self.model._arcs[self.body].length
        return PortMount(
            sensors=sensors,
            arc_fractions=fractions % 1.0,
            places=pairs(self.model._place(self.body, arcs)),
            pressure=pressure,
            worst_pressure=worst,
            slope=float(slope),
            saturates=saturates,
            because=because,
            margin=self.limit - worst if len(fractions) == 1 else np.nan,
        )

    def _result(self, chosen, search):
        notes = survey(
            self.model, chosen[0].sensors, self.asked.directions, reynolds=self.asked.reynolds
        ).notes
        chosen = chosen[: self.asked.choices]
        return self.asked.result(self.where, chosen, self.limit, None, search, notes)


def _middle(directions):
    """The middle of an arc of directions: opposite the widest gap between them."""
    turned = np.sort(within_turn(directions))
    gaps = np.diff(turned, append=turned[0] + 360.0)
    widest = int(gaps.argmax())
    if gaps.max() - gaps.min() < 1e-9 and len(turned) > 2:
        return float(directions[0])
    return float(within_turn(turned[widest] + 0.5 * gaps[widest] + 180.0))
