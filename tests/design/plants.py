"""Plants for the tests of this room, and the outside check values by id."""

import json
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np

from autotune.identify.model import ProcessModel

REFERENCE = Path(__file__).parents[1] / "reference"


@cache
def checks() -> dict[str, dict[str, Any]]:
    """The outside check values by id."""
    return {check["id"]: check for check in json.loads((REFERENCE / "checks.json").read_text(encoding="utf-8"))}


def plant(
    *lags_s: float,
    gain: float = 1.0,
    dead_time_s: float = 0.0,
    zeros_s: tuple[float, ...] = (),
    integrators: int = 0,
    quadratic: tuple[float, float] | None = None,
) -> ProcessModel:
    """gain prod(1 + zero s) e^(-L s) / (prod(1 + lag s) (q0 s^2 + q1 s + 1) s^integrators)."""
    top, bottom = np.array([gain]), np.array([1.0])
    for zero_s in zeros_s:
        top = np.polymul(top, [zero_s, 1.0])
    for lag_s in lags_s:
        bottom = np.polymul(bottom, [lag_s, 1.0])
    if quadratic is not None:
        bottom = np.polymul(bottom, [*quadratic, 1.0])
    bottom = np.concatenate((bottom, np.zeros(integrators)))
    return ProcessModel(
        tuple(float(number) for number in top / bottom[0]),
        tuple(float(number) for number in bottom / bottom[0]),
        dead_time_s,
    )


THREE_LAGS = plant(1.0, 1.0, 1.0)
