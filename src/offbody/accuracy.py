"""How wrong a number is: the tolerance that a caller states, and the error that a model estimates.

A solved density makes a flow that is exact but for what crosses the walls: the normal velocity
left over along them, where only the tangential one just inside was made zero, at the nodes. That
leftover, solved for as if it were blown through the walls, gives the error's own field, surface
speed and all, on and off the walls, for two more columns of the same factorisation. It is taken at
twice as many points as nodes: between them it swings, and far off only its mean tells.
"""

from dataclasses import dataclass

from offbody.checks import as_number
from offbody.errors import InputError

ATTEMPTS = 12       # solves before a tolerance is given up
MARGIN = 0.25       # of a tolerance, to which the estimate is brought: more may hide between nodes
MOST_NODES = 6000   # more are not tried for the sake of a tolerance
LEAST_FLOOR = 1e-6  # factor on the least panels at breaks, where refining them ends
SHRINKING = 0.02    # of the perimeter: nearer to a break the panels shrink toward it
NEAR_EDGE = 1e-6    # of the perimeter: nearer to an edge or kink no tolerance of speed is promised


@dataclass(frozen=True)
class Tolerance:
    """The error of surface speed, over the onset speed, that a model is to stay below.

    Given as ``panels`` to ``ob.solve``, it lets panels be split until the estimated error, for any
    direction, is below it everywhere but within a millionth of the perimeter of a sharp edge, or of
    a kink such as that of a cambered four-digit section where its camber is greatest.

    Parameters
    ----------
    surface_speed : float
        From 1e-12 to 0.1.

    Raises
    ------
    InputError
        If it is not a number within these limits.

    Examples
    --------
    >>> import offbody as ob
    >>> model = ob.solve(ob.ellipse(4.0, 1.0), panels=ob.Tolerance(1e-6))
    >>> bool(model.estimated_error < 1e-6)
    True
    """

    surface_speed: float

    def __post_init__(self):
        number = as_number("surface_speed", self.surface_speed, least=1e-12, greatest=0.1)
        object.__setattr__(self, "surface_speed", number)


@dataclass(frozen=True)
class Sums:
    """How a model sums its panels: the tolerance of fast sums, and whether they are used.

    Parameters
    ----------
    tolerance : float
        Error of a fast sum over its largest value, 1e-14 to 0.1.
    fast : bool, optional
        True or False to force fast or plain sums. None: whichever takes less time.

    Raises
    ------
    InputError
        If an argument is not such.

    Examples
    --------
    >>> import offbody as ob
    >>> model = ob.solve(ob.circle(2.0), sums=ob.Sums(tolerance=1e-6, fast=True))
    >>> model.velocity((0.0, 2.0)).round(5) + 0.0
    array([1.25, 0.  ])
    """

    tolerance: float = 1e-9
    fast: bool | None = None

    def __post_init__(self):
        number = as_number("tolerance", self.tolerance, least=1e-14, greatest=0.1)
        object.__setattr__(self, "tolerance", number)
        if self.fast not in (True, False, None):
            raise InputError(f"fast must be True, False or None, got {self.fast!r}")
