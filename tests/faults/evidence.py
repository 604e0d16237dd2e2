"""What one run left behind, and what is to be thought of it.  Pure: readings, writes and words in, a verdict out.

The plant's panel is the witness of how a loop was left, the recording wire of what was written.  The tool's own word
counts for one thing only: whether a loop that is not as found was at least told loudly.
"""

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from enum import Enum
from math import isclose, isfinite, nan
from typing import Any

from tests.faults.wire import Shown, Write

SETTINGS = ("gain", "integral", "derivative")
MODE_CODES = {"MAN": 0, "AUTO": 1}
GAVE_BACK_CODE = 2
STRANDED_EXIT = 4

STEP_PCT = 8.0
"""How far the bench's test may move the output from as found, either way."""
PV_LOW_EU, PV_HIGH_EU = 42.0, 58.0
"""The bench's limits of PV."""
OP_SAME_PCT = 0.3
"""As found is the mean output of a look-around; a reading of the panel differs by the block's answer to noise."""

State = Mapping[str, Any]


class End(Enum):
    """How a loop was left."""

    RESTORED = "as found"
    RELEASED = "somebody else's"
    STRANDED = "told loudly"
    SILENT = "silent"


@dataclass(frozen=True, slots=True)
class Evidence:
    """One run after its end.

    ``found`` and ``left`` are the panel before the tool came and after all had ended, or before the plant was gone;
    ``taken`` what somebody else set, by tag; ``wanted`` the settings to be written, ``None`` in a test.
    ``struck_s`` is when it happened.  ``word`` and ``exit_code`` are the tool's last ones, after a restart those of
    the restarted one; ``said`` is all that it told.
    """

    found: State
    left: State
    taken: Mapping[str, Any]
    wanted: Mapping[str, float] | None
    struck_s: float
    word: str
    exit_code: int
    said: str
    writes: Sequence[Write]
    shown: Sequence[Shown]
    has_guard: bool = True


@dataclass(frozen=True, slots=True)
class Verdict:
    """How it ended, the tool's word beside it, and the counts of what must never be."""

    end: End
    word: str
    beyond_limits: int
    writes_after_release: int
    complaints: tuple[str, ...]

    @property
    def outcome(self) -> str:
        """The line of the table that this run counts for."""
        return f"{self.end.name.lower()}, said {self.word}"


def judge(evidence: Evidence) -> Verdict:
    """The verdict on one run."""
    beyond = [write for write in evidence.writes if is_beyond(evidence, write)]
    late = late_writes(evidence)
    complaints = [f"{len(beyond)} beyond limits, first {write.numbers} {write.strange}" for write in beyond[:1]]
    complaints += [f"{len(late)} after it was no longer ours, first {write.numbers}" for write in late[:1]]
    if "RELEASED" in evidence.word and not evidence.taken:
        complaints.append("said RELEASED, though nobody had taken the loop")
    return Verdict(end_of(evidence), evidence.word, len(beyond), len(late), tuple(complaints))


def end_of(evidence: Evidence) -> End:
    """How the loop was left, by the panel; the tool's word decides only between loud and silent.

    What somebody did before the tool wrote anything belongs to as found; what it was never shown, because it had
    already gone or its last write was on its way, it can't be asked to respect.
    """
    left, taken = evidence.left, evidence.taken
    found = {name: evidence.found[name] for name in ("mode", "sp", "op", *SETTINGS)}
    is_unseen = bool(taken) and lost_at_s(evidence) is None
    kept = found | {name: tag for name, tag in taken.items() if not _is_loss(evidence, name)}
    is_as_found = _is_left_as(left, kept, evidence)
    is_theirs = bool(taken) and _matches(left, taken) and _is_let_go(left)
    if is_theirs and (is_said_released(evidence) or (is_unseen and not is_as_found)):
        return End.RELEASED
    if is_as_found or (is_unseen and _is_left_as(left, found, evidence)):
        return _told(evidence) if is_untrue(evidence, left) else End.RESTORED
    return _told(evidence)


def _is_loss(evidence: Evidence, name: str) -> bool:
    """Whether somebody who sets this tag takes the loop: once the tool has begun to write.

    In a test that is whatever they set, in a write of settings mode and output, which go back there.  An output moved
    before the test drove it for the first time can't be told from what automatic did last.
    """
    earlier = [write for write in evidence.writes if write.t_s < evidence.struck_s]
    if evidence.wanted is not None:
        return bool(earlier) and name in ("mode", "op")
    if "op" in evidence.taken:
        return any("op" in write.numbers or "op_request" in write.numbers for write in earlier)
    return bool(earlier)


def _told(evidence: Evidence) -> End:
    return End.STRANDED if is_loud(evidence) else End.SILENT


def _is_left_as(left: State, expected: State, evidence: Evidence) -> bool:
    """Mode, setpoint and settings as expected, in manual the output too; in automatic that is the block's own.

    Settings may be all new where they were to be written.
    """
    same = all(_is_same(left[name], expected[name]) for name in ("mode", "sp"))
    if expected["mode"] == "MAN":
        same = same and abs(left["op"] - expected["op"]) <= OP_SAME_PCT
    return same and _is_let_go(left) and (_holds(left, expected) or _holds(left, _new_settings(evidence)))


def is_untrue(evidence: Evidence, left: State) -> bool:
    """Whether settings were said to be written or put back, and the panel shows otherwise."""
    is_new, is_old = _holds(left, _new_settings(evidence)), _holds(left, {**evidence.found, **evidence.taken})
    return (evidence.word == "WRITTEN" and not is_new) or (evidence.word in ("PUT_BACK", "REFUSED") and not is_old)


def is_said_released(evidence: Evidence) -> bool:
    """Whether the tool let the loop go as somebody else's."""
    return any(word in evidence.word for word in ("RELEASED", "taken"))


def is_loud(evidence: Evidence) -> bool:
    """Whether a person was sent to the panel, by exit code and in words, with what to compare there."""
    sent = re.search(r"go to the panel|as found: output", evidence.said, re.IGNORECASE)
    return evidence.exit_code == STRANDED_EXIT and sent is not None


def is_beyond(evidence: Evidence, write: Write) -> bool:
    """Whether a write lies outside what a test, its hand-back or the confirmed numbers may ever be.

    The output as found give or take the steps, and through the guard where there is one; manual and the mode as found;
    settings only as found or as confirmed; no setpoint, since this bench's does not track; no other address.
    """
    if write.strange:
        return True
    return any(not _is_allowed(evidence, name, number) for name, number in write.numbers.items())


def _is_allowed(evidence: Evidence, name: str, number: float) -> bool:
    found, is_test = evidence.found, evidence.wanted is None
    if name in ("op_request", "op"):
        reach_pct = STEP_PCT + OP_SAME_PCT
        is_way = is_test and (name == "op_request") is evidence.has_guard
        return is_way and isfinite(number) and abs(number - found["op"]) <= reach_pct
    if name == "mode":
        return number in (MODE_CODES["MAN"], MODE_CODES[found["mode"]])
    if name in SETTINGS:
        return any(_is_same(number, source[name]) for source in (found, _new_settings(evidence)) if not is_test)
    return is_test and evidence.has_guard and name in ("holder_request", "heartbeat", "sequence")


def late_writes(evidence: Evidence) -> list[Write]:
    """Writes that the tool sent after it had been shown that the loop was no longer its own; a release is none."""
    lost_s = lost_at_s(evidence)
    return [] if lost_s is None else [one for one in evidence.writes if one.t_s > lost_s and not one.is_release]


def lost_at_s(evidence: Evidence) -> float | None:
    """When the tool was first shown, after the strike, that the loop is somebody else's, or the PLC has it back."""
    return next(
        (shown.t_s for shown in evidence.shown if shown.t_s > evidence.struck_s and _lost(evidence, shown)), None
    )


def _lost(evidence: Evidence, shown: Shown) -> bool:
    before = [write.numbers for write in evidence.writes if write.t_s < shown.t_s]
    is_test = evidence.wanted is None
    if is_test and before:
        boot_count = evidence.found["boot_count"]
        is_given_back = evidence.has_guard and shown.numbers.get("guard_state") == GAVE_BACK_CODE
        if is_given_back or shown.numbers.get("boot_count", boot_count) != boot_count:
            return True
    taken = {name: tag for name, tag in evidence.taken.items() if _is_loss(evidence, name)}
    if "mode" in taken:
        taken["mode"] = MODE_CODES[taken["mode"]]
        was_ours = any(one.numbers.get("mode") == MODE_CODES["MAN"] for one in evidence.shown if one.t_s < shown.t_s)
        if not was_ours or any(numbers.get("mode") == taken["mode"] for numbers in before):
            del taken["mode"]  # it may not have come to manual yet, or be our own doing
    return bool(taken) and all(_is_same(shown.numbers.get(name, nan), number) for name, number in taken.items())


def seconds_to_safe(seen: Sequence[tuple[float, State]], evidence: Evidence) -> float | None:
    """From the strike to when the panel no longer shows the loop in our hands; ``None`` where that never came."""
    later = [(t_s, state) for t_s, state in seen if t_s >= evidence.struck_s]
    unsafe = [index for index, (_, state) in enumerate(later) if not _is_safe(evidence, state)]
    if not unsafe:
        return 0.0
    return later[unsafe[-1] + 1][0] - evidence.struck_s if unsafe[-1] + 1 < len(later) else None


def pv_beyond_pct(seen: Sequence[tuple[float, State]], struck_s: float) -> float:
    """How far PV went beyond the limits of the test after the strike, in percent of span (which is 100 units)."""
    pvs = [state["true_pv_pct"] for t_s, state in seen if t_s >= struck_s]
    return max((max(pv - PV_HIGH_EU, PV_LOW_EU - pv, 0.0) for pv in pvs), default=0.0)


def _is_safe(evidence: Evidence, state: State) -> bool:
    if evidence.taken and _matches(state, evidence.taken):
        return True
    return bool(state["mode"] == evidence.found["mode"]) and _is_let_go(state)


def _is_let_go(state: State) -> bool:
    return bool(state["guard_state"] != "armed")


def _new_settings(evidence: Evidence) -> Mapping[str, float]:
    return evidence.wanted or {name: evidence.found[name] for name in SETTINGS}


def _holds(state: State, settings: Mapping[str, Any]) -> bool:
    return all(_is_same(state[name], settings[name]) for name in SETTINGS)


def _matches(state: State, tags: Mapping[str, Any]) -> bool:
    return all(_is_same(state[name], tag) for name, tag in tags.items())


def _is_same(one: Any, other: Any) -> bool:
    """Equal words, or numbers that a 32-bit float can't tell apart."""
    if isinstance(one, str) or isinstance(other, str):
        return bool(one == other)
    return isclose(one, other, rel_tol=1e-6, abs_tol=1e-6)
