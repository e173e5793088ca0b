"""Types of the compiled sums; kernels/_multipole.pyx has the meaning of each argument."""

from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

Real: TypeAlias = NDArray[np.float64]
Complex: TypeAlias = NDArray[np.complex128]
Index: TypeAlias = NDArray[np.intp]
Arrays: TypeAlias = tuple[Any, ...]

class Walls:
    def __init__(self, geometry: Arrays) -> None: ...
    def near_influence(
        self,
        modes: Complex,
        tangents: Complex,
        x: Real,
        y: Real,
        turn: Complex,
        panel: Index,
        target: Index,
        near: NDArray[np.uint8],
        real: Real,
    ) -> None: ...

class Sum:
    def __init__(
        self,
        sources: Arrays,
        targets: Arrays,
        lists: Arrays,
        tables: Arrays,
        walls: Walls | None,
        both_sides: bool,
        coefficients: Complex,
        qx: Real,
        qy: Real,
        outside: Real,
        inside: Real,
    ) -> None: ...
    def poles_to_boxes(self, first: int, last: int) -> None: ...
    def boxes_to_parents(self) -> None: ...
    def boxes_to_targets(self, first: int, last: int, out: Complex) -> None: ...
