"""What a body standing in a stream does to the readings of a sensor mounted on it or beside it."""

from offbody._version import __version__
from offbody.bearings import from_bearing, to_bearing
from offbody.errors import AccuracyWarning, InputError
from offbody.model import Model, inside, solve
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
from offbody.sensors import CrossedPaths, DiscSensor, PathSensor, PointSensor, WallPort
from offbody.surroundings import Duct, Ground, OpenStream, Row
from offbody.surveys import Survey, survey
from offbody.wakes import Wake

__all__ = [
    "AccuracyWarning",
    "CrossedPaths",
    "DiscSensor",
    "Duct",
    "Ground",
    "InputError",
    "Model",
    "OpenStream",
    "Outline",
    "PathSensor",
    "PointSensor",
    "Row",
    "Survey",
    "Wake",
    "WallPort",
    "__version__",
    "circle",
    "curve",
    "ellipse",
    "four_digit",
    "from_bearing",
    "inside",
    "outline",
    "polygon",
    "read_outline",
    "solve",
    "survey",
    "threads",
    "to_bearing",
]
