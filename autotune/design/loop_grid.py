"""A plant as the block sees it, on a grid of frequencies that is fine enough to count turns on."""

from dataclasses import dataclass
from math import pi

import numpy as np
from numpy.typing import NDArray

from autotune.design.held import HeldPlant, held_plant
from autotune.design.model_laws import UltimateReading
from autotune.design.readings import ultimate_reading
from autotune.identify.model import ProcessModel

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

_LOW_RATIO = 2e-3
_HIGH_RATIO = 200.0
"""The grid's ends over the ultimate frequency."""

_POINTS_PER_DECADE = 60
_TURN_RAD = 0.25
"""Most that dead time may turn between two points, and how many points that may cost."""

_TURNING_POINTS_AT_MOST = 1500


@dataclass(frozen=True, slots=True, eq=False)
class SeenPlant:
    """G(jw) at ``w_rad_per_s``: held and sampled every ``scan_s`` up to pi/h, or continuous (``scan_s`` ``None``).

    ``op_delay_s`` is the time from reading PV to OP's effect: computing and I/O.
    """

    model: ProcessModel
    op_delay_s: float
    held: HeldPlant | None
    w_rad_per_s: Array
    gain: Complex
    integrators: int
    ultimate_rad_per_s: float

    @property
    def scan_s(self) -> float | None:
        """The block's execution."""
        return None if self.held is None else self.held.scan_s

    def response(self, w_rad_per_s: Array) -> Complex:
        """%PV/%OP at other frequencies than the grid's."""
        if self.held is not None:
            return self.held.response(w_rad_per_s)
        return np.asarray(self.model.response(w_rad_per_s) * np.exp(-1j * w_rad_per_s * self.op_delay_s))


def seen_plant(model: ProcessModel, scan_s: float | None, op_delay_s: float = 0.0) -> SeenPlant:
    """The plant under a block that runs every ``scan_s``."""
    held = None if scan_s is None else held_plant(model, scan_s, op_delay_s)
    ultimate = _ultimate_rad_per_s(model, scan_s, op_delay_s)
    w = _grid(ultimate, None if scan_s is None else pi / scan_s, model.dead_time_s + op_delay_s)
    integrators = len(model.denominator) - len(np.trim_zeros(model.denominator, "b"))
    plant = SeenPlant(model, op_delay_s, held, w, np.empty(0, dtype=np.complex128), integrators, ultimate)
    return SeenPlant(model, op_delay_s, held, w, plant.response(w), integrators, ultimate)


def _ultimate_rad_per_s(model: ProcessModel, scan_s: float | None, op_delay_s: float) -> float:
    """Where plant, delay and hold (half a scan) together turn by 180 degrees, or a guess beyond the poles."""
    late_s = model.dead_time_s + op_delay_s + (0.0 if scan_s is None else scan_s / 2.0)
    reading = ultimate_reading(ProcessModel(model.numerator, model.denominator, late_s))
    if isinstance(reading, UltimateReading):
        return 2.0 * pi / reading.ultimate_period_s
    fastest = 10.0 * float(np.max(np.abs(np.roots(model.denominator))))
    return max(fastest, 1.0 / late_s if late_s > 0.0 else 0.0) or 1.0


def _grid(ultimate: float, top: float | None, dead_time_s: float) -> Array:
    high = _HIGH_RATIO * ultimate if top is None else min(_HIGH_RATIO * ultimate, top)
    low = _LOW_RATIO * min(ultimate, high)
    even = np.geomspace(low, high, int(_POINTS_PER_DECADE * np.log10(high / low)))
    even[-1] = high
    if dead_time_s * high <= _TURN_RAD:
        return even
    step = max(_TURN_RAD / dead_time_s, high / _TURNING_POINTS_AT_MOST)
    turning = np.arange(step / (10.0 ** (1.0 / _POINTS_PER_DECADE) - 1.0), high, step)
    return np.union1d(even[even < (turning[0] if len(turning) else high)], np.append(turning, high))
