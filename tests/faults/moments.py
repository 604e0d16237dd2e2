"""When it happens: each phase of a test and of a confirmed write, recognised on the wire as it goes by."""

import asyncio
import random
import signal
from collections.abc import Callable
from dataclasses import dataclass

from tests.faults.evidence import MODE_CODES, OP_SAME_PCT, SETTINGS
from tests.faults.pair import Pair
from tests.faults.wire import Write

MOVED_PCT = 2.0


@dataclass(frozen=True, slots=True)
class Moment:
    """A phase: whether it belongs to a test or to a write of settings, how it shows, and for how long to wait then.

    ``shows`` is asked with the pair and the writes so far.  ``within_s`` spreads the strikes over the phase.
    ``after_signal`` is the phase in which the tool is first asked to stop, so that this one comes.
    """

    act: str
    name: str
    shows: Callable[[Pair], bool]
    within_s: float
    after_signal: "Moment | None" = None


def _asked(write: Write) -> float | None:
    """The output that a write asks for."""
    return write.numbers.get("op_request", write.numbers.get("op"))


def _found_op(pair: Pair) -> float:
    found_op: float = pair.seen[0][1]["op"]
    return found_op


def _last_asked(pair: Pair) -> float:
    """How far the last output asked for lies from the one as found; 0 before any."""
    asked = [one for write in pair.wire.writes if (one := _asked(write)) is not None]
    return asked[-1] - _found_op(pair) if asked else 0.0


def _has_journal(pair: Pair) -> bool:
    return any((pair.data_dir / "journals").glob("*.jsonl"))


def _is_taken(pair: Pair) -> bool:
    return any("holder_request" in write.numbers or "mode" in write.numbers for write in pair.wire.writes)


def _is_moved_back(pair: Pair) -> bool:
    """The output as found is asked for again after it was moved."""
    moves = [one - _found_op(pair) for write in pair.wire.writes if (one := _asked(write)) is not None]
    return any(abs(move) > MOVED_PCT for move in moves) and abs(moves[-1]) <= OP_SAME_PCT


def _fields_sent(pair: Pair) -> list[str]:
    return [name for write in pair.wire.writes for name in SETTINGS if name in write.numbers]


def _mode_asked(pair: Pair) -> list[float]:
    return [write.numbers["mode"] for write in pair.wire.writes if "mode" in write.numbers]


CHECKING = Moment("test", "CHECKING", _has_journal, 0.25)
BASELINE = Moment("test", "BASELINE", _is_taken, 0.5)
TESTING_HIGH = Moment("test", "TESTING high", lambda pair: _last_asked(pair) > MOVED_PCT, 0.3)
TESTING_LOW = Moment("test", "TESTING low", lambda pair: _last_asked(pair) < -MOVED_PCT, 0.3)
RESTORING = Moment("test", "RESTORING", _is_moved_back, 0.12, after_signal=TESTING_HIGH)

SETTINGS_CHECKING = Moment("settings", "write CHECKING", lambda pair: len(pair.wire.shown) > 0, 0.02)
SETTINGS_TAKING = Moment("settings", "write TAKING", lambda pair: _mode_asked(pair) == [MODE_CODES["MAN"]], 0.01)
SETTINGS_WRITING = Moment("settings", "write WRITING", lambda pair: len(_fields_sent(pair)) > 0, 0.05)
SETTINGS_PUTTING_BACK = Moment(
    "settings",
    "write PUTTING BACK",
    lambda pair: len(_fields_sent(pair)) > len(set(_fields_sent(pair))),
    0.15,
    after_signal=SETTINGS_WRITING,
)
SETTINGS_RETURNING = Moment("settings", "write RETURNING", lambda pair: MODE_CODES["AUTO"] in _mode_asked(pair), 0.02)

OF_A_TEST = (CHECKING, BASELINE, TESTING_HIGH, TESTING_LOW, RESTORING)
WHEN_TOUCHED = OF_A_TEST[1:]
OF_SETTINGS = (SETTINGS_CHECKING, SETTINGS_TAKING, SETTINGS_WRITING, SETTINGS_PUTTING_BACK, SETTINGS_RETURNING)
WHEN_WRITTEN = OF_SETTINGS[2:]
"""From where the tool has seen the output that it holds in manual, so that it can tell that somebody moved it."""


async def reach(pair: Pair, moment: Moment, rng: random.Random, *, is_spread: bool = True) -> bool:
    """Wait until the moment has come, and a little longer; whether it came before the tool ended."""
    if moment.after_signal is not None:
        if not await reach(pair, moment.after_signal, rng, is_spread=False):
            return False
        pair.signal(signal.SIGINT)
    assert pair.tool is not None
    ended = asyncio.ensure_future(pair.tool.ended())
    comes = asyncio.ensure_future(pair.wire.until(lambda: moment.shows(pair)))
    await asyncio.wait({ended, comes}, return_when=asyncio.FIRST_COMPLETED)
    if is_spread and comes.done() and not ended.done():
        await asyncio.wait({ended}, timeout=rng.uniform(0.0, moment.within_s))
    has_come = comes.done() and not ended.done()
    for waiting in (ended, comes):
        waiting.cancel()
    return has_come
