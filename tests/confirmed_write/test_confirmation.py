"""A person's word for exact numbers."""

from dataclasses import fields, replace
from math import inf, nan
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.confirmed_write.confirmation import GOOD_FOR_S, check_confirmation, confirm, digest, short_digest
from autotune.confirmed_write.machine import begin
from autotune.confirmed_write.plan import Confirmation, FieldLimit, WritePlan
from autotune.loop.outcome import Refusal
from autotune.loop.settings import BlockFields
from tests.confirmed_write.controller import NEW, OLD, PLAN, confirmed


def _code(outcome: object) -> str:
    assert isinstance(outcome, Refusal), outcome
    return outcome.code


OTHER: dict[str, Any] = {
    "loop": "TIC-205",
    "proposal": "ziegler-nichols-pi",
    "as_found": replace(OLD, gain=2.0000001),
    "fields": replace(NEW, derivative=3.0000001),
    "order": ("gain", "integral", "derivative"),
    "block_digest": "d" * 64,
    "configuration_digest": "e" * 64,
    "limits": (("gain", FieldLimit(low=0.1)),),
    "write_in_manual": False,
    "sp_tracks_in_manual": True,
}


@pytest.mark.parametrize("name", [part.name for part in fields(WritePlan)])
def test_whatever_changes_in_a_plan_changes_its_digest(name: str) -> None:
    assert digest(replace(PLAN, **{name: OTHER[name]})) != digest(PLAN)


def test_the_digest_is_a_sha_256_and_the_short_one_its_first_digits() -> None:
    full = digest(PLAN)
    assert len(full) == 64
    assert short_digest(PLAN) == f"{full[:4]}-{full[4:8]}"


def test_whole_numbers_are_one_plan_however_they_are_written() -> None:
    assert digest(replace(PLAN, fields=BlockFields(1.5, 20, 3))) == digest(PLAN)


@given(first=st.floats(0.1, 10.0), second=st.floats(0.1, 10.0))
def test_two_plans_share_a_digest_only_if_they_are_equal(first: float, second: float) -> None:
    one = replace(PLAN, fields=replace(NEW, gain=first))
    other = replace(PLAN, fields=replace(NEW, gain=second))
    assert (digest(one) == digest(other)) is (one == other)


@pytest.mark.parametrize("spell", [str, str.upper, lambda text: f" {text} ", lambda text: text.replace("-", "")])
def test_a_person_types_the_short_digest_as_people_type(spell: Any) -> None:
    confirmation = confirm(PLAN, spell(short_digest(PLAN)), "A. Person", 5.0)
    assert isinstance(confirmation, Confirmation)
    assert (confirmation.given_s, confirmation.expires_s) == (5.0, 5.0 + GOOD_FOR_S)
    assert check_confirmation(PLAN, confirmation, frozenset(), 5.0) is None


def test_the_whole_digest_is_taken_too() -> None:
    assert isinstance(confirm(PLAN, digest(PLAN), "A. Person", 0.0), Confirmation)


@pytest.mark.parametrize("typed", ["", "yes", "0000-0000", "7", "-"])
def test_nothing_else_that_is_typed_confirms(typed: str) -> None:
    assert _code(confirm(PLAN, typed, "A. Person", 0.0)) == "DIGEST_WRONG"


def test_the_digits_of_another_plan_do_not_confirm() -> None:
    other = replace(PLAN, loop="FIC-101")
    assert _code(confirm(PLAN, short_digest(other), "A. Person", 0.0)) == "DIGEST_WRONG"
    assert _code(begin(PLAN, confirmed(other), frozenset(), 0.0)) == "DIGEST_WRONG"


@pytest.mark.parametrize("person", ["", "  "])
def test_nobody_confirms_nothing(person: str) -> None:
    assert _code(confirm(PLAN, short_digest(PLAN), person, 0.0)) == "PERSON_UNKNOWN"


def test_a_plan_that_may_not_be_written_is_not_confirmed() -> None:
    idle = replace(PLAN, fields=OLD)
    assert _code(confirm(idle, short_digest(idle), "A. Person", 0.0)) == "NOTHING_TO_WRITE"


@pytest.mark.parametrize("now_s", [-0.001, GOOD_FOR_S + 0.001, inf, nan])
def test_a_confirmation_is_good_for_a_while_only(now_s: float) -> None:
    assert _code(begin(PLAN, confirmed(), frozenset(), now_s)) == "CONFIRMATION_EXPIRED"


def test_a_confirmation_without_an_end_is_none() -> None:
    endless = Confirmation(short_digest(PLAN), "A. Person", 0.0, inf)
    assert _code(begin(PLAN, endless, frozenset(), 1.0)) == "CONFIRMATION_EXPIRED"


@pytest.mark.parametrize("now_s", [0.0, GOOD_FOR_S])
def test_a_confirmation_is_good_to_its_last_moment(now_s: float) -> None:
    assert isinstance(begin(PLAN, confirmed(), frozenset(), now_s), tuple)


def test_a_confirmation_used_twice_is_refused() -> None:
    confirmation = confirmed()
    assert _code(begin(PLAN, confirmation, frozenset({confirmation}), 1.0)) == "CONFIRMATION_USED"
