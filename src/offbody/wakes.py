"""How the wake of a bluff body pushes the outer flow aside.

A body with drag coefficient Cd and reference length b displaces the outer flow like a source of
strength Cd b/2 for unit onset speed (Batchelor, An Introduction to Fluid Dynamics, on the far field
of a body with drag; wake-source models: Parkinson and Jandali, J. Fluid Mech. 40 (1970) 577-594).
It is blown through the lee wall as sin^6 of the arc fraction. A step at the ends would make the
surface speed logarithmically infinite there; what is left of one, a jump in the sixth derivative,
costs 1e-9 of a circle's field (sin^2: 1e-4, sin^4: 2e-7), as the ends of the lee lie where the
direction puts them, within panels.

So much says how far the stream is displaced, not how wide the wake starts: that is the base
pressure's to say. A wake with a base pressure p, given or sought, also moves flux from the lee as a
whole to each of its halves, until the wall speed where the flow leaves is the free streamline's,

    sqrt(1 - p), on either side,

and until the pressure over the front, with p over the lee, makes the drag that the source stands
for. Given p, the drag follows; given the drag, p. Parkinson and Jandali fit the strength and the
place of two sources behind the body to p and to where the flow leaves; far away theirs displace two
to three times as much as the drag does. Here the far field is the drag's, and the front's pressure
differs from theirs by less than 0.08 on a circle. The flow leaves along the wall where the lee
begins; where the boundary layer says so, march and wake are repeated until they rest.
"""

import warnings
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from offbody.checks import as_number, as_reals
from offbody.errors import AccuracyWarning, InputError
from offbody.lanes import (
    LEFT,
    RIGHT,
    is_bluff,
    laminar_is_final,
    leave,
    turned,
    wall_speed,
)

MOST_ROUNDS = 40
AT_REST = 1e-6       # of the perimeter, and of the strengths
LONGEST_STEP = 0.05  # of the perimeter, in a round


@dataclass(frozen=True)
class Wake:
    """The wake of one body, by its drag coefficient or its base pressure.

    By the drag coefficient alone it displaces the stream from behind the points widest across it,
    and the pressure near it means nothing. With a base pressure, or with the place or the Reynolds
    number of separation, the pressure where the flow leaves the wall is that of the base, and
    ``model.wake`` reports base pressure, drag and place.

    Parameters
    ----------
    drag_coefficient : float or mapping, optional
        Drag per unit dynamic pressure, span and reference length; or a table {direction in degrees:
        coefficient} against the stream's direction, linear in between and periodic.
    reference : float, optional
        The length that the coefficient refers to, in the caller's unit. None: the body's breadth
        across the stream, for each direction.
    base_pressure : float, optional
        In place of the drag coefficient: the pressure coefficient of the lee, less than 1 (common
        practice: -0.9 to -1.2 for a subcritical tube).
    separation : float, optional
        Where the flow leaves the wall: degrees by which it has turned from facing the stream, on
        either side, 90 running along it; 80 is measured on a circle below the drag crisis
        (Schlichting; from memory). None: at the points widest across the stream.
    reynolds : float, optional
        In place of ``separation``: the onset speed times the body's breadth across the stream over
        the kinematic viscosity. The boundary layer says where the flow leaves (``ob.separation``).

    Raises
    ------
    InputError
        If not just one of drag coefficient and base pressure is given, or both separation and
        reynolds are; if a coefficient is negative or not finite, the table is empty, the reference
        is not greater than zero, the base pressure not less than 1, or the separation not
        between 0 and 180.

    References
    ----------
    G. K. Batchelor, An Introduction to Fluid Dynamics, Cambridge University Press, 1967.
    G. V. Parkinson and T. Jandali, J. Fluid Mech. 40 (1970) 577-594.

    Examples
    --------
    >>> import offbody as ob
    >>> model = ob.solve(ob.circle(1.0), wakes=ob.Wake(1.2))
    >>> upstream = model.velocity((-200.0, 0.0))[0]
    >>> round(float(1.0 - upstream), 6)             # about Cd b/(4 pi R) = 0.000477
    0.000481
    >>> model = ob.solve(ob.circle(1.0), wakes=ob.Wake(base_pressure=-1.0, separation=80.0))
    >>> round(float(model.wake(0).drag_coefficient), 2)
    1.05
    """

    drag_coefficient: object = None
    reference: float | None = None
    base_pressure: float | None = None
    separation: float | None = None
    reynolds: float | None = None

    def __post_init__(self):
        if (self.drag_coefficient is None) == (self.base_pressure is None):
            raise InputError(
                f"drag_coefficient = {self.drag_coefficient!r} and base_pressure = "
                f"{self.base_pressure!r}: give one of the two, the other follows"
            )
        if self.separation is not None and self.reynolds is not None:
            raise InputError(
                f"separation = {self.separation!r} and reynolds = {self.reynolds!r}: give one of "
                "the two, either says where the flow leaves"
            )
        if isinstance(self.drag_coefficient, Mapping):
            object.__setattr__(self, "drag_coefficient", self._table(self.drag_coefficient))
        else:
            self._settle("drag_coefficient", least=0.0)
        self._settle("reference", positive=True)
        self._settle("base_pressure")
        self._settle("separation", positive=True, greatest=180.0)
        self._settle("reynolds", positive=True)
        if self.base_pressure is not None and self.base_pressure >= 1.0:
            raise InputError(
                f"base_pressure must be less than 1, that of rest, got {self.base_pressure:g}"
            )

    def _settle(self, name, **limits):
        if getattr(self, name) is not None:
            object.__setattr__(self, name, as_number(name, getattr(self, name), **limits))

    @property
    def has_base(self):
        """Whether the wake carries a base pressure, given or sought."""
        given = self.base_pressure, self.separation, self.reynolds
        return any(value is not None for value in given)

    @staticmethod
    def _table(given):
        if not given:
            raise InputError("drag_coefficient is an empty table; give {direction: coefficient}")
        directions = as_reals("drag_coefficient's directions", list(given.keys())) % 360.0
        values = as_reals("drag_coefficient's values", list(given.values()))
        if values.min() < 0.0:
            raise InputError(f"drag_coefficient must not be negative, got {values.min():g}")
        if len(np.unique(directions)) < len(directions):
            raise InputError("drag_coefficient's table names a direction twice (0 is 360)")
        sequence = np.argsort(directions)
        pairs = zip(directions[sequence], values[sequence], strict=True)
        return tuple((float(d), float(v)) for d, v in pairs)

    def drag(self, directions):
        """Drag coefficients for directions in degrees."""
        if isinstance(self.drag_coefficient, float):
            return np.full(np.shape(directions), self.drag_coefficient)
        table = np.array(self.drag_coefficient)
        return np.interp(directions, table[:, 0], table[:, 1], period=360.0)



def profile(arc, start, length):
    """Normal speed per unit flux at arc positions of a lee that starts at ``start``: sin^6.

    arc (n,) or (d, n); start, length broadcast against it. The mean of sin^6 is 5/16. Zero outside.
    """
    fraction = (arc - start) / length
    inside = (fraction > 0.0) & (fraction < 1.0)
    shape = np.sin(np.pi * np.where(inside, fraction, 0.0)) ** 6
    return shape / (0.3125 * length)


@dataclass(frozen=True)
class Lee:
    """The lee of one body in a number of directions, and what is blown through it.

    Attributes
    ----------
    arcs : (directions, 2) array
        Arc positions at which the flow leaves, left and right of the stream.
    flux : (directions, 3) array
        Through the lee as a whole, through its right half and through its left half, each as sin^6;
        their sum is half the drag per unit dynamic pressure and span.
    base_pressure : (directions,) array
        NaN where the wake has none.
    """

    arcs: np.ndarray
    flux: np.ndarray
    base_pressure: np.ndarray

    @property
    def displacing(self):
        """The lee of a wake which only displaces the stream, by as much."""
        whole = self.flux.sum(axis=1)
        flux = np.stack([whole, 0.0 * whole, 0.0 * whole], axis=1)
        return Lee(self.arcs, flux, np.full(len(whole), np.nan))

    def at(self, rows):
        """The same in some of the directions."""
        return Lee(self.arcs[rows], self.flux[rows], self.base_pressure[rows])

    @staticmethod
    def joined(lees):
        """Several, end to end."""
        if not lees:
            return Lee(np.zeros((0, 2)), np.zeros((0, 3)), np.zeros(0))
        parts = zip(*((one.arcs, one.flux, one.base_pressure) for one in lees), strict=True)
        return Lee(*map(np.concatenate, parts))


def blown_speeds(model, lees):
    """(directions, N) outward normal speed on the walls that the wakes blow through their lees."""
    blown = 0.0
    for body, lee in lees.items():
        blown = blown + np.einsum("md,mdn->dn", lee.flux.T, _shapes(model, body, lee.arcs))
    return blown


def _shapes(model, body, arcs):
    """(3, directions, N) normal speed on all walls of unit flux through a lee and its halves."""
    part, total = model._panels.node_slice(body), model._arcs[body].length
    length = ((arcs[:, LEFT] - arcs[:, RIGHT]) % total)[:, None]
    along = (model._panels.arcs[part] - arcs[:, RIGHT:]) % total
    shapes = np.zeros((3, len(arcs), model.node_count))
    for mode, (start, share) in enumerate(((0.0, 1.0), (0.0, 0.5), (0.5, 0.5))):
        shape = profile(along, start * length, share * length)
        flux = shape @ model._panels.weights[part]
        shapes[mode][:, part] = shape / flux[:, None]
    return shapes


def settle(model, directions):
    """{body: Lee} of every wake of a model, repeated until places and strengths rest."""
    bodies = [body for body, wake in enumerate(model.wakes) if wake is not None]
    based = [body for body in bodies if model.wakes[body].has_base]
    marching = [body for body in bodies if model.wakes[body].reynolds is not None]
    lees = {body: _first_lee(model, body, directions) for body in bodies}
    if not based:
        return lees
    breadths = {body: model._breadths(body, directions) for body in bodies}
    still = _gamma(model, directions, np.zeros((len(directions), model.node_count)))
    responses, last = {}, {}
    for rounds in range(MOST_ROUNDS):
        for body in bodies:
            if body in marching or rounds == 0:
                shapes = _shapes(model, body, lees[body].arcs)
                responses[body] = np.stack(
                    [_gamma(model, directions, shape) - still for shape in shapes]
                )
        moved = 0.0
        for body in based:
            others = still + sum(
                np.einsum("md,mdn->dn", lees[k].flux.T, responses[k]) for k in bodies if k != body
            )
            fitted = _fitted(model, body, directions, lees[body], others, responses[body])
            scale = np.abs(fitted.flux).max()
            moved = max(moved, np.abs(fitted.flux - lees[body].flux).max() / scale)
            lees[body] = fitted
        speeds = still + sum(
            np.einsum("md,mdn->dn", lees[k].flux.T, responses[k]) for k in bodies
        )
        for body in marching:
            moves = lees[body].displacing.flux - lees[body].flux
            moves[_marched_whole(model, body, directions, breadths[body])] = 0.0
            along = speeds + np.einsum("md,mdn->dn", moves.T, responses[body])
            miss = _miss(model, body, directions, lees[body], along, breadths[body])
            moved = max(moved, np.abs(miss).max())
            lees[body], last[body] = _moved(model, body, lees[body], miss, last.get(body))
        if moved < AT_REST:
            break
    else:
        warnings.warn(
            f"separation and wake do not rest: after {MOST_ROUNDS} rounds they still move by "
            f"{moved:.1g} of the wall's length or of the strength; give ob.Wake a separation "
            "in degrees in place of a Reynolds number",
            AccuracyWarning, stacklevel=4,
        )
    _refuse_unfit(model, directions, lees, speeds)
    return lees


def _first_lee(model, body, directions):
    """Where the rounds start: drag as given, or a coefficient of 1."""
    wake = model.wakes[body]
    degrees = wake.separation if wake.reynolds is None else 90.0
    if wake.separation is None and wake.reynolds is None:
        arcs = model._widest_arcs(body, directions)
    else:
        arcs = turned(model, body, directions, degrees)
    drag = model._breadths(body, directions)
    if wake.drag_coefficient is not None:
        drag = wake.drag(directions) * (wake.reference or drag)
    flux = np.stack([0.5 * drag, np.zeros(len(drag)), np.zeros(len(drag))], axis=1)
    base = np.nan if not wake.has_base else -1.0
    base = base if wake.base_pressure is None else wake.base_pressure
    return Lee(arcs, flux, np.full(len(drag), base))


def _fitted(model, body, directions, lee, others, responses):
    """The lee with the fluxes that make its base pressure, and its drag, what they ought to be.

    With k the speed where the flow leaves and F the whole flux, the fluxes moved to the halves and
    so the wall speed are linear in the one of k and F that is sought, u + x w; the drag

        2 F = (sum over the front of p) k^2 - (sum over the front of p (u + x w)^2),

    p the part of the wall that faces the stream, is quadratic in it.
    """
    part, wake = model._panels.node_slice(body), model.wakes[body]
    others, responses = others[:, part], responses[:, :, part]
    moves = responses[1:] - responses[0]
    values = [wall_speed(model, body, one, lee.arcs) for one in (others, *responses[:1], *moves)]
    system = np.stack(values[2:], axis=2)
    leaving = np.array([-1.0, 1.0])  # left of the stream the wall's flow is clockwise
    per_speed = np.linalg.solve(system, np.broadcast_to(leaving, values[0].shape)[..., None])
    per_flux = np.linalg.solve(system, -values[1][..., None])
    fixed = np.linalg.solve(system, -values[0][..., None])

    def combined(fluxes):
        return np.einsum("md,mdn->dn", fluxes[..., 0].T, moves)

    flux, speed = lee.flux.sum(axis=1), np.sqrt(1.0 - lee.base_pressure)
    facing = _front_facing(model, body, directions, lee.arcs)
    front = facing.sum(axis=1)
    known = others + combined(fixed)
    by_flux, by_speed = responses[0] + combined(per_flux), combined(per_speed)
    if wake.base_pressure is not None:
        known, sought = known + speed[:, None] * by_speed, by_flux
        a, b, c = 0.0, -2.0, front * speed**2
    else:
        known, sought = known + flux[:, None] * by_flux, by_speed
        a, b, c = front, 0.0, -2.0 * flux
    a = a - np.sum(facing * sought**2, axis=1)
    b = b - 2.0 * np.sum(facing * known * sought, axis=1)
    c = c - np.sum(facing * known**2, axis=1)
    if wake.base_pressure is not None:
        flux, base_pressure = _nearest_root(a, b, c, flux), lee.base_pressure
    else:
        speed = _nearest_root(a, b, c, speed)
        base_pressure = 1.0 - speed**2
    moved = (fixed + speed[:, None, None] * per_speed + flux[:, None, None] * per_flux)[..., 0]
    flux = np.concatenate([(flux - moved.sum(axis=1))[:, None], moved], axis=1)
    return Lee(lee.arcs, flux, base_pressure)


def _nearest_root(a, b, c, x):
    """The root of a x^2 + b x + c nearest to x; where there is none, the place nearest to one."""
    with np.errstate(divide="ignore", invalid="ignore"):
        width = np.sqrt(np.maximum(b * b - 4.0 * a * c, 0.0))
        large = -0.5 * (b + np.where(b >= 0.0, width, -width))
        roots = np.stack([large / a, np.where(width > 0.0, c / large, -0.5 * b / a)])
    roots = np.where(np.isfinite(roots) & (roots > 0.0), roots, np.inf)
    best = np.argmin(np.abs(roots - x), axis=0)
    root = np.take_along_axis(roots, best[None], axis=0)[0]
    return np.where(np.isfinite(root), root, x)


def _front_facing(model, body, directions, arcs):
    """(directions, n) how much of each node's share of the front faces the stream; zero in the lee.

    The pressure force along the stream is the sum of it and the pressure.
    """
    part, total = model._panels.node_slice(body), model._arcs[body].length
    normals = -1j * model._panels.tangents[part]
    against = -np.exp(-1j * np.radians(directions))
    facing = (against[:, None] * normals).real * model._panels.weights[part]
    along = (model._panels.arcs[part] - arcs[:, RIGHT:]) % total
    return np.where(along < ((arcs[:, LEFT] - arcs[:, RIGHT]) % total)[:, None], 0.0, facing)


def marched_speeds(model, body, directions):
    """(directions, n) wall speeds of one body, on which its boundary layers are marched."""
    part, wake = model._panels.node_slice(body), model.wakes[body]
    speeds = model._wall_speeds(directions)[:, part]
    if wake is None or wake.reynolds is None:
        return speeds
    whole = _marched_whole(model, body, directions, model._breadths(body, directions))
    lees = model._lees(directions)
    blown = blown_speeds(model, lees | {body: lees[body].displacing})
    return np.where(whole[:, None], speeds, _gamma(model, directions, blown)[:, part])


def _marched_whole(model, body, directions, breadths):
    """(directions,) whether layers are marched on the flow of the wake as a whole.

    On a bluff body, while they are laminar. A turbulent layer, or one on a slender wall, would
    follow every move of flux between the parts of its lee, and the flux the layer: where they rest
    would be chance. It is marched on the flow that the wake's displacement alone leaves.
    """
    final = laminar_is_final(model, body, model.wakes[body].reynolds)
    return is_bluff(model, body, directions, breadths) & final


def _gamma(model, directions, blown):
    """(directions, N) wall speeds with normal speeds blown through the walls."""
    flux = blown @ model._panels.weights
    return model._wall_flow(directions, flux, model._equation.pushed(blown))[0]


def _miss(model, body, directions, lee, speeds, breadths):
    """(directions, 2) how far from the ends of the lee the flow leaves, over the perimeter."""
    total, part = model._arcs[body].length, model._panels.node_slice(body)
    left = leave(
        model, body, directions, speeds[:, part], model.wakes[body].reynolds, breadths, lee.arcs
    )
    return ((left.arcs - lee.arcs) / total + 0.5) % 1.0 - 0.5


def _moved(model, body, lee, miss, last):
    """The lee's ends moved by the secant through the last two misses; and this move and miss.

    A laminar layer follows about a third of each move and would rest by itself, more slowly.
    """
    step = miss
    if last is not None:
        moved, missed = last
        with np.errstate(divide="ignore", invalid="ignore"):
            secant = -miss * moved / (miss - missed)
        step = np.where(np.isfinite(secant) & (secant * miss >= 0.0), secant, miss)
    step = np.clip(step, -LONGEST_STEP, LONGEST_STEP)
    total = model._arcs[body].length
    return Lee((lee.arcs + step * total) % total, lee.flux, lee.base_pressure), (step, miss)


def _refuse_unfit(model, directions, lees, speeds):
    """No wake of ours has every pair of drag and place: say so rather than return the nearest."""
    for body, lee in lees.items():
        if not model.wakes[body].has_base:
            continue
        facing = _front_facing(model, body, directions, lee.arcs)
        pressure = lee.base_pressure[:, None] - 1.0 + speeds[:, model._panels.node_slice(body)] ** 2
        drag, meant = -np.sum(facing * pressure, axis=1), 2.0 * lee.flux.sum(axis=1)
        unfit = np.abs(drag - meant) > 0.01 * meant + 1e-6 * model._arcs[body].length
        if unfit.any():
            row = np.flatnonzero(unfit)[0]
            raise InputError(
                f"wakes: for direction {directions[row]:g} no wake of body {body} "
                f"({model.outlines[body].name}) has the drag given: its front alone makes "
                f"{drag[row]:.3g} per unit dynamic pressure where {meant[row]:.3g} is asked for; "
                "give another drag_coefficient, or base_pressure in its place"
            )
