"""Why a write did not go as planned, in words with a stable code."""

from autotune.confirmed_write.plan import WritePlan
from autotune.confirmed_write.state import WriteState
from autotune.loop.mode import LoopMode
from autotune.loop.outcome import Refusal
from autotune.loop.settings import BlockFields

AUTO_NOT_SHOWN_SAFE = Refusal(
    "AUTO_NOT_SHOWN_SAFE",
    "several fields change, and the loop would run on each combination in between",
    "put the loop in manual by hand, then write",
)


def cancelled(state: WriteState) -> Refusal:
    """A person or the service ended the write."""
    return Refusal("CANCELLED", f"{state.cancelled_by} cancelled the write", "confirm again to write")


def settings_differ(plan: WritePlan, read: BlockFields) -> Refusal:
    """The controller holds other numbers than the plan was made against."""
    return Refusal(
        "SETTINGS_DIFFER",
        f"the controller holds {_numbers(read)}, and the plan was made against {_numbers(plan.as_found)}",
        "find out who changed them, then propose again",
    )


def mode_unsuited(mode: LoopMode) -> Refusal:
    """The loop is in a mode from which nothing is written."""
    return Refusal("MODE_UNSUITED", f"the loop is in {mode.value}", "bring it to manual or automatic, then write")


def mode_taken(mode: LoopMode) -> Refusal:
    """Somebody else changed the mode: the loop is theirs."""
    return Refusal(
        "MODE_TAKEN", f"the mode was changed to {mode.value} by somebody else", "the loop was left in their mode"
    )


def output_taken(held_pct: float, read_pct: float) -> Refusal:
    """Somebody else moved the output in manual: the loop is theirs."""
    return Refusal(
        "OUTPUT_TAKEN",
        f"the output was moved from {held_pct:.2f} % to {read_pct:.2f} % by somebody else",
        "the loop was left in manual, where they have it",
    )


def not_manual(detail: str) -> Refusal:
    """The loop did not go to manual."""
    return Refusal("NOT_MANUAL", f"the loop did not go to manual ({detail})", "put it in manual by hand, then write")


def write_refused(name: str, detail: str) -> Refusal:
    """The controller said no to a field."""
    return Refusal(
        "WRITE_REFUSED",
        f"the controller refused {name} ({detail})",
        "check the field's access and range at the controller",
    )


def not_held(name: str, written: float | None, read: float | None) -> Refusal:
    """A field does not hold what was written."""
    return Refusal(
        "NOT_HELD",
        f"{name} was written as {written} and reads {read}",
        "check the field's resolution, range and access at the controller",
    )


def not_read(detail: str) -> Refusal:
    """The settings did not come in time."""
    return Refusal("NOT_READ", f"the settings could not be read ({detail})", "check the link to the controller")


def unverified(state: WriteState, reason: str) -> Refusal:
    """What is at the controller is not shown; both sets of numbers are named, to be entered by hand."""
    plan, last = state.plan, state.last_read
    read = "nothing was read" if last is None else f"last read: {_numbers(last.fields)}, in {last.mode.value}"
    return Refusal(
        "UNVERIFIED",
        reason,
        f"go to the controller's panel and enter one set by hand; as found: {_numbers(plan.as_found)}; "
        f"proposed: {_numbers(plan.fields)}; {read}; the loop was found in {state.mode_found.value}",
    )


def _numbers(fields: BlockFields) -> str:
    derivative = "" if fields.derivative is None else f", derivative {fields.derivative:g}"
    return f"gain {fields.gain:g}, integral {fields.integral:g}{derivative}"
