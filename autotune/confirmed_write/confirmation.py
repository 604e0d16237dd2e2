"""A person's word for exact numbers: the digest of a plan, typed by hand."""

import json
from dataclasses import astuple
from hashlib import sha256
from math import isfinite

from autotune.confirmed_write.limits import check_plan
from autotune.confirmed_write.plan import Confirmation, WritePlan
from autotune.loop.outcome import Refusal

GOOD_FOR_S = 120.0
"""How long a confirmation may wait for its write, in seconds."""

_SHORT_LENGTH = 8


def digest(plan: WritePlan) -> str:
    """Hex SHA-256 over everything that the plan says: another number anywhere is another digest."""
    return sha256(json.dumps(_plain(astuple(plan))).encode()).hexdigest()


def short_digest(plan: WritePlan) -> str:
    """What a person types: the first eight digits of the digest, as ``7f3a-91c2``."""
    full = digest(plan)
    return f"{full[:4]}-{full[4:_SHORT_LENGTH]}"


def confirm(
    plan: WritePlan, typed: str, person: str, now_s: float, good_for_s: float = GOOD_FOR_S
) -> Confirmation | Refusal:
    """The confirmation that ``person`` gives at ``now_s`` by typing the short (or the whole) digest.

    Refuses what ``check_plan`` refuses, an unnamed person (``PERSON_UNKNOWN``) and another digest
    (``DIGEST_WRONG``).  The confirmation is good for one write within ``good_for_s`` seconds.
    """
    if (refusal := check_plan(plan)) is not None:
        return refusal
    if not person.strip():
        return Refusal("PERSON_UNKNOWN", "nobody is named who confirms", "sign in, or give a name")
    confirmation = Confirmation(typed, person, now_s, now_s + good_for_s)
    return _check_digest(plan, confirmation) or confirmation


def check_confirmation(
    plan: WritePlan, confirmation: Confirmation, spent: frozenset[Confirmation], now_s: float
) -> Refusal | None:
    """Refuse a confirmation that was for other numbers (``DIGEST_WRONG``), has been used
    (``CONFIRMATION_USED``) or isn't good at ``now_s`` (``CONFIRMATION_EXPIRED``).
    """
    if (refusal := _check_digest(plan, confirmation)) is not None:
        return refusal
    if confirmation in spent:
        return Refusal("CONFIRMATION_USED", "a confirmation is good for one write only", "confirm again")
    if not (isfinite(confirmation.expires_s) and confirmation.given_s <= now_s <= confirmation.expires_s):
        return Refusal("CONFIRMATION_EXPIRED", "the confirmation has run out", "look at the numbers and confirm again")
    return None


def _check_digest(plan: WritePlan, confirmation: Confirmation) -> Refusal | None:
    full = digest(plan)
    typed = "".join(confirmation.digest.split()).replace("-", "").lower()
    if typed in (full, full[:_SHORT_LENGTH]):
        return None
    return Refusal(
        "DIGEST_WRONG",
        "what was typed doesn't belong to these numbers",
        "compare the numbers once more, then type the digits shown beside them",
    )


def _plain(part: object) -> object:
    """Numbers as floats, so that 1 and 1.0 are one plan; ``repr`` keeps every digit."""
    if isinstance(part, tuple):
        return [_plain(inner) for inner in part]
    if isinstance(part, int | float) and not isinstance(part, bool):
        return repr(float(part))
    return part
