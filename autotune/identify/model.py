"""The process as a transfer function with dead time, best estimate and draws of what it may be instead."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class ProcessModel:
    """B(s) e^(-L s) / D(s) from OP to PV in %PV/%OP, for the positive-gain plant (the action carries the sign).

    ``numerator`` and ``denominator`` are coefficients of s in descending powers; the denominator is monic
    (its first coefficient is 1) and of higher degree than the numerator, and a plant that integrates ends
    in a zero.  Time is in seconds.  Latency and hold are no part of it: this is the plant alone.
    """

    numerator: tuple[float, ...]
    denominator: tuple[float, ...]
    dead_time_s: float

    def response(self, w_rad_per_s: NDArray[np.float64]) -> NDArray[np.complex128]:
        """G(jw) at each frequency, in the shape of ``w_rad_per_s``; ``w`` must be no pole of the plant."""
        s = 1j * np.asarray(w_rad_per_s, dtype=np.float64)
        lags = np.polyval(np.array(self.numerator), s) / np.polyval(np.array(self.denominator), s)
        return np.asarray(lags * np.exp(-self.dead_time_s * s), dtype=np.complex128)


@dataclass(frozen=True, slots=True)
class ModelWithDraws:
    """The best estimate, and the models that the record allows beside it.

    ``draws`` are from the estimate's covariance and across structures, each with the ``weights`` that it
    counts with (not negative, summing to 1; empty means equal).  ``because`` says in words what makes the
    draws as wide as they are.
    """

    best: ProcessModel
    draws: tuple[ProcessModel, ...] = ()
    weights: tuple[float, ...] = ()
    because: tuple[str, ...] = ()
