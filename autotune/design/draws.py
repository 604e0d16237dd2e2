"""What the model may be instead: margins over its draws, on one grid and in one array expression."""

from dataclasses import dataclass
from math import inf

import numpy as np
from numpy.typing import NDArray

from autotune.design.held import held_plant
from autotune.design.loop_grid import SeenPlant
from autotune.design.margins import rows_say_stable
from autotune.identify.model import ModelWithDraws

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]


@dataclass(frozen=True, slots=True, eq=False)
class DrawsOnGrid:
    """Each draw's response on the grid of the best estimate (rows), its integrators and its weight."""

    responses: Complex
    integrators: NDArray[np.int_]
    shares: Array

    def peak_sensitivities(self, controller: Complex, block_integrators: int) -> Array:
        """Ms of each draw under C(jw); infinite where the loop is unstable."""
        loops = self.responses * controller
        peaks = 1.0 / np.min(np.abs(1.0 + loops), axis=1)
        return np.where(rows_say_stable(loops, self.integrators + block_integrators), peaks, inf)


def draws_on_grid(model: ModelWithDraws, plant: SeenPlant) -> DrawsOnGrid:
    """The draws under the same block; without draws the best estimate stands for itself.

    ``plant`` must be sampled: its scan and delay are those of every draw.
    """
    draws = model.draws or (model.best,)
    scan_s = plant.scan_s or 0.0
    responses = [held_plant(draw, scan_s, plant.op_delay_s).response(plant.w_rad_per_s) for draw in draws]
    shares = np.array(model.weights or [1.0] * len(draws), dtype=np.float64)
    return DrawsOnGrid(
        np.array(responses),
        np.array([len(draw.denominator) - len(np.trim_zeros(draw.denominator, "b")) for draw in draws]),
        shares / np.sum(shares),
    )


def quantile_ratio(ratios: Array, shares: Array, share_ratio: float) -> float:
    """The least number that ``share_ratio`` of the weight doesn't exceed."""
    order = np.argsort(ratios)
    reached = np.cumsum(shares[order])
    at = int(np.searchsorted(reached, share_ratio - 1e-9))
    return float(ratios[order][min(at, len(order) - 1)])
