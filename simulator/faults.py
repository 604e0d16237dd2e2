"""Faults that can be switched while the plant runs: on the wire, in the PLC and in the field.

Each entry of ``FAULTS`` is one fault with its usage; the panel's ``fault`` and ``help`` come from it.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from enum import Enum

from simulator.loop import Loop
from simulator.plc import Plc
from simulator.transmitter import TransmitterFault
from simulator.valve import ValveFault

ENDLESS = -1
"""As a count: until the faults are cleared."""


class BadFault(ValueError):
    """A fault that doesn't exist or can't be read; the text says what to write instead."""


class Quality(Enum):
    """What the OPC UA server can be made to say of a tag."""

    GOOD = "good"
    BAD = "bad"
    UNCERTAIN = "uncertain"
    FORCED = "forced"
    CLAMPED = "clamped"


@dataclass(slots=True)
class WireFaults:
    """What the servers do to requests and answers.  Counts go down with each use; ``ENDLESS`` doesn't.

    A dropped request is never executed; a dropped or half answer was.  ``request_delay_s`` holds requests
    back before they are executed, ``answer_delay_s`` holds answers back afterwards, both in order.

    Over OPC UA delays and drops strike reads and writes; after a dropped one its connection is silent, as behind
    a dead cable, until the client leaves it.  Half answers, exceptions and refused addresses are Modbus only.
    What is named by ``LOOP.TAG``, and all below it, is OPC UA only.
    """

    drop_requests: int = 0
    drop_answers: int = 0
    half_answers: int = 0
    request_delay_s: float = 0.0
    answer_delay_s: float = 0.0
    exceptions: int = 0
    exception_code: int = 4
    exception_function: int | None = None
    refused_addresses: set[int] = field(default_factory=set)
    close_requests: int = 0
    """How often all connections were asked to close; the servers follow this number."""
    tag_qualities: dict[str, Quality] = field(default_factory=dict)
    refused_tags: set[str] = field(default_factory=set)
    mistyped_tags: set[str] = field(default_factory=set)
    are_stamps_frozen: bool = False
    are_stamped_writes_refused: bool = False
    channel_lifetime_s: float = 0.0
    """Longest life of a secure channel's keys that is granted; 0 grants what the client asks for."""
    session_closings: int = 0
    """How often all sessions were asked to close; the server follows this number."""
    server_restarts: int = 0
    """How often the server was asked to restart; it follows this number."""
    restart_pause_s: float = 1.0

    def spend(self, name: str) -> bool:
        """Whether the fault ``name`` strikes now; counts it."""
        left: int = getattr(self, name)
        if left > 0:
            setattr(self, name, left - 1)
        return left != 0

    def clear(self) -> None:
        """Back to a healthy wire."""
        healthy = WireFaults(
            close_requests=self.close_requests,
            session_closings=self.session_closings,
            server_restarts=self.server_restarts,
        )
        for name in self.__slots__:
            setattr(self, name, getattr(healthy, name))


@dataclass(frozen=True, slots=True)
class Fault:
    """How a fault is written after ``fault NAME``, what it does, and the code that does it."""

    usage: str
    meaning: str
    strike: Callable[[WireFaults, Plc, Sequence[str]], None]


def strike(wire: WireFaults, plc: Plc, words: Sequence[str]) -> None:
    """Switch on the fault given as ``NAME ARGUMENTS``.  Raises ``BadFault`` with the usage."""
    if not words or words[0] not in FAULTS:
        raise BadFault(f"no such fault; known: {', '.join(FAULTS)}")
    fault = FAULTS[words[0]]
    try:
        fault.strike(wire, plc, words[1:])
    except (IndexError, KeyError, ValueError) as reason:
        usage = f"fault {words[0]} {fault.usage}".rstrip()
        detail = _complaint(reason)
        raise BadFault(f"{detail}; write: {usage}") from reason


def clear_all(wire: WireFaults, plc: Plc) -> None:
    """A healthy wire, a PLC in run and healthy field devices; disturbances of the process stay."""
    wire.clear()
    plc.is_in_stop = False
    for loop in plc.loops.values():
        loop.transmitter.fault = TransmitterFault.NONE
        loop.valve.fault = ValveFault.NONE


def _complaint(reason: Exception) -> str:
    if isinstance(reason, KeyError):
        return f"no loop {reason}"
    return "something is missing" if isinstance(reason, IndexError) else str(reason)


def _counted(name: str) -> Callable[[WireFaults, Plc, Sequence[str]], None]:
    def set_count(wire: WireFaults, _plc: Plc, words: Sequence[str]) -> None:
        setattr(wire, name, int(words[0]) if words else ENDLESS)

    return set_count


def _delay(name: str) -> Callable[[WireFaults, Plc, Sequence[str]], None]:
    def set_delay(wire: WireFaults, _plc: Plc, words: Sequence[str]) -> None:
        delay_s = float(words[0])
        if not 0.0 <= delay_s <= 3600.0:
            raise ValueError("a delay lies between 0 and 3600 s")
        setattr(wire, name, delay_s)

    return set_delay


def _answer_exceptions(wire: WireFaults, _plc: Plc, words: Sequence[str]) -> None:
    code = int(words[0])
    if not 1 <= code <= 255:
        raise ValueError("an exception code lies between 1 and 255")
    wire.exception_code = code
    wire.exception_function = int(words[1]) if len(words) > 1 else None
    wire.exceptions = ENDLESS


def _refuse_writes(wire: WireFaults, _plc: Plc, words: Sequence[str]) -> None:
    wire.refused_addresses.add(int(words[0]))


def _close_connections(wire: WireFaults, _plc: Plc, _words: Sequence[str]) -> None:
    wire.close_requests += 1


def _stop_plc(_wire: WireFaults, plc: Plc, _words: Sequence[str]) -> None:
    plc.is_in_stop = True


def _run_plc(_wire: WireFaults, plc: Plc, _words: Sequence[str]) -> None:
    plc.is_in_stop = False


def _restart_plc(wire: WireFaults, plc: Plc, words: Sequence[str]) -> None:
    if words and words[0] not in ("warm", "cold"):
        raise ValueError(f"no start is called {words[0]}")
    plc.restart(is_cold=words[:1] == ["cold"])
    wire.close_requests += 1


def _fail_transmitter(_wire: WireFaults, plc: Plc, words: Sequence[str]) -> None:
    plc.loops[words[0]].transmitter.fault = TransmitterFault(words[1])


def _fail_valve(_wire: WireFaults, plc: Plc, words: Sequence[str]) -> None:
    plc.loops[words[0]].valve.fault = ValveFault(words[1])


def _step_load(_wire: WireFaults, plc: Plc, words: Sequence[str]) -> None:
    loop, step_pct = plc.loops[words[0]], float(words[1])
    loop.process.add_load_step(_now_s(plc, loop), step_pct)


def _swing_load(_wire: WireFaults, plc: Plc, words: Sequence[str]) -> None:
    loop, amplitude_pct, period_s = plc.loops[words[0]], float(words[1]), float(words[2])
    if not period_s > 0.0:
        raise ValueError("a period must be positive")
    loop.process.set_load_sine(_now_s(plc, loop), amplitude_pct, period_s)


def _drift_output(_wire: WireFaults, plc: Plc, words: Sequence[str]) -> None:
    plc.loops[words[0]].process.set_output_drift(float(words[1]))


def _tag(plc: Plc, words: Sequence[str]) -> str:
    loop, tag = words[0], words[1]
    if tag not in plc.loops[loop].readings() and tag not in ("plc_clock_ms", "boot_count"):
        raise ValueError(f"{loop} has no tag {tag}")
    return f"{loop}.{tag}"


def _colour_tag(wire: WireFaults, plc: Plc, words: Sequence[str]) -> None:
    wire.tag_qualities[_tag(plc, words)] = Quality(words[2])


def _refuse_tag(wire: WireFaults, plc: Plc, words: Sequence[str]) -> None:
    wire.refused_tags.add(_tag(plc, words))


def _mistype_tag(wire: WireFaults, plc: Plc, words: Sequence[str]) -> None:
    wire.mistyped_tags.add(_tag(plc, words))


def _freeze_stamps(wire: WireFaults, _plc: Plc, _words: Sequence[str]) -> None:
    wire.are_stamps_frozen = True


def _refuse_stamped_writes(wire: WireFaults, _plc: Plc, _words: Sequence[str]) -> None:
    wire.are_stamped_writes_refused = True


def _close_sessions(wire: WireFaults, _plc: Plc, _words: Sequence[str]) -> None:
    wire.session_closings += 1


def _restart_server(wire: WireFaults, _plc: Plc, words: Sequence[str]) -> None:
    if words:
        _delay("restart_pause_s")(wire, _plc, words)
    wire.server_restarts += 1


def _now_s(plc: Plc, loop: Loop) -> float:
    return max(plc.t_s, loop.process.t_s)


FAULTS: dict[str, Fault] = {
    "drop-requests": Fault("[COUNT]", "requests vanish before they are executed", _counted("drop_requests")),
    "drop-answers": Fault("[COUNT]", "requests are executed and their answers vanish", _counted("drop_answers")),
    "half-frame": Fault("[COUNT]", "only the first half of an answer is sent", _counted("half_answers")),
    "delay-requests": Fault("SECONDS", "requests are executed late", _delay("request_delay_s")),
    "delay-answers": Fault("SECONDS", "answers are sent late", _delay("answer_delay_s")),
    "exception": Fault("CODE [FUNCTION]", "requests are answered by an exception", _answer_exceptions),
    "refuse-writes": Fault("ADDRESS", "writes that touch this register are refused (exception 2)", _refuse_writes),
    "close-connections": Fault("", "all connections are reset, once", _close_connections),
    "plc-stop": Fault("", "the PLC goes to stop: no scans, registers frozen, socket alive", _stop_plc),
    "plc-run": Fault("", "the PLC goes to run", _run_plc),
    "restart": Fault(
        "[warm|cold]",
        "the PLC restarts, once: connections reset, clock from 0, boot_count + 1; cold: blocks begin as engineered",
        _restart_plc,
    ),
    "transmitter": Fault("LOOP none|stuck|nan|high|low", "a transmitter fails", _fail_transmitter),
    "valve": Fault("LOOP none|stuck", "a valve sticks", _fail_valve),
    "load-step": Fault("LOOP PERCENT", "a step is added to the process input, for good", _step_load),
    "load-sine": Fault("LOOP PERCENT PERIOD_S", "a sine is added to the process input", _swing_load),
    "quality": Fault("LOOP TAG good|bad|uncertain|forced|clamped", "OPC UA: a tag's status", _colour_tag),
    "refuse-tag": Fault("LOOP TAG", "OPC UA: writes of this tag are refused (BadNotWritable)", _refuse_tag),
    "wrong-type": Fault("LOOP TAG", "OPC UA: the tag's value is of another type than declared", _mistype_tag),
    "freeze-stamps": Fault("", "OPC UA: source timestamps stand still while values go on", _freeze_stamps),
    "refuse-stamped-writes": Fault("", "OPC UA: writes with a timestamp are refused", _refuse_stamped_writes),
    "channel-lifetime": Fault(
        "SECONDS", "OPC UA: new channels' keys live so long at most", _delay("channel_lifetime_s")
    ),
    "close-sessions": Fault("", "OPC UA: all sessions are closed, once; connections stay", _close_sessions),
    "restart-server": Fault("[SECONDS]", "OPC UA: the server goes away for so long, once", _restart_server),
    "drift": Fault("LOOP PERCENT_PER_S", "the process output drifts at this slope", _drift_output),
}
