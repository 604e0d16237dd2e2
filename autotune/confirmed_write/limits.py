"""Whether a plan may be written at all, and in which order its fields go."""

from math import isfinite

from autotune.confirmed_write.plan import FieldLimit, WritePlan
from autotune.loop.block_units import FIELD_NAMES, is_same_number, number_of, strength
from autotune.loop.outcome import Refusal
from autotune.loop.settings import BlockDescription, BlockFields


def changed_fields(as_found: BlockFields, fields: BlockFields) -> tuple[str, ...]:
    """Names of the fields whose numbers differ, as far as single precision can tell."""
    return tuple(name for name in FIELD_NAMES if not is_same_number(number_of(as_found, name), number_of(fields, name)))


def write_order(as_found: BlockFields, fields: BlockFields, block: BlockDescription) -> tuple[str, ...]:
    """The changed fields in the order of writing: what weakens first, what strengthens last.

    So no moment in between holds a stronger term beside another that is still to be weakened.  Weakening
    begins with the gain, which takes the other terms down with it in most forms; strengthening ends with
    it.  Written backwards, the same order is the one for putting the old numbers back.
    """

    def is_weakened(name: str) -> bool:
        old, new = number_of(as_found, name), number_of(fields, name)
        return old is not None and new is not None and strength(name, new, block) < strength(name, old, block)

    changed = changed_fields(as_found, fields)
    weakened = [name for name in changed if is_weakened(name)]
    return (*weakened, *(name for name in reversed(changed) if name not in weakened))


def check_plan(plan: WritePlan) -> Refusal | None:
    """Refuse a plan that contradicts itself (``PLAN_INCONSISTENT``), changes nothing (``NOTHING_TO_WRITE``)
    or leaves its limits (``FIELD_LIMIT``).
    """
    changed = changed_fields(plan.as_found, plan.fields)
    if not changed:
        return Refusal("NOTHING_TO_WRITE", "the controller holds these settings already", "there is nothing to do")
    if len(set(plan.order)) != len(plan.order) or not set(changed) <= set(plan.order) <= set(FIELD_NAMES):
        return _inconsistent(f"its order {', '.join(plan.order)} doesn't name each changed field once")
    limits = dict(plan.limits)
    if len(limits) != len(plan.limits) or not limits.keys() <= set(FIELD_NAMES):
        return _inconsistent("its limits name a field twice or one that doesn't exist")
    for name in plan.order:
        old, new = number_of(plan.as_found, name), number_of(plan.fields, name)
        if old is None or new is None or not (isfinite(old) and isfinite(new)):
            return _inconsistent(f"its {name} is no number to write or to put back")
        if name in changed and (refusal := _check_limit(name, old, new, limits.get(name, FieldLimit()))) is not None:
            return refusal
    return None


def _check_limit(name: str, old: float, new: float, limit: FieldLimit) -> Refusal | None:
    """All comparisons are written so that NaN is refused."""
    if limit.low is not None and not new >= limit.low:
        return _outside(name, new, f"below the floor of {limit.low:g}")
    if limit.high is not None and not new <= limit.high:
        return _outside(name, new, f"above the ceiling of {limit.high:g}")
    factor = limit.factor_at_most
    if factor is None:
        return None
    # From or to zero a term is switched on or off, and a change of sign turns it round: both are no factor.
    if not (old * new > 0.0 and abs(new) <= factor * abs(old) and abs(old) <= factor * abs(new)):
        return _outside(name, new, f"changed from {old:g} by more than the allowed factor of {factor:g}")
    return None


def _inconsistent(reason: str) -> Refusal:
    return Refusal("PLAN_INCONSISTENT", f"the plan contradicts itself: {reason}", "make the plan anew")


def _outside(name: str, number: float, reason: str) -> Refusal:
    return Refusal(
        "FIELD_LIMIT",
        f"{name} {number:g} is {reason}",
        "choose other settings, or go there in smaller steps; the limits belong to the site",
    )
