"""The structures that a plant is fitted with: B(s) e^(-Ls)/D(s) of order 1 to 4 with no or one zero.

D is a product of lags (s + e^a) and pairs (s^2 + e^b s + e^a), so that it is stable whatever a, b are; an
integrator is the limit a -> -inf.  Time is counted in observed periods, so that all of them are of order one.
"""

from cmath import sqrt
from dataclasses import dataclass
from functools import reduce
from math import exp

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


def _factors(shape: Array) -> list[list[float]]:
    """The factors of D in descending powers: s + e^a of a lag, s^2 + e^b s + e^a; an odd order begins with its lag."""
    grown = [exp(parameter) for parameter in shape]
    odd = len(grown) % 2
    return [[1.0, grown[0]]] * odd + [[1.0, grown[i + 1], grown[i]] for i in range(odd, len(grown), 2)]


def _product(one: list[float], other: list[float]) -> list[float]:
    """Of two polynomials."""
    made = [0.0] * (len(one) + len(other) - 1)
    for i, left in enumerate(one):
        for j, right in enumerate(other):
            made[i + j] += left * right
    return made


def denominator(shape: Array) -> Array:
    """Coefficients of D in descending powers, monic."""
    return np.array(reduce(_product, _factors(shape)))


def denominator_slopes(shape: Array) -> Array:
    """d D / d shape: a row a shape parameter, columns d_0 .. d_(n-1) (ascending powers)."""
    factors = _factors(shape)
    rows = []
    for i, factor in enumerate(factors):
        others = factors[:i] + factors[i + 1 :]
        for power, coefficient in enumerate(factor[:0:-1]):
            rows.append(reduce(_product, others, [coefficient] + [0.0] * power)[::-1])
    return np.array([row + [0.0] * (len(shape) - len(row)) for row in rows])


def poles(shape: Array) -> ComplexArray:
    """The roots of D, each to full relative precision."""
    found: list[complex] = []
    for factor in _factors(shape):
        if len(factor) == 2:
            found.append(complex(-factor[1]))
            continue
        _, total, product = factor
        larger = -(total + sqrt(total**2 - 4 * product)) / 2  # no cancellation: both of one sign, or conjugates
        found += [larger, product / larger]
    return np.array(found, dtype=complex)


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
