"""Straight segments in the plane, against the walls of bodies."""

import numpy as np


def crosses(start, end, wall):
    """Whether the segment between two points, (2,) each, crosses a closed wall, (n,) complex."""
    start, end = complex(*start), complex(*end)
    # In the frame with start at 0 and end at 1 the segment is the real axis from 0 to 1.
    here = (wall - start) / (end - start)
    there = np.roll(here, -1)
    crossing = (here.imag > 0) != (there.imag > 0)
    here, there = here[crossing], there[crossing]
    place = here.real - here.imag * (there.real - here.real) / (there.imag - here.imag)
    return bool(np.any((place >= 0) & (place <= 1)))
