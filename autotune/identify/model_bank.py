"""The structures that a plant is fitted with: B(s) e^(-Ls)/D(s) of order 1 to 4 with no or one zero.

D is a product of lags (s + e^a) and pairs (s^2 + e^b s + e^a), so that it is stable whatever a, b are; an
integrator is the limit a -> -inf.  Time is counted in observed periods, so that all of them are of order one.
"""

from dataclasses import dataclass
from functools import reduce

import numpy as np

from autotune.identify.fourier import ComplexArray
from autotune.identify.waveforms import Array

SHAPE_LOW, SHAPE_HIGH = -14.0, 9.0  # bounds of a and b: a lag of e^14 periods integrates, one of e^-9 is none


@dataclass(frozen=True, slots=True)
class Structure:
    """``order`` of D and number of ``zeros`` of B; D is made of ``order`` shape parameters."""

    order: int
    zeros: int

    def __str__(self) -> str:
        order = ("first", "second", "third", "fourth")[self.order - 1]
        return f"{order} order with {'a zero' if self.zeros else 'no zero'}"

    @property
    def outputs(self) -> int:
        """Number of coefficients of B."""
        return self.zeros + 1


BANK = (
    Structure(1, 0),
    Structure(2, 0),
    Structure(2, 1),
    Structure(3, 0),
    Structure(3, 1),
    Structure(4, 0),
)


def _factors(shape: Array) -> list[Array]:
    """The shape parameters, factor by factor: (a) of a lag, (a, b) of a pair; an odd order begins with its lag."""
    odd = len(shape) % 2
    return ([shape[:1]] if odd else []) + [shape[i : i + 2] for i in range(odd, len(shape), 2)]


def denominator(shape: Array) -> Array:
    """Coefficients of D in descending powers, monic."""
    return np.asarray(reduce(np.convolve, [np.append(1.0, np.exp(factor[::-1])) for factor in _factors(shape)]))


def denominator_slopes(shape: Array) -> Array:
    """d D / d shape: a row a shape parameter, columns d_0 .. d_(n-1) (ascending powers)."""
    factors = _factors(shape)
    rows = []
    for i, factor in enumerate(factors):
        others = [np.append(1.0, np.exp(other[::-1])) for j, other in enumerate(factors) if j != i]
        for k in range(len(factor)):
            moved = np.zeros(len(factor) + 1)
            moved[len(factor) - k] = np.exp(factor[k])
            rows.append(reduce(np.convolve, others, moved)[:0:-1])
    return np.array(rows)


def poles(shape: Array) -> ComplexArray:
    """The roots of D, each to full relative precision."""
    found: list[complex] = []
    for factor in _factors(shape):
        if len(factor) == 1:
            found.append(-complex(np.exp(factor[0])))
            continue
        product, total = np.exp(factor[0]), np.exp(factor[1])
        root = np.sqrt(complex(total**2 - 4 * product))
        larger = -(total + root) / 2  # no cancellation: both of one sign, or conjugates
        found += [larger, product / larger]
    return np.array(found)


def shape_of(poles_per_period: ComplexArray) -> Array:
    """The shape parameters of these poles, all in the left half plane, conjugates beside each other.

    Real poles are paired with their nearest, so that a pair may turn complex from there.
    """
    found = poles_per_period
    if not np.any(found.imag):
        found = found[np.argsort(-found.real)]
        if len(found) == 3 and found[2] * found[0] > found[1] ** 2:  # the slower two are the nearer
            found = np.roll(found, 1)
    odd = len(found) % 2
    shape = [np.log(-found[0].real)] if odd else []
    for first, second in found[odd:].reshape(-1, 2):
        shape += [np.log((first * second).real), np.log(-(first + second).real)]
    return np.asarray(np.clip(np.array(shape), SHAPE_LOW, SHAPE_HIGH))
