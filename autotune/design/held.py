"""A process model under a held output: the exact difference equation, with a dead time of any fraction of a scan.

x+ = Phi(h) x + Phi(h-f) Gam(f) u[k-q-1] + Gam(h-f) u[k-q], q = floor(L/h), f = L - q h (Astrom and Wittenmark,
Computer-Controlled Systems, sampling with a dead time).
"""

from dataclasses import dataclass
from math import ceil, floor, log2

import numpy as np
from numpy.typing import NDArray

from autotune.identify.model import ProcessModel

Array = NDArray[np.float64]

_TERMS = 16
"""Of the exponential's series on a matrix of norm 1/4 or less: the rest is below double precision."""

_WHOLE_SCAN_RATIO = 1e-9
"""A dead time this close to whole scans is whole: the fraction is rounding."""


@dataclass(frozen=True, slots=True, eq=False)
class HeldPlant:
    """z^-q N(z^-1)/D(z^-1) from OP to PV, once a scan: coefficients of z^0, z^-1, ...

    ``pole_offsets`` are the poles less 1, exact for slow poles, where 1 itself would swallow them.
    """

    scan_s: float
    delay_scans: int
    numerator: Array
    denominator: Array
    pole_offsets: NDArray[np.complex128]

    def response(self, w_rad_per_s: Array) -> NDArray[np.complex128]:
        """%PV/%OP at each frequency below pi/h."""
        angle = 1j * w_rad_per_s * self.scan_s
        back = np.exp(-angle)
        offset = np.expm1(angle)
        order = len(self.pole_offsets)
        bottom = np.prod(offset[..., None] - self.pole_offsets, axis=-1)
        top = np.polyval(self.numerator[::-1], back)
        return np.asarray(top * np.exp((order - self.delay_scans) * angle) / bottom)


def held_plant(model: ProcessModel, scan_s: float, op_delay_s: float = 0.0) -> HeldPlant:
    """What a block that runs once in ``scan_s`` sees; ``op_delay_s`` is from reading PV to OP's effect."""
    delay_scans, fraction_s = _whole_scans(model.dead_time_s + op_delay_s, scan_s)
    phi_f, gamma_f = exponential(model, fraction_s, scan_s)
    phi_r, gamma_r = exponential(model, scan_s - fraction_s, scan_s)
    output = output_row(model, scan_s)
    poles_per_scan = np.roots(_per_scan(model, scan_s))
    denominator = np.real(np.poly(np.exp(poles_per_scan)))
    order = len(denominator) - 1
    late = phi_r @ gamma_f
    phi = phi_r @ phi_f
    state = gamma_r
    weights = [0.0, float(output @ state)]
    state = phi @ state + late
    for _ in range(order):
        weights.append(float(output @ state))
        state = phi @ state
    numerator = np.convolve(denominator, weights)[: order + 2]
    return HeldPlant(scan_s, delay_scans, numerator, denominator, np.expm1(poles_per_scan))


def _whole_scans(delay_s: float, scan_s: float) -> tuple[int, float]:
    """(q, f): whole scans in a delay and what is left, 0 <= f < h."""
    scans = delay_s / scan_s
    whole = floor(scans + _WHOLE_SCAN_RATIO)
    return whole, max(0.0, delay_s - whole * scan_s)


def exponential(model: ProcessModel, t_s: float, unit_s: float) -> tuple[Array, Array]:
    """(Phi, Gam) of a held input over ``t_s``, states counted in ``unit_s`` (companion form; Van Loan 1978)."""
    coefficients = _per_scan(model, unit_s)
    order = len(coefficients) - 1
    block = np.zeros((order + 1, order + 1))
    block[0, :order] = -coefficients[1:]
    block[0, order] = 1.0
    block[1:order, : order - 1] = np.eye(order - 1)
    block *= t_s / unit_s
    size = float(np.max(np.sum(np.abs(block), axis=1)))
    halvings = max(0, ceil(log2(size)) + 2) if size > 0.0 else 0
    block /= 2.0**halvings
    total = term = np.eye(order + 1)
    for count in range(1, _TERMS):
        term = term @ block / count
        total = total + term
    for _ in range(halvings):
        total = total @ total
    return total[:order, :order], total[:order, order]


def _per_scan(model: ProcessModel, unit_s: float) -> Array:
    """The denominator's coefficients with time counted in scans, monic."""
    return np.array([number * unit_s**power for power, number in enumerate(model.denominator)])


def output_row(model: ProcessModel, unit_s: float) -> Array:
    """What PV is of the states of ``exponential`` with the same ``unit_s``."""
    order = len(model.denominator) - 1
    row = np.zeros(order)
    numerator = np.array(model.numerator)
    powers = np.arange(order - len(numerator) + 1, order + 1)
    row[order - len(numerator) :] = numerator * unit_s ** powers.astype(float)
    return row
