"""What a body standing in a stream does to the readings of a sensor mounted on it or beside it."""

from offbody._version import __version__
from offbody.accuracy import Sums, Tolerance
from offbody.bearings import from_bearing, to_bearing
from offbody.booms import Boom
from offbody.bracings import Bracing
from offbody.compressibility import compressible_pressure, critical_mach
from offbody.corrections import Corrected, Correction, Reason
from offbody.errors import AccuracyWarning, InputError
from offbody.model import Model, WakeFlow, inside, solve
from offbody.mounts import Mount, Mounts, PortMount, Reach, Stretch, best_mounts
from offbody.outlines import (
    Outline,
    circle,
    curve,
    ellipse,
    four_digit,
    outline,
    polygon,
    read_outline,
)
from offbody.parallel import threads
from offbody.sensitivities import Sensitivity, sensitivity
from offbody.sensors import (
    CrossedPaths,
    CupAndVane,
    DiscSensor,
    MultiHoleProbe,
    PathSensor,
    PitotTube,
    PointSensor,
    WallPort,
)
from offbody.separations import Separation, separation
from offbody.surroundings import Duct, Ground, OpenStream, Row
from offbody.surveys import Survey, survey
from offbody.sweeps import Swept, sweep
from offbody.uncertainties import (
    InfluenceQuantity,
    MonteCarlo,
    Normal,
    Rectangular,
    Uncertainty,
    uncertainty,
)
from offbody.wakes import Wake

__all__ = [
    "AccuracyWarning",
    "Boom",
    "Bracing",
    "Corrected",
    "Correction",
    "CrossedPaths",
    "CupAndVane",
    "DiscSensor",
    "Duct",
    "Ground",
    "InfluenceQuantity",
    "InputError",
    "Model",
    "MonteCarlo",
    "Mount",
    "Mounts",
    "MultiHoleProbe",
    "Normal",
    "OpenStream",
    "Outline",
    "PathSensor",
    "PitotTube",
    "PointSensor",
    "PortMount",
    "Reach",
    "Reason",
    "Rectangular",
    "Row",
    "Sensitivity",
    "Separation",
    "Stretch",
    "Sums",
    "Survey",
    "Swept",
    "Tolerance",
    "Uncertainty",
    "Wake",
    "WakeFlow",
    "WallPort",
    "__version__",
    "best_mounts",
    "circle",
    "compressible_pressure",
    "critical_mach",
    "curve",
    "ellipse",
    "four_digit",
    "from_bearing",
    "inside",
    "outline",
    "polygon",
    "read_outline",
    "sensitivity",
    "separation",
    "solve",
    "survey",
    "sweep",
    "threads",
    "to_bearing",
    "uncertainty",
]
