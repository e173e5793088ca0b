"""Types of the compiled kernels; kernels/_kernels.pyx has the meaning of each argument."""

from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

Real: TypeAlias = NDArray[np.float64]
Complex: TypeAlias = NDArray[np.complex128]
Index: TypeAlias = NDArray[np.intp]
Geometry: TypeAlias = tuple[Any, ...]  # as offbody.panels.Panels.geometry

def field(
    geometry: Geometry, coefficients: Complex, charges: Complex, z: Complex, out: Complex
) -> None: ...
def influence(
    geometry: Geometry,
    modes: Complex,
    tangents: Complex,
    z: Complex,
    turn: Complex,
    real: Real,
    imag: Real,
) -> None: ...
def point_field(nodes: Complex, charges: Complex, z: Complex, out: Complex) -> None: ...
def enclosing_body(
    geometry: Geometry, starts: Index, boxes: Real, z: Complex, body: Index
) -> None: ...
