"""The plant's own panel: one command per line, one answer per command.

A person (or the process that started the plant) does here what a remote client may not: enable and
stop, the watch entries, the faults.  ``COMMANDS`` is the list; ``help`` prints it.
"""

import shlex
from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass, replace
from math import isfinite

from simulator.block import Mode
from simulator.faults import FAULTS, BadFault, WireFaults, clear_all, strike
from simulator.loop import SETTINGS, Loop, WriteRefused
from simulator.plc import Plc

Answer = dict[str, object]


class BadCommand(ValueError):
    """A command that can't be carried out; the text says why."""


@dataclass(frozen=True, slots=True)
class Command:
    """How a command is written after its name, what it does, and the code that does it."""

    usage: str
    meaning: str
    carry_out: Callable[["Panel", Sequence[str]], Answer]


class Panel:
    """The panel of one plant."""

    def __init__(self, plc: Plc, wire: WireFaults) -> None:
        self.plc = plc
        self.wire = wire
        self.is_left = False
        """Whether ``quit`` was given."""

    def answer(self, line: str) -> Answer:
        """Carry out one line.  The answer always has ``ok``, and ``error`` when that is false."""
        try:
            words = shlex.split(line)
            if not words or words[0] not in COMMANDS:
                raise BadCommand(f"no such command; known: {', '.join(COMMANDS)}")
            return {"ok": True, **COMMANDS[words[0]].carry_out(self, words[1:])}
        except IndexError:
            usage = f"{words[0]} {COMMANDS[words[0]].usage}"
            return {"ok": False, "error": f"something is missing; write: {usage}"}
        except (BadFault, WriteRefused, ValueError) as reason:
            return {"ok": False, "error": str(reason)}

    def loop(self, name: str) -> Loop:
        """The loop called ``name``.  Raises ``BadCommand`` with the names there are."""
        if name not in self.plc.loops:
            raise BadCommand(f"no loop {name}; known: {', '.join(self.plc.loops)}")
        return self.plc.loops[name]

    def enable(self, words: Sequence[str]) -> Answer:
        """Press the enable button."""
        self.loop(words[0]).press_enable()
        return {}

    def stop(self, words: Sequence[str]) -> Answer:
        """Press the stop button; it stays in."""
        self.loop(words[0]).is_stop_pressed = True
        return {}

    def unstop(self, words: Sequence[str]) -> Answer:
        """Pull the stop button out again."""
        self.loop(words[0]).is_stop_pressed = False
        return {}

    def mode(self, words: Sequence[str]) -> Answer:
        """Change the mode by its name."""
        loop, name = self.loop(words[0]), words[1].upper()
        if name not in Mode.__members__:
            raise BadCommand(f"no mode {words[1]}; known: {', '.join(Mode.__members__)}")
        if Mode[name] is Mode.CAS and not loop.has_cascade_master:
            raise BadCommand(f"{words[0]} has no cascade master")
        loop.block.mode = Mode[name]
        return {"mode": name}

    def sp(self, words: Sequence[str]) -> Answer:
        """Change the setpoint (engineering units)."""
        loop, sp_eu = self.loop(words[0]), _number(words[1])
        if not loop.spec.pv_low_eu <= sp_eu <= loop.spec.pv_high_eu:
            raise BadCommand(f"sp must lie between {loop.spec.pv_low_eu:g} and {loop.spec.pv_high_eu:g}")
        loop.block.sp_pct = loop.spec.to_pct(sp_eu)
        return {"sp_eu": loop.sp_eu}

    def op(self, words: Sequence[str]) -> Answer:
        """Move the output in manual (percent)."""
        loop, op_pct = self.loop(words[0]), _number(words[1])
        if loop.block.mode is not Mode.MAN:
            raise BadCommand(f"{words[0]} is in {loop.block.mode.name}: put it in MAN first")
        loop.block.hold(op_pct)
        return {"op_pct": loop.block.op_pct}

    def settings(self, words: Sequence[str]) -> Answer:
        """Change settings, in the block's own units."""
        loop = self.loop(words[0])
        changes = {}
        for word in words[1:]:
            name, _, number = word.partition("=")
            if name not in SETTINGS:
                raise BadCommand(f"no setting {name}; write gain=.., integral=.., derivative=..")
            changes[name] = _number(number)
        loop.block.settings = replace(loop.block.settings, **changes)
        return asdict(loop.block.settings)

    def watch(self, words: Sequence[str]) -> Answer:
        """Set a watch entry."""
        loop, name, number = self.loop(words[0]), words[1], int(words[2])
        if name not in loop.watch:
            raise BadCommand(f"{words[0]} has no watch entry {name}; known: {', '.join(loop.watch) or 'none'}")
        if not 0 <= number <= 65535:
            raise BadCommand("a watch entry lies between 0 and 65535")
        loop.watch[name] = number
        return {name: number}

    def fault(self, words: Sequence[str]) -> Answer:
        """Switch a fault on."""
        strike(self.wire, self.plc, words)
        return {}

    def clear_faults(self, _words: Sequence[str]) -> Answer:
        """Switch all faults off."""
        clear_all(self.wire, self.plc)
        return {}

    def state(self, words: Sequence[str]) -> Answer:
        """What one loop, or the whole plant, looks like now."""
        if words:
            return self._loop_state(self.loop(words[0]))
        return {
            "t_s": self.plc.t_s,
            "plc_clock_ms": self.plc.clock_ms,
            "boot_count": self.plc.boot_count,
            "scan_count": self.plc.scan_count,
            "skipped_scans": self.plc.skipped_scans,
            "is_in_stop": self.plc.is_in_stop,
            "loops": {name: self._loop_state(loop) for name, loop in self.plc.loops.items()},
        }

    def quit(self, _words: Sequence[str]) -> Answer:
        """Leave; the plant ends."""
        self.is_left = True
        return {}

    def help(self, _words: Sequence[str]) -> Answer:
        """All commands and faults."""
        return {
            "commands": {f"{name} {command.usage}".rstrip(): command.meaning for name, command in COMMANDS.items()},
            "faults": {f"fault {name} {fault.usage}".rstrip(): fault.meaning for name, fault in FAULTS.items()},
        }

    def _loop_state(self, loop: Loop) -> Answer:
        readings = {name: reading if isfinite(reading) else None for name, reading in loop.readings().items()}
        return {
            **readings,
            "mode": loop.block.mode.name,
            "guard_state": loop.guard.state.name.lower().replace("_", " "),
            "pv_pct": loop.transmitter.reading_pct if isfinite(loop.transmitter.reading_pct) else None,
            "true_pv_pct": loop.process.output_pct,
            "valve_pct": loop.valve.position_pct,
            "transmitter": loop.transmitter.fault.value,
            "valve": loop.valve.fault.value,
        }


def _number(word: str) -> float:
    try:
        number = float(word)
    except ValueError:
        raise BadCommand(f"{word!r} is no number") from None
    if not isfinite(number):
        raise BadCommand(f"{word!r} is no finite number")
    return number


COMMANDS: dict[str, Command] = {
    "enable": Command("LOOP", "press enable: a permission for a limited time", Panel.enable),
    "stop": Command("LOOP", "press stop: the guard gives the loop back at once", Panel.stop),
    "unstop": Command("LOOP", "pull stop out again", Panel.unstop),
    "mode": Command("LOOP MAN|AUTO|CAS", "change the mode", Panel.mode),
    "sp": Command("LOOP EU", "change the setpoint", Panel.sp),
    "op": Command("LOOP PERCENT", "move the output in manual", Panel.op),
    "settings": Command("LOOP [gain=N] [integral=N] [derivative=N]", "change settings", Panel.settings),
    "watch": Command("LOOP NAME NUMBER", "set a watch entry", Panel.watch),
    "fault": Command("NAME [ARGUMENTS]", "switch a fault on", Panel.fault),
    "clear-faults": Command("", "switch all faults off", Panel.clear_faults),
    "state": Command("[LOOP]", "what the loop or the plant looks like now", Panel.state),
    "help": Command("", "this list", Panel.help),
    "quit": Command("", "end the plant", Panel.quit),
}
