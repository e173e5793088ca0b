"""Proof that a search missed nothing: cells that could hold a better set are split until none can.

A scan leaves cells, half a step round its places, in which errors change by no more than the
slopes say. A set of cells is promising if the errors that its places could have at best would beat
the set found. Each promising set is split in two across the axis along which its errors change
most, and the halves are read; branch and bound. The slope in a half is taken as no greater than in
the whole, and no greater than at the middles of the two halves and once more their difference.
"""

from dataclasses import dataclass, replace

import numpy as np

from offbody.scans import WITHIN

CLOSE_ENOUGH = 0.01  # of the quantity sought: a set better by less is not looked for
MOST_ROUNDS = 24
CORNERS = np.array([[1.0, 1.0, -1.0, -1.0], [1.0, -1.0, 1.0, -1.0]])
MOST_READINGS = 1_500_000  # of sets, places, winds and quantities, in a round


@dataclass(frozen=True, eq=False)
class _Cells:
    """Sets of cells: t sets of k places, with two axes each, n winds and q quantities.

    middles, halves (t, d) of the search's variables; hopes (t, k, n) the least possible errors,
    infinite without trust; changes (t, k, 2, q, n) of the errors, over half a cell along each axis;
    trusted (t, k, n) at the middle, or not known there.
    """

    middles: np.ndarray
    halves: np.ndarray
    hopes: np.ndarray
    changes: np.ndarray
    trusted: np.ndarray

    def where(self, chosen):
        """Those sets that are chosen."""
        return _Cells(*(getattr(self, name)[chosen] for name in self.__dataclass_fields__))

    @property
    def worst(self):
        """(t,) the least that the worst error could be."""
        return self.hopes.min(axis=1).max(axis=1)


class Exclusion:
    """The splitting of the promising cells of a scan, for a search that found ``best``.

    Attributes
    ----------
    bound : float
        What no set can pass: a length, or a worst error.
    better : (d,) array or None
        Variables of a better set that turned up on the way.
    places : int
        How many more places were read.
    complete : bool
        Whether no promising cell was left.
    """

    def __init__(self, search, scan, hoped, by_length, best):
        self.search, self.site, self.by_length = search, search.site, by_length
        self.best, self.target = best, best * (1.0 - CLOSE_ENOUGH)
        self.better, self.places, self.complete = None, 0, False
        middles, halves = search.cells(scan, hoped.sets)
        passes = self._passes(middles, halves, hoped.worst)
        first = self._beats(passes, hoped.worst)
        sets, winds = hoped.sets[first], len(self.site.asked.directions)
        if 4 * sets.size * winds * len(scan.changes[0]) > MOST_READINGS:
            self.bound = float(passes[first].min())
            return
        cells = _Cells(
            middles[first],
            halves[first],
            scan.hopes[sets],
            np.moveaxis(scan.changes[..., sets], (-2, -1), (0, 1)),
            np.ones(scan.hopes[sets].shape, bool),
        )
        for _ in range(MOST_ROUNDS):
            cells = self._without_untrusted(cells.where(self._promising(cells)))
            cells = cells.where(self._promising(cells))
            self.complete = not len(cells.middles)
            if self.complete or 2 * cells.changes.size > MOST_READINGS:
                break
            cells = self._split(cells)
        left = self._passes(cells.middles, cells.halves, cells.worst)
        self.bound = float(min(self.target, left.min(initial=np.inf)))

    def _passes(self, middles, halves, worst):
        """(t,) the best that the quantity sought could be."""
        return (middles[:, 0] - halves[:, 0]) * self.search.size if self.by_length else worst

    def _beats(self, passes, worst):
        beats = passes < self.target
        return beats & (worst <= self.site.limit * WITHIN) if self.by_length else beats

    def _promising(self, cells):
        worst = cells.worst
        promising = self._beats(self._passes(cells.middles, cells.halves, worst), worst)
        z, reach = self.search.place(cells.middles), self._reach(cells)
        leeway = self.search.leeway(z.ravel()).reshape(z.shape)
        return promising & (leeway >= -reach).all(axis=1)

    def _without_untrusted(self, cells):
        """The same, without hope in the winds in which no corner of a cell is trusted.

        Wakes are wedges: one that holds all corners holds the cell.
        """
        search, site = self.search, self.site
        moves = search.along(cells.middles) * cells.halves[:, search.axes(cells.middles.shape[1])]
        doubt = (~cells.trusted & np.isfinite(cells.hopes)).any(axis=2)
        z = search.place(cells.middles)[doubt, None] + moves[doubt] @ CORNERS
        stands = site.stands(z.ravel()).reshape(z.shape)
        trust = np.ones((*z.shape, cells.hopes.shape[2]), bool)
        trust[stands] = site.trust(z[stands]).T
        hopes = cells.hopes.copy()
        hopes[doubt] = np.where(
            trust.any(axis=1) | cells.trusted[doubt], cells.hopes[doubt], np.inf
        )
        return replace(cells, hopes=hopes)

    def _reach(self, cells):
        """(t, k) how far the places of a set may lie from their middles."""
        axes = self.search.axes(cells.middles.shape[1])
        along = np.abs(self.search.along(cells.middles)) * cells.halves[:, axes]
        return along.sum(axis=2)

    def _split(self, cells):
        """Both halves of every set, the first ones first."""
        dimensions = cells.middles.shape[1]
        axes = self.search.axes(dimensions)  # (k, 2) which variable moves a place along an axis
        greatest = cells.changes.max(axis=(3, 4))
        by_variable = np.zeros(cells.middles.shape)
        for place, axis in np.ndindex(axes.shape):
            column = axes[place, axis]
            by_variable[:, column] = np.maximum(by_variable[:, column], greatest[:, place, axis])
        cut = by_variable.argmax(axis=1)
        step = 0.5 * cells.halves * (np.arange(dimensions) == cut[:, None])
        halves = cells.halves - step
        middles = np.stack([cells.middles - step, cells.middles + step])
        errors, own, trust = self._read(middles, halves)
        affected = (axes == cut[:, None, None])[..., None, None]
        whole = np.where(affected, 0.5 * cells.changes, cells.changes)
        measured = own.max(axis=0) + np.abs(own[0] - own[1])
        measured = np.where(np.isnan(measured), np.inf, measured)
        changes = np.where(affected, np.minimum(whole, measured), whole)
        least = (errors - changes.sum(axis=2)).max(axis=3)
        known = np.isfinite(least)
        hopes = np.maximum(cells.hopes, np.where(known, least, 0.0))
        self._keep_better(middles, errors.max(axis=3), trust)
        trusted = trust | ~known
        return _Cells(
            middles.reshape(-1, dimensions),
            np.concatenate([halves, halves]),
            hopes.reshape(-1, *hopes.shape[2:]),
            np.concatenate([changes, changes]),
            trusted.reshape(-1, *trusted.shape[2:]),
        )

    def _read(self, middles, halves):
        """Errors (2, t, k, q, n), changes (2, t, k, 2, q, n) and trust (2, t, k, n) of halves.

        NaN where there is no flow; what is not allowed is read, for the part of its cell that is.
        """
        search, site = self.search, self.site
        z, along = search.place(middles), search.along(middles)
        stands = site.stands(z.ravel())
        errors, slopes, trust = site.read(z.ravel()[stands], site.asked.directions, exactly=False)
        self.places += int(stands.sum())
        parts, winds = errors.shape[:2]

        def spread(values, empty):
            full = np.full((z.size, *values.shape[1:]), empty, dtype=values.dtype)
            full[stands] = values
            return full.reshape(*z.shape, *values.shape[1:])

        slopes = spread(np.moveaxis(slopes, 2, 0), np.nan)  # (2, t, k, q, n, 2)
        moves = along * halves[:, search.axes(halves.shape[1])]
        own = np.abs(
            slopes[:, :, :, None, ..., 0] * moves.real[..., None, None]
            + slopes[:, :, :, None, ..., 1] * moves.imag[..., None, None]
        )
        errors = spread(np.moveaxis(np.abs(errors), 2, 0), np.nan)
        return errors.reshape(*z.shape, parts, winds), own, spread(trust.T, False)

    def _keep_better(self, middles, errors, trust):
        """Note the best set of allowed places that were read, if it beats what was found."""
        z = self.search.place(middles)
        allowed = (self.search.leeway(z.ravel()) >= 0).reshape(z.shape)[..., None]
        errors = np.where(allowed & trust & np.isfinite(errors), errors, np.inf)
        worst = errors.min(axis=2).max(axis=2)
        quantity = worst
        if self.by_length:
            within = worst <= self.site.limit * WITHIN
            quantity = np.where(within, middles[..., 0] * self.search.size, np.inf)
        place = np.unravel_index(quantity.argmin(), quantity.shape)
        if quantity[place] < self.best:
            self.best, self.better = float(quantity[place]), middles[place]
            self.target = min(self.target, self.best * (1.0 - CLOSE_ENOUGH))
