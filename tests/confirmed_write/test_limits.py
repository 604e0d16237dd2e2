"""Whether a plan may be written, and in which order."""

from dataclasses import replace
from itertools import pairwise
from math import inf, nan

import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.confirmed_write.limits import changed_fields, check_plan, write_order
from autotune.confirmed_write.plan import FieldLimit
from autotune.loop.block_units import number_of, strength
from autotune.loop.outcome import Refusal
from autotune.loop.settings import BlockDescription, BlockFields, GainKind, IntegralKind, PidForm
from tests.confirmed_write.controller import NEW, OLD, PLAN

IDEAL = BlockDescription(PidForm.IDEAL)
BANDED = replace(IDEAL, gain_kind=GainKind.PROPORTIONAL_BAND, integral_kind=IntegralKind.REPEATS_PER_MIN)


def _code(outcome: object) -> str:
    assert isinstance(outcome, Refusal), outcome
    return outcome.code


def test_the_gain_goes_first_when_all_weakens_and_last_when_all_strengthens() -> None:
    strong, weak = BlockFields(2.0, 10.0, 4.0), BlockFields(1.0, 20.0, 2.0)
    assert write_order(strong, weak, IDEAL) == ("gain", "integral", "derivative")
    assert write_order(weak, strong, IDEAL) == ("derivative", "integral", "gain")


def test_a_bigger_band_is_a_weaker_gain_and_more_repeats_a_stronger_integral() -> None:
    assert write_order(BlockFields(50.0, 6.0, 0.0), BlockFields(100.0, 12.0, 0.0), BANDED) == ("gain", "integral")
    assert write_order(BlockFields(100.0, 12.0, 0.0), BlockFields(50.0, 6.0, 0.0), BANDED) == ("integral", "gain")


def test_switching_a_term_off_weakens_and_on_strengthens() -> None:
    assert write_order(BlockFields(1.0, 10.0, 0.0), BlockFields(2.0, 0.0, 0.0), IDEAL) == ("integral", "gain")
    assert write_order(BlockFields(2.0, 0.0, 0.0), BlockFields(1.0, 10.0, 0.0), IDEAL) == ("gain", "integral")


def test_what_does_not_change_is_not_written() -> None:
    assert changed_fields(OLD, replace(OLD, integral=31.0)) == ("integral",)
    assert write_order(OLD, OLD, IDEAL) == ()
    assert write_order(BlockFields(1.0, 10.0, None), BlockFields(1.0, 12.0, None), IDEAL) == ("integral",)


NUMBERS = st.sampled_from([0.0, 0.5, 1.0, 2.0, 10.0])
GAINS = st.sampled_from([0.5, 1.0, 2.0, 10.0])
FIELDS = st.builds(BlockFields, GAINS, NUMBERS, NUMBERS)


@given(old=FIELDS, new=FIELDS, block=st.sampled_from([IDEAL, BANDED]))
def test_nothing_is_strengthened_while_another_term_is_still_to_be_weakened(
    old: BlockFields, new: BlockFields, block: BlockDescription
) -> None:
    order = write_order(old, new, block)
    assert set(order) == set(changed_fields(old, new))

    def is_stronger(name: str, before: BlockFields, after: BlockFields) -> bool:
        one, other = number_of(before, name), number_of(after, name)
        assert one is not None
        assert other is not None
        return strength(name, other, block) > strength(name, one, block)

    for first, second in pairwise(order):
        assert not (is_stronger(first, old, new) and not is_stronger(second, old, new))
    for first, second in pairwise(reversed(order)):  # and so when they are put back
        assert not (is_stronger(first, new, old) and not is_stronger(second, new, old))


def test_a_plan_within_its_limits_may_be_written() -> None:
    limits = tuple((name, FieldLimit(1.0, 50.0, 2.0)) for name in ("gain", "integral", "derivative"))
    assert check_plan(replace(PLAN, limits=limits)) is None
    assert check_plan(PLAN) is None


@pytest.mark.parametrize(
    ("number", "limit", "is_allowed"),
    [
        (1.5, FieldLimit(low=1.5), True),
        (1.4999, FieldLimit(low=1.5), False),
        (2.5, FieldLimit(high=2.5), True),
        (2.5001, FieldLimit(high=2.5), False),
        (6.0, FieldLimit(factor_at_most=3.0), True),
        (6.01, FieldLimit(factor_at_most=3.0), False),
        (2.0 / 3.0, FieldLimit(factor_at_most=3.0001), True),
        (0.66, FieldLimit(factor_at_most=3.0), False),
        (-2.5, FieldLimit(factor_at_most=3.0), False),
        (0.0, FieldLimit(factor_at_most=3.0), False),
        (2.5, FieldLimit(low=nan), False),
        (2.5, FieldLimit(high=nan), False),
        (2.5, FieldLimit(factor_at_most=nan), False),
    ],
)
def test_floors_ceilings_and_factors_hold_to_the_bound(number: float, limit: FieldLimit, is_allowed: bool) -> None:
    plan = replace(PLAN, fields=replace(NEW, gain=number), limits=(("gain", limit),))
    refusal = check_plan(plan)
    assert (refusal is None) is is_allowed
    assert refusal is None or refusal.code == "FIELD_LIMIT"


def test_a_term_off_as_found_has_no_factor_to_be_within() -> None:
    plan = replace(
        PLAN, as_found=replace(OLD, derivative=0.0), limits=(("derivative", FieldLimit(factor_at_most=9.0)),)
    )
    assert _code(check_plan(plan)) == "FIELD_LIMIT"


def test_a_limit_on_what_does_not_change_stops_nothing() -> None:
    plan = replace(PLAN, fields=replace(OLD, gain=1.5), order=("gain",), limits=(("derivative", FieldLimit(high=1.0)),))
    assert check_plan(plan) is None
    assert check_plan(replace(plan, order=("gain", "derivative"))) is None


@pytest.mark.parametrize(
    "order",
    [(), ("gain",), ("gain", "integral"), ("gain", "gain", "integral", "derivative"), ("gain", "integral", "bias")],
)
def test_an_order_that_does_not_name_each_changed_field_once_is_refused(order: tuple[str, ...]) -> None:
    assert _code(check_plan(replace(PLAN, order=order))) == "PLAN_INCONSISTENT"


@pytest.mark.parametrize("limits", [(("bias", FieldLimit()),), (("gain", FieldLimit(1.0)), ("gain", FieldLimit(0.0)))])
def test_limits_that_name_no_field_or_one_twice_are_refused(limits: tuple[tuple[str, FieldLimit], ...]) -> None:
    assert _code(check_plan(replace(PLAN, limits=limits))) == "PLAN_INCONSISTENT"


@pytest.mark.parametrize("bad", [nan, inf, -inf, None])
def test_what_is_no_number_is_neither_written_nor_put_back(bad: float | None) -> None:
    assert _code(check_plan(replace(PLAN, fields=replace(NEW, derivative=bad)))) == "PLAN_INCONSISTENT"
    assert _code(check_plan(replace(PLAN, as_found=replace(OLD, derivative=bad)))) == "PLAN_INCONSISTENT"
