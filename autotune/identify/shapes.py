"""Every simple plant through one measured point: its phase split between lags, a zero and dead time.

At the frequency w1 of the point a lag 1/(1+Ts) turns the phase back by alpha = atan(T w1), at most 90
degrees (an integrator); a zero turns it by zeta (forward, or back for an inverse response); a damped
pair turns it back too; dead time by beta.  With x = w/w1, and normalised to the point,

    G(x) = (cos zeta + j x sin zeta) / prod(cos alpha_i + j x sin alpha_i) * |pair(1)|/pair(x) * e^(-j x beta),
    pair(x) = 1 - (r x)^2 + 2j damping r x,    |G(1)| = 1 and arg G(1) = the phase seen

for every split.  So a plant needs no fitting to run through the point as it stands; its harmonics, static
gain and ultimate point follow, and all plants together are one array expression.
"""

from dataclasses import dataclass, fields, replace
from functools import cache
from math import pi

import numpy as np
from numpy.typing import NDArray

from autotune.identify.fourier import ComplexArray
from autotune.identify.waveforms import Array

LOWEST_RATIO, HIGHEST_RATIO = 0.2, 30.0  # of the ultimate frequency to w1
BISECTIONS = 25  # ln(30/0.2) / 2^25 = 1.5e-7


@dataclass(frozen=True, slots=True)
class Shapes:
    """Plants as angles at w1 (rad), one row a plant.

    ``first_rad`` has two columns, one a lag of its own (unused 0); ``equal_rad`` is the angle of each of
    ``equal_count`` equal lags.  ``pair_ratio`` is w1 over the natural frequency of a damped pair (0: none),
    ``pair_damping`` its damping.  ``prior`` is the weight before the data speak, the same in all for every family.
    """

    first_rad: Array
    equal_rad: Array
    equal_count: Array
    zero_rad: Array
    pair_ratio: Array
    pair_damping: Array
    dead_time_rad: Array
    prior: Array

    def kept(self, keep: NDArray[np.bool_]) -> "Shapes":
        """Only the rows that ``keep`` marks."""
        return Shapes(*(getattr(self, column.name)[keep] for column in fields(self)))


def shapes_through(point_phase_rad: float) -> Shapes:
    """The shapes of the catalogue that can hold a point at this phase (negative): the equal lags take what is left."""
    shapes = catalogue()
    pair = np.angle(_pair(shapes, np.ones_like(shapes.prior)))
    others = np.sum(shapes.first_rad, axis=1) + pair + shapes.dead_time_rad - shapes.zero_rad
    equal_rad = (-point_phase_rad - others) / shapes.equal_count
    return replace(shapes, equal_rad=equal_rad).kept((equal_rad >= 0) & (equal_rad <= pi / 2))


def response(shapes: Shapes, x: Array | float) -> ComplexArray:
    """G at x = w/w1 over |G(w1)|, one number a shape; ``x`` is one ratio, or one a shape."""
    x = np.broadcast_to(x, shapes.prior.shape)
    first = np.prod(np.cos(shapes.first_rad) + 1j * x[:, None] * np.sin(shapes.first_rad), axis=1)
    equal = (np.cos(shapes.equal_rad) + 1j * x * np.sin(shapes.equal_rad)) ** shapes.equal_count
    zero = np.cos(shapes.zero_rad) + 1j * x * np.sin(shapes.zero_rad)
    pair = np.abs(_pair(shapes, np.ones_like(x))) / _pair(shapes, x)
    return np.asarray(zero * pair * np.exp(-1j * x * shapes.dead_time_rad) / (first * equal))


def phase_rad(shapes: Shapes, x: Array) -> Array:
    """Unwrapped phase of G at x = w/w1, one a shape: every factor has its own angle, so nothing jumps."""
    first = np.sum(np.arctan2(x[:, None] * np.sin(shapes.first_rad), np.cos(shapes.first_rad)), axis=1)
    equal = shapes.equal_count * np.arctan2(x * np.sin(shapes.equal_rad), np.cos(shapes.equal_rad))
    zero = np.arctan2(x * np.sin(shapes.zero_rad), np.cos(shapes.zero_rad))
    return np.asarray(zero - first - equal - np.angle(_pair(shapes, x)) - x * shapes.dead_time_rad)


def ultimate_ratio(shapes: Shapes) -> Array:
    """wu/w1 where the phase passes -180 degrees, by bisection in ln x; held inside LOWEST and HIGHEST_RATIO."""
    low = np.full_like(shapes.prior, np.log(LOWEST_RATIO))
    high = np.full_like(shapes.prior, np.log(HIGHEST_RATIO))
    for _ in range(BISECTIONS):
        middle = (low + high) / 2
        is_before = phase_rad(shapes, np.exp(middle)) > -pi
        low, high = np.where(is_before, middle, low), np.where(is_before, high, middle)
    return np.asarray(np.exp((low + high) / 2))


def slopes_at(shapes: Shapes, x: Array) -> tuple[Array, Array]:
    """d ln|G| / d ln w and d phase / d ln w (rad) at x, one a shape; central differences."""
    step = 1e-4
    above, below = x * (1 + step), x * (1 - step)
    gain = np.log(np.abs(response(shapes, above) / response(shapes, below))) / (2 * step)
    return np.asarray(gain), (phase_rad(shapes, above) - phase_rad(shapes, below)) / (2 * step)


@cache
def catalogue() -> Shapes:
    """The families; their equal lags are open (0).

    One, two and three lags; many equal lags beside another; lags with a zero; a lag with a damped pair; each
    with dead time from half a degree at w1 up (no real loop is without, and two lags alone have no Ku).
    Neighbours of a grid differ by less than a usual test can tell.
    """
    lags = np.append(np.arctan(np.geomspace(0.03, 60.0, 28)), pi / 2)
    few_lags = np.append(np.arctan(np.geomspace(0.1, 30.0, 11)), pi / 2)
    dead = np.radians([0.5, 1, 2, 3, 4.5, 6, 8, 10, 13, 16, 20, 25, 30, 36, 43, 50, 60, 70, 80, 95, 110, 125, 145, 165])
    few_dead = np.radians([0.5, 2, 5, 10, 18, 30, 45, 65, 90, 120, 150])
    zeros = np.radians(np.concatenate((np.arange(-75.0, 0.0, 5.0), np.arange(5.0, 45.0, 5.0))))
    one = _family(dead=np.radians(np.arange(0.5, 200.0, 0.5)))
    two = _family(first=lags, dead=dead)
    three = _family(first=lags[::2], second=lags[::2], dead=dead)
    many = [_family(first=np.append(0.0, few_lags), dead=dead, equal_count=count) for count in (2, 3, 4, 5, 7)]
    zero = [_family(first=few_lags, zero=zeros, dead=few_dead, equal_count=count) for count in (1, 2)]
    zero += [_family(zero=zeros, dead=dead, equal_count=count) for count in (2, 3, 4)]
    pair = _family(pair_ratio=np.geomspace(0.05, 2.0, 30), pair_damping=np.array([0.5, 0.7, 0.85]), dead=dead)
    return _together([one, two, three, _together(many), _together(zero), pair])


def _family(
    dead: Array,
    first: Array | None = None,
    second: Array | None = None,
    zero: Array | None = None,
    pair_ratio: Array | None = None,
    pair_damping: Array | None = None,
    equal_count: int = 1,
) -> Shapes:
    """Every combination of the given angles; what isn't given is absent."""
    axes = [np.zeros(1) if axis is None else axis for axis in (first, second, zero, pair_ratio, pair_damping)]
    one, two, zeta, ratio, damping, beta = (mesh.ravel() for mesh in np.meshgrid(*axes, dead))
    full = np.ones_like(beta)
    return Shapes(np.column_stack((one, two)), 0 * full, equal_count * full, zeta, ratio, damping, beta, full)


def _together(parts: list[Shapes]) -> Shapes:
    """All rows of the parts; each part has the same prior in all, and they sum to 1."""
    weighed = [replace(part, prior=part.prior / np.sum(part.prior) / len(parts)) for part in parts]
    return Shapes(*(np.concatenate([getattr(part, column.name) for part in weighed]) for column in fields(Shapes)))


def _pair(shapes: Shapes, x: Array) -> ComplexArray:
    ratio = shapes.pair_ratio * x
    return np.asarray(1 - ratio**2 + 2j * shapes.pair_damping * ratio)
