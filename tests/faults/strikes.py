"""The faults: what is done to the tool, the PLC, the wire, the disk and the clock, when, and how it may end.

``FAULTS`` is the table.  ``ends`` lists how the loop may be left; anything else, and ``SILENT`` always, is a defect.
STRANDED stands where nobody could have given the loop back: the PLC is gone, or was restarted, or can't be seen, or
the loop changed so that it isn't ours to move.
"""

import asyncio
import random
import resource
import signal
import struct
from collections.abc import Awaitable, Callable
from dataclasses import dataclass

from tests.faults.evidence import SETTINGS, End
from tests.faults.moments import BASELINE, CHECKING, OF_A_TEST, OF_SETTINGS, WHEN_TOUCHED, WHEN_WRITTEN, Moment
from tests.faults.pair import Pair
from tests.faults.tool import CLOCK_STEP
from tests.faults.wire import Spoiling, Write, write_as_master
from tests.system.plant import LOOP

FOR_GOOD_S = 60.0
OP_ADDRESS, HOLDER_REQUEST_ADDRESS = 4, 30
FOREIGN_TOKEN = 77

Strike = Callable[[Pair, random.Random], Awaitable[None]]


@dataclass(frozen=True, slots=True)
class Fault:
    """One kind of fault.

    ``needs`` names what the machine must permit (``network``, ``small disk``); ``restarts`` that the tool is started
    again afterwards; ``has_guard`` is false where the PLC offers no guard, so that its mercy can't help.
    """

    name: str
    strike: Strike
    moments: tuple[Moment, ...]
    ends: frozenset[End]
    needs: str | None = None
    restarts: bool = False
    has_guard: bool = True


def _for_a_while(rng: random.Random, short_s: float, long_s: float, *, may_last: bool = True) -> float:
    """Seconds: often short, sometimes long, and where it may, for good."""
    return rng.choice((rng.uniform(0.05, short_s), rng.uniform(short_s, long_s), FOR_GOOD_S if may_last else long_s))


async def _lasts(pair: Pair, seconds: float) -> None:
    """Wait so long, or until the tool has ended."""
    assert pair.tool is not None
    ended = asyncio.ensure_future(pair.tool.ended())
    await asyncio.wait({ended}, timeout=seconds)
    ended.cancel()


async def kill_tool(pair: Pair, _: random.Random) -> None:
    pair.signal(signal.SIGKILL)


async def kill_tool_and_step_clock(pair: Pair, rng: random.Random) -> None:
    pair.signal(signal.SIGKILL)
    await step_clock(pair, rng)


async def stop_tool(pair: Pair, rng: random.Random) -> None:
    pair.signal(signal.SIGSTOP)
    await _lasts(pair, _for_a_while(rng, 0.4, 2.5, may_last=False))
    pair.signal(signal.SIGCONT)


async def kill_plc(pair: Pair, _: random.Random) -> None:
    await pair.kill_plant()


async def freeze_plc(pair: Pair, rng: random.Random) -> None:
    pair.plant.freeze()
    await _lasts(pair, _for_a_while(rng, 0.4, 2.0))
    pair.plant.thaw()


async def pull_cable(pair: Pair, rng: random.Random) -> None:
    pair.pull_cable(is_pulled=True)
    await _lasts(pair, _for_a_while(rng, 0.4, 2.0))
    pair.pull_cable(is_pulled=False)


async def stop_plc(pair: Pair, rng: random.Random) -> None:
    await pair.press("fault plc-stop")
    await _lasts(pair, _for_a_while(rng, 0.3, 2.0))
    await pair.press("fault plc-run")


async def restart_plc_warm(pair: Pair, _: random.Random) -> None:
    await pair.press("fault restart")


async def restart_plc_cold(pair: Pair, _: random.Random) -> None:
    engineered = {name: pair.seen[0][1][name] for name in SETTINGS}  # as the plant was before anybody changed it
    now = await pair.look()
    has_changed = any(now[name] != number for name, number in engineered.items())
    await pair.press("fault restart cold", **(engineered if has_changed else {}))


def _spoil(pair: Pair, spoiling: Spoiling) -> None:
    pair.wire.spoiling = spoiling


async def delay_answers(pair: Pair, rng: random.Random) -> None:
    _spoil(pair, Spoiling(answers_left=-1, answer_delay_s=rng.choice((0.03, 0.15, 0.3, 0.6))))
    await _lasts(pair, rng.choice((0.5, 2.0, 4.0)))
    pair.wire.heal()


async def reorder_answers(pair: Pair, rng: random.Random) -> None:
    _spoil(pair, Spoiling(answers_left=rng.choice((1, 2, 4)), is_reordered=True))


async def halve_answers(pair: Pair, rng: random.Random) -> None:
    _spoil(pair, Spoiling(answers_left=rng.choice((1, 2, -1)), garble=lambda answer: answer[: len(answer) // 2]))


async def garble_answers(pair: Pair, rng: random.Random) -> None:
    def noise(answer: bytes) -> bytes:
        return rng.randbytes(len(answer))

    def other_body(answer: bytes) -> bytes:
        return answer[:8] + rng.randbytes(len(answer) - 8)

    def other_number(answer: bytes) -> bytes:
        return rng.randbytes(2) + answer[2:]

    def twice(answer: bytes) -> bytes:
        return answer + answer

    garble = rng.choice((noise, other_number, twice, other_body))
    is_believable = garble is other_body  # then what is read is wrong, and only the values can tell
    _spoil(pair, Spoiling(answers_left=1 if is_believable else rng.choice((1, 3, -1)), garble=garble))


async def answer_exceptions(pair: Pair, rng: random.Random) -> None:
    _spoil(pair, Spoiling(answers_left=rng.choice((1, 3, -1)), refuse=rng.choice((2, 4, 6))))


async def write_late(pair: Pair, rng: random.Random) -> None:
    """A write that a gateway held back reaches the PLC when the guard has long given the loop back."""

    def is_output(write: Write) -> bool:
        return "op_request" in write.numbers

    _spoil(pair, Spoiling(hold_write=is_output))
    await _lasts(pair, 0.2)
    await pair.press(f"stop {LOOP}") if rng.random() < 0.5 else pair.signal(signal.SIGKILL)
    await pair.plant.until(lambda state: state["guard_state"] != "armed")
    await asyncio.sleep(rng.uniform(0.0, 0.3))
    await pair.wire.send_held()


async def second_master_moves(pair: Pair, rng: random.Random) -> None:
    op_pct = rng.choice((20.0, 33.0, 70.0))
    await write_as_master(pair.plant.port, OP_ADDRESS, struct.unpack(">HH", struct.pack(">f", op_pct)))
    state = await pair.look()
    if state["mode"] == "MAN" and state["op"] == op_pct:
        pair.taken |= {"op": op_pct, "mode": "MAN"}


async def second_master_asks(pair: Pair, rng: random.Random) -> None:
    for _ in range(rng.choice((1, 20))):
        await write_as_master(pair.plant.port, HOLDER_REQUEST_ADDRESS, (0, FOREIGN_TOKEN))
        await _lasts(pair, 0.02)
        if (await pair.look())["holder"] == FOREIGN_TOKEN:  # the guard was free just then, and is theirs now
            pair.taken["holder"] = FOREIGN_TOKEN


async def change_mode(pair: Pair, _: random.Random) -> None:
    state = await pair.look()
    mode = "AUTO" if state["mode"] == "MAN" else "MAN"
    await pair.press(f"mode {LOOP} {mode}", mode=mode)


async def change_setpoint(pair: Pair, _: random.Random) -> None:
    await pair.press(f"sp {LOOP} 50.5", sp=50.5)


async def move_output(pair: Pair, rng: random.Random) -> None:
    op_pct = rng.choice((20.0, 33.0, 70.0))
    if not await pair.press(f"op {LOOP} {op_pct}", op=op_pct, mode="MAN"):
        await change_setpoint(pair, rng)


async def press_stop(pair: Pair, _: random.Random) -> None:
    await pair.press(f"stop {LOOP}")


async def change_a_setting(pair: Pair, _: random.Random) -> None:
    await pair.press(f"settings {LOOP} integral=3.5", integral=3.5)


async def fill_disk(pair: Pair, _: random.Random) -> None:
    pair.fill_disk()


async def fill_disk_and_kill_plc(pair: Pair, _: random.Random) -> None:
    """Neither can the loop be given back, nor can it be written down."""
    pair.fill_disk()
    await pair.kill_plant()


async def lock_journal(pair: Pair, _: random.Random) -> None:
    """From now on no file of the tool can grow any more, as on a disk that has gone read-only."""
    assert pair.tool is not None
    journals = [file.stat() for file in (pair.data_dir / "journals").glob("*.jsonl")]
    newest = max(journals, key=lambda file: file.st_mtime_ns, default=None)
    size_bytes = 0 if newest is None else newest.st_size
    resource.prlimit(pair.tool.pid, resource.RLIMIT_FSIZE, (size_bytes, resource.RLIM_INFINITY))


async def step_clock(pair: Pair, rng: random.Random) -> None:
    hours = rng.choice((-30.0, -2.0, 2.0, 30.0))
    (pair.folder / CLOCK_STEP).write_text(f"{3600.0 * hours}", "ascii")


GIVEN_BACK = frozenset({End.RESTORED})
OR_STRANDED = frozenset({End.RESTORED, End.STRANDED})
OR_TAKEN = frozenset({End.RESTORED, End.RELEASED})
ANY_TOLD = frozenset({End.RESTORED, End.RELEASED, End.STRANDED})
EVERYWHERE = (*OF_A_TEST, *OF_SETTINGS)

FAULTS: tuple[Fault, ...] = (
    Fault("tool killed, restarted", kill_tool, OF_A_TEST, GIVEN_BACK, restarts=True),
    Fault("tool killed, restarted", kill_tool, OF_SETTINGS, OR_STRANDED, restarts=True),
    Fault("tool killed, restarted, no guard", kill_tool, OF_A_TEST, GIVEN_BACK, restarts=True, has_guard=False),
    Fault("tool stopped for a while", stop_tool, EVERYWHERE, GIVEN_BACK),
    Fault("tool stopped for a while, no guard", stop_tool, OF_A_TEST, GIVEN_BACK, has_guard=False),
    Fault("PLC killed", kill_plc, EVERYWHERE, OR_STRANDED),  # as found where nothing had been written yet
    Fault("PLC frozen", freeze_plc, (CHECKING, *WHEN_TOUCHED[1:]), GIVEN_BACK),
    # The guard holds back a late output, but a request for manual that still waits in the PLC's socket is carried out.
    Fault("PLC frozen while it is taken over", freeze_plc, (BASELINE,), OR_STRANDED),
    Fault("PLC frozen", freeze_plc, OF_SETTINGS, OR_STRANDED),
    Fault("PLC frozen, no guard", freeze_plc, OF_A_TEST, OR_STRANDED, has_guard=False),
    Fault("cable pulled", pull_cable, OF_A_TEST, GIVEN_BACK, needs="network"),
    Fault("cable pulled", pull_cable, OF_SETTINGS, OR_STRANDED, needs="network"),
    Fault("PLC in STOP", stop_plc, OF_A_TEST, GIVEN_BACK),
    Fault("PLC in STOP", stop_plc, OF_SETTINGS, OR_STRANDED),
    Fault("PLC restarted warm", restart_plc_warm, EVERYWHERE, OR_STRANDED),
    Fault("PLC restarted cold", restart_plc_cold, EVERYWHERE, OR_STRANDED),
    Fault("answers delayed", delay_answers, OF_A_TEST, GIVEN_BACK),
    Fault("answers delayed", delay_answers, OF_SETTINGS, OR_STRANDED),
    Fault("answers reordered", reorder_answers, EVERYWHERE, GIVEN_BACK),
    Fault("answers halved", halve_answers, OF_A_TEST, GIVEN_BACK),
    Fault("answers halved", halve_answers, OF_SETTINGS, OR_STRANDED),
    Fault("answers garbled", garble_answers, EVERYWHERE, ANY_TOLD),
    Fault("writes refused", answer_exceptions, OF_A_TEST, OR_STRANDED),
    Fault("writes refused", answer_exceptions, OF_SETTINGS, OR_STRANDED),
    Fault("write arrives late", write_late, WHEN_TOUCHED[1:3], GIVEN_BACK),
    Fault("second master moves the output", second_master_moves, (*WHEN_TOUCHED, *WHEN_WRITTEN), ANY_TOLD),
    Fault("second master asks for the loop", second_master_asks, WHEN_TOUCHED, OR_TAKEN),
    Fault("operator changes the mode", change_mode, EVERYWHERE, ANY_TOLD),
    Fault("operator changes the setpoint", change_setpoint, EVERYWHERE, ANY_TOLD),
    Fault("operator moves the output", move_output, (*WHEN_TOUCHED, *WHEN_WRITTEN), ANY_TOLD),
    Fault("operator moves the output, no guard", move_output, WHEN_TOUCHED, ANY_TOLD, has_guard=False),
    Fault("operator presses stop", press_stop, EVERYWHERE, GIVEN_BACK),
    Fault("operator changes a setting", change_a_setting, OF_SETTINGS, ANY_TOLD),
    Fault("disk full", fill_disk, EVERYWHERE, GIVEN_BACK, needs="small disk"),
    Fault("disk full and PLC killed", fill_disk_and_kill_plc, EVERYWHERE, OR_STRANDED, needs="small disk"),
    Fault("journal can't be written", lock_journal, EVERYWHERE, GIVEN_BACK),
    Fault("wall clock stepped", step_clock, EVERYWHERE, GIVEN_BACK),
    Fault(
        "wall clock stepped, tool killed, no guard", kill_tool_and_step_clock, OF_A_TEST, OR_STRANDED, None, True, False
    ),
)
