import dataclasses
import json
import math
from enum import Enum
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.confirmed_write.events import Event as WriteEvent
from autotune.errors import JournalError
from autotune.experiment.commands import Command
from autotune.experiment.events import Event, SampleArrived, Started
from autotune.experiment.plan import TestPlan
from autotune.loop.limits import AsFound
from autotune.loop.mode import LoopMode
from autotune.loop.outcome import Interval
from autotune.loop.quality import Quality
from autotune.loop.sample import Sample, Stamp
from autotune.loop.span import Span
from autotune.service.journal_codec import TYPES, from_json, to_json

# Two types check their numbers when they are made; the rest takes any reading, hostile ones too.
_ORDERED = st.lists(st.floats(allow_nan=False, allow_infinity=False, width=32), min_size=3, max_size=3).map(sorted)
st.register_type_strategy(Interval, _ORDERED.map(lambda three: Interval(three[1], three[0], three[2])))
st.register_type_strategy(Span, st.floats(0, 1e6).map(lambda low_eu: Span(low_eu, 2 * low_eu + 1, "degC")))


def _through_json(payload: object) -> object:
    return from_json(json.loads(json.dumps(to_json(payload), allow_nan=False)))


def _alike(one: object, other: object) -> bool:
    """Equal, with NaN equal to NaN and no type mistaken for another."""
    if type(one) is not type(other):
        return False
    if isinstance(one, float) and isinstance(other, float):
        return one == other or (math.isnan(one) and math.isnan(other))
    if isinstance(one, tuple) and isinstance(other, tuple):
        return len(one) == len(other) and all(map(_alike, one, other))
    if isinstance(one, dict) and isinstance(other, dict):
        return one.keys() == other.keys() and all(_alike(one[key], other[key]) for key in one)
    if dataclasses.is_dataclass(one) and not isinstance(one, type):
        return all(_alike(getattr(one, part.name), getattr(other, part.name)) for part in dataclasses.fields(one))
    return one == other


@pytest.mark.parametrize("kind", TYPES.values(), ids=TYPES)
@given(data=st.data())
def test_every_type_comes_back_equal(kind: type, data: st.DataObject) -> None:
    payload = data.draw(st.from_type(kind))
    assert _alike(_through_json(payload), payload)


def test_every_event_command_and_plan_has_a_code() -> None:
    members = {*Event.__args__, *Command.__args__, *WriteEvent.__args__, TestPlan, AsFound}
    assert members <= set(TYPES.values())


@given(
    st.recursive(
        st.none() | st.booleans() | st.integers() | st.floats() | st.text(),
        lambda inner: st.lists(inner).map(tuple) | st.dictionaries(st.text(), inner),
        max_leaves=8,
    )
)
def test_notes_of_plain_values_come_back_equal(payload: object) -> None:
    assert _alike(_through_json(payload), payload)


@pytest.mark.parametrize("odd", [math.nan, math.inf, -math.inf])
def test_a_reading_that_json_lacks_comes_back_as_it_was(odd: float) -> None:
    stamp = Stamp.at(odd)
    sample = Sample(1.0, stamp, odd, Quality.GOOD, None, odd, Quality.GOOD, LoopMode.MAN)
    assert _alike(_through_json(SampleArrived(1.0, sample)), SampleArrived(1.0, sample))


def test_the_code_says_room_and_name() -> None:
    assert to_json(Started(1.5)) == {"experiment.Started": {"t_s": 1.5}}
    assert to_json(LoopMode.MAN) == {"loop.LoopMode": "MAN"}
    assert to_json(math.nan) == {"float": "nan"}


class _Stranger(Enum):
    """No type of the journal."""

    HERE = 1


@pytest.mark.parametrize("payload", [object(), {1: "a"}, [1], b"raw", Path("x"), Started, _Stranger.HERE, {"a": {2}}])
def test_what_has_no_code_is_refused_at_once(payload: object) -> None:
    with pytest.raises(JournalError, match=r"no code|text keys"):
        to_json(payload)


@pytest.mark.parametrize(
    "coded",
    [
        {},
        {"float": "1.0"},
        {"float": {}},
        {"map": 3},
        {"experiment.Started": {}},
        {"experiment.Started": 3},
        {"experiment.Started": {"t_s": 1.0, "more": 2}},
        {"experiment.Begun": {"t_s": 1.0}},
        {"loop.LoopMode": "man"},
        {"loop.LoopMode": 1},
        {"loop.Span": {"low_eu": 1.0, "high_eu": 0.0, "unit": ""}},
        {"experiment.Started": {"t_s": 1.0}, "loop.LoopMode": "MAN"},
        {"builtins.eval": "1"},
    ],
)
def test_what_the_journal_never_writes_is_refused(coded: object) -> None:
    with pytest.raises(JournalError):
        from_json(coded)


def test_a_field_that_an_older_journal_lacks_takes_its_default() -> None:
    sample = Sample(1.0, Stamp.at(1.0), 50.0, Quality.GOOD, None, 40.0, Quality.GOOD, LoopMode.MAN)
    coded = to_json(sample)
    del coded["loop.Sample"]["boot_count"]
    assert from_json(coded) == sample
