"""The whole bank fitted to one test: structures are built up, each from the simpler ones before it.

The optimum of (order, zeros) is a stationary point of (order, zeros + 1): dPV/dL is parallel to the new zero's
column.  So a zero starts with the dead time kicked both ways; and a new lag takes its time from the dead time.
"""

from collections.abc import Iterator

import numpy as np

from autotune.identify.model_bank import BANK, Structure, poles, shape_of
from autotune.identify.output_error import Fit, Trace, best_of, refined
from autotune.identify.waveforms import Array

FIRST_DEAD_TIMES = (0.02, 0.1, 0.2, 0.3, 0.45)  # periods
FIRST_LAGS = (0.03, 0.15, 0.5, 2.0, 20.0)
LAG_SHARES = (0.15, 0.4, 0.7)  # of the dead time that a new lag takes over
DEAD_TIME_KICKS = (0.4, 0.75, 1.3, 1.8)


def bank_fits(trace: Trace) -> tuple[Fit, ...]:
    """One fit a structure of the bank, in its order."""
    fits: dict[Structure, Fit] = {}
    for structure in BANK:
        fits[structure] = best_of(trace, structure, list(_starts(structure, fits)))
    return tuple(fits.values())


def updated_fits(trace: Trace, earlier: tuple[Fit, ...]) -> tuple[Fit, ...]:
    """The fits of a test that has grown since: each structure from where it stood."""
    return tuple(best_of(trace, fit.structure, [fit.parameters], refine=1) for fit in earlier)


def _starts(structure: Structure, fits: dict[Structure, Fit]) -> Iterator[Array]:
    simpler = fits.get(Structure(structure.order - 1, structure.zeros))
    if structure.zeros:
        plain = fits[Structure(structure.order, 0)]
        for kick in DEAD_TIME_KICKS:
            yield np.append(plain.shape, kick * plain.dead_time + 0.02)
    elif simpler is None:
        for dead_time in FIRST_DEAD_TIMES:
            for lag in FIRST_LAGS:
                yield np.array([-np.log(lag), dead_time])
    if simpler is not None:
        yield from _with_another_lag(simpler)


def _with_another_lag(fit: Fit) -> Iterator[Array]:
    before = poles(fit.shape)
    for share in LAG_SHARES:
        lag = share * max(fit.dead_time, 0.03)
        yield np.append(shape_of(np.append(-1 / lag, before)), max(fit.dead_time - lag, 0.0))


def polished(trace: Trace, fit: Fit) -> Fit:
    """The fit driven to the bottom of its valley."""
    return refined(trace, fit, tolerance=1e-12)
