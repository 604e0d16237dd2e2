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
PAIR_SHARES, PAIR_DAMPINGS = (0.5, 0.9), (0.4, 0.75)
DEAD_TIME_KICKS = ((0.4, 0.75), (1.3, 1.8))  # down, up


def bank_fits(trace: Trace, earlier: tuple[Fit, ...] = ()) -> tuple[Fit, ...]:
    """One fit a structure of the bank, in its order; a higher order only where the one before it was of use.

    ``earlier`` fits, of the same test seen otherwise, are starts too.
    """
    fits: dict[Structure, Fit] = {}
    for structure in BANK:
        if structure.order > 2 and not _was_of_use(structure.order - 1, fits):
            continue
        families = [list(family) for family in _start_families(structure, fits)]
        families += [[fit.parameters] for fit in earlier if fit.structure == structure]
        fits[structure] = min((best_of(trace, structure, family) for family in families), key=lambda fit: fit.misfit)
    return tuple(fits.values())


def _was_of_use(order: int, fits: dict[Structure, Fit]) -> bool:
    here = [fit.bic for structure, fit in fits.items() if structure.order == order]
    below = [fit.bic for structure, fit in fits.items() if structure.order < order]
    return bool(here) and min(here) < min(below)


def updated_fits(trace: Trace, earlier: tuple[Fit, ...]) -> tuple[Fit, ...]:
    """The fits of a test that has changed little since: each structure from where it stood."""
    return tuple(best_of(trace, fit.structure, [fit.parameters]) for fit in earlier)


def _start_families(structure: Structure, fits: dict[Structure, Fit]) -> Iterator[Iterator[Array]]:
    """Starts by where they come from; the best of each family deserves its own descent."""
    simpler = fits.get(Structure(structure.order - 1, structure.zeros))
    if simpler is not None:
        yield _with_another_lag(simpler)
    elif structure.order == 1:
        yield (np.array([-np.log(lag), dead_time_ratio]) for dead_time_ratio in FIRST_DEAD_TIMES for lag in FIRST_LAGS)
    if structure == Structure(3, 0):
        yield _with_a_pair(fits[Structure(1, 0)])
    if structure.zeros:
        plain = fits[Structure(structure.order, 0)]
        for kicks in DEAD_TIME_KICKS:
            yield (np.append(plain.shape, kick * plain.dead_time_ratio + 0.02) for kick in kicks)


def _with_another_lag(fit: Fit) -> Iterator[Array]:
    """A lag that takes its time from the dead time, or from the fastest lag."""
    before = poles(fit.shape)
    for share in LAG_SHARES:
        lag = share * max(fit.dead_time_ratio, 0.03)
        yield np.append(shape_of(np.append(-1 / lag, before)), max(fit.dead_time_ratio - lag, 0.0))
    fastest = int(np.argmin(before.real))
    if before[fastest].imag == 0:
        halves = np.append(2 * before[fastest], np.where(np.arange(len(before)) == fastest, 2 * before, before))
        yield np.append(shape_of(halves), fit.dead_time_ratio)


def _with_a_pair(fit: Fit) -> Iterator[Array]:
    """A damped pair beside the one lag, of as much lag at low frequency (2 zeta/w) as it takes from the dead time."""
    for share in PAIR_SHARES:
        for damping in PAIR_DAMPINGS:
            w = 2 * damping / (share * max(fit.dead_time_ratio, 0.03))
            yield np.append(
                np.concatenate((fit.shape, [2 * np.log(w), np.log(2 * damping * w)])), (1 - share) * fit.dead_time_ratio
            )


def polished(trace: Trace, fit: Fit) -> Fit:
    """The fit driven to the bottom of its valley."""
    return refined(trace, fit, tolerance_ratio=1e-12)
