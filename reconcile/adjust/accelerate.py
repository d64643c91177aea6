"""Faster convergence of a fixed-point iteration: Anderson's method with a short memory.

Successive linearisation converges linearly where the readings disagree strongly with the products; extrapolating
over the last few steps (Anderson 1965; Walker & Ni 2011) then saves most of them.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

__all__ = ["Acceleration"]

Array = npt.NDArray[np.float64]

MEMORY = 5


class Acceleration:
    """Remembers the last points and steps of one iteration.

    Parameters
    ----------
    scale : ndarray, shape (n,)
        Natural size of a change of each variable; zero for those that do not move.
    """

    def __init__(self, scale: Array) -> None:
        self.live = scale > 0
        self.scale = scale[self.live]
        self.points: list[Array] = []
        self.steps: list[Array] = []

    def propose(self, x: Array, step: Array) -> Array | None:
        """Extrapolated next point from the current point and its full step; None without enough history."""
        self.points.append(x.copy())
        self.steps.append(step.copy())
        del self.points[: -MEMORY - 1], self.steps[: -MEMORY - 1]
        if len(self.points) < 3:
            return None
        x_change = np.diff(np.array(self.points), axis=0).T
        f_change = np.diff(np.array(self.steps), axis=0).T
        weights, *_ = np.linalg.lstsq(
            f_change[self.live] / self.scale[:, None], step[self.live] / self.scale, rcond=1e-12
        )
        return np.asarray(x + step - (x_change + f_change) @ weights)

    def forget(self) -> None:
        """Start anew."""
        self.points.clear()
        self.steps.clear()
