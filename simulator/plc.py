"""The PLC: scans at absolute deadlines, samples, runs blocks and guards, and drives the outputs.

A scan happens on a tick of the PLC's millisecond clock, so that ``plc_clock_ms`` is exactly when PV
was sampled and when an output took effect.  A scan that comes too late is skipped and counted.
"""

import asyncio
from collections.abc import Awaitable, Callable, Sequence

from simulator.block import Mode
from simulator.guard import CLOCK_MODULUS
from simulator.loop import Loop, LoopSpec


class Plc:
    """All loops of one plant.  ``scan`` is the whole logic; ``run`` only keeps time.

    Loops stand in the order given: a cascade master and a loop that feeds another one come first.
    """

    def __init__(self, specs: Sequence[LoopSpec], *, scan_s: float, seed: int, clock_start_ms: int = 0) -> None:
        self.scan_s = scan_s
        resting_pv_pct = {spec.name: spec.to_pct(spec.sp_eu) for spec in specs}
        self.loops = {
            spec.name: Loop(
                spec,
                seed=seed + number,
                resting_input_pct=resting_pv_pct[spec.input_from] if spec.input_from else spec.op_pct,
            )
            for number, spec in enumerate(specs)
        }
        self.t_s = 0.0
        self.clock_ms = clock_start_ms
        self.boot_count = 1
        self.is_in_stop = False
        self.scan_count = 0
        self.skipped_scans = 0
        self._clock_offset_ms = clock_start_ms
        self._scans_per_execution = {
            name: max(1, round(loop.spec.block.scan_s / scan_s)) for name, loop in self.loops.items()
        }

    def scan(self, t_s: float) -> None:
        """One scan at ``t_s`` (whole milliseconds from the start of the plant, growing)."""
        self.t_s = t_s
        if self.is_in_stop:
            return
        self.clock_ms = (round(1000.0 * t_s) + self._clock_offset_ms) % CLOCK_MODULUS
        for loop in self.loops.values():
            self._sample(loop)
        for name, loop in self.loops.items():
            if self.scan_count % self._scans_per_execution[name] == 0:
                self._execute(loop)
        for loop in self.loops.values():
            loop.scan_guard(self.clock_ms)
        for loop in self.loops.values():
            self._drive(loop)
        self.scan_count += 1

    def restart(self, *, is_cold: bool = False) -> None:
        """Start again: the clock begins at 0, guards and mailboxes are empty; warm, blocks keep what they held."""
        self.boot_count = self.boot_count % 65535 + 1
        self._clock_offset_ms = -round(1000.0 * self.t_s)
        self.clock_ms = 0
        self.is_in_stop = False
        for loop in self.loops.values():
            loop.restart(is_cold=is_cold)

    async def run(self, after_scan: Callable[[float], Awaitable[None]] | None = None) -> None:
        """Scan at absolute deadlines until cancelled.  ``after_scan`` is told how many seconds ago the scan began."""
        clock = asyncio.get_running_loop().time
        start_s, grid = clock() - self.t_s, round(self.t_s / self.scan_s) + 1
        while True:
            deadline_s = start_s + grid * self.scan_s
            await asyncio.sleep(deadline_s - clock())
            # Down to the tick that has passed; a tenth of a millisecond forgives a timer that fires early.
            tick_s = int(1000.0 * (clock() - start_s) + 0.1) / 1000.0
            self.scan(max(tick_s, self.t_s + 0.001))
            if after_scan is not None:
                await after_scan(clock() - start_s - self.t_s)
            late = int((clock() - deadline_s) / self.scan_s)
            self.skipped_scans += late
            grid += 1 + late

    def _sample(self, loop: Loop) -> None:
        loop.process.advance_to(self.t_s)
        loop.transmitter.read(self.t_s, loop.process.output_pct)

    def _execute(self, loop: Loop) -> None:
        master = self.loops[loop.spec.cascade_master] if loop.spec.cascade_master else None
        if master is not None and loop.block.mode is Mode.CAS:
            loop.block.sp_pct = master.block.op_pct
        loop.block.execute(loop.transmitter.reading_pct)
        if master is not None and loop.block.mode is not Mode.CAS:
            master.block.hold(loop.block.sp_pct)  # so that cascade closes without a bump

    def _drive(self, loop: Loop) -> None:
        position_pct = loop.valve.move(self.t_s, loop.block.op_pct)
        if loop.spec.input_from is not None:
            position_pct = self.loops[loop.spec.input_from].process.output_pct
        if position_pct != loop.fed_pct:
            loop.process.set_input(self.t_s, position_pct)
            loop.fed_pct = position_pct
