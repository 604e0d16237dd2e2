"""What holds for every type of the room."""

from dataclasses import fields, is_dataclass
from inspect import getmembers, isclass
from types import ModuleType

import pytest

from autotune.loop import limits, mode, outcome, quality, record, sample, settings, span, write

MODULES = (limits, mode, outcome, quality, record, sample, settings, span, write)


def _dataclasses(module: ModuleType) -> list[type]:
    return [
        kind for _, kind in getmembers(module, isclass) if kind.__module__ == module.__name__ and is_dataclass(kind)
    ]


@pytest.mark.parametrize("module", MODULES, ids=lambda module: module.__name__)
def test_every_fact_about_a_loop_is_frozen_and_has_no_room_for_more(module: ModuleType) -> None:
    for kind in _dataclasses(module):
        assert kind.__dataclass_params__.frozen, kind  # type: ignore[attr-defined]  # set by the decorator
        assert set(kind.__slots__) == {part.name for part in fields(kind)}, kind  # type: ignore[attr-defined]  # as above


def test_a_write_that_nobody_heard_of_is_neither_applied_nor_refused() -> None:
    assert {outcome.name for outcome in write.WriteOutcome} == {"APPLIED", "REFUSED", "NOT_HEARD"}


def test_only_one_quality_is_good() -> None:
    assert [kind for kind in quality.Quality if kind.value == "good"] == [quality.Quality.GOOD]
