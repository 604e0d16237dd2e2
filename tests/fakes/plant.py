"""The soft plant's own PLC behind fake links, in virtual time: a whole test in milliseconds.

Nothing runs by itself.  Whenever a request reaches the controller, the PLC makes up the scans that were due since the
last one, on its own grid.  Any number of links may be open to one plant, one after the other or at once.
"""

import asyncio
from collections.abc import Callable, Mapping
from dataclasses import replace

from autotune.config.types import LoopConfig
from autotune.field.link import RawValue
from autotune.loop.mode import LoopMode
from simulator.block import BlockSpec, Mode, Settings
from simulator.guard import GuardLimits
from simulator.loop import LoopSpec
from simulator.plc import Plc
from simulator.process import ProcessSpec
from simulator.transmitter import TransmitterSpec
from simulator.valve import ValveSpec
from tests.fakes.link import FakeLink
from tests.field.loops import GUARDED, PLAIN

SCAN_S = 0.05
"""The PLC's scan."""

SPEC = LoopSpec(
    name="TIC-204",
    service="juice outlet temperature",
    unit="pasteuriser",
    pv_low_eu=0.0,
    pv_high_eu=150.0,
    pv_unit="degC",
    sp_eu=75.0,
    op_pct=45.0,
    mode=Mode.AUTO,
    process=ProcessSpec(gain=1.5, lags_s=(0.6, 0.05), dead_time_s=0.22),
    valve=ValveSpec(),
    transmitter=TransmitterSpec(noise_pct=0.02),
    block=BlockSpec(scan_s=SCAN_S),
    settings=Settings(0.375, 1.5, 0.0),
    guard=GuardLimits(op_low_pct=10.0, op_high_pct=90.0, pv_low_eu=30.0, pv_high_eu=120.0, timeout_s=1.0),
    watch=(),
    int_scales=(),
    read_only=(),
    is_op_refused_in_auto=False,
    cascade_master=None,
    input_from=None,
)
"""TIC-204 with bench-sized dynamics: its ultimate period is about a second."""


def _bench_sized(loop: LoopConfig) -> LoopConfig:
    return replace(
        loop,
        controller=replace(loop.controller, plc_scan_s=SCAN_S, io_time_s=0.0),
        limits=replace(loop.limits, safe_without_view_s=0.25, switch_within_s=5.0, test_within_s=30.0, dead_time_s=0.5),
        relay=replace(loop.relay, step_up_pct=6.0, step_down_pct=5.0, hysteresis_at_least_pct=0.2),
        convergence=replace(loop.convergence, cycles_to_agree=2, agreement_pct=10.0),
        scan_s=0.1,
        look_around_s=0.5,
        baseline_s=1.0,
        baseline_drift_at_most_pct_per_s=1.0,
        hand_back_within_s=2.0,
        recover_within_s=20.0,
        digest="a" * 64,
        block_digest="b" * 64,
    )


WITH_GUARD = replace(_bench_sized(GUARDED), guard_timeout_s=1.0)
"""The loop with the PLC's guard."""

WITHOUT_GUARD = _bench_sized(PLAIN)
"""The same loop without it."""


class PlantInMemory:
    """One loop in one PLC.  ``links`` are those that were opened, in order; every request on any of them is logged.

    ``when`` is called with the time (s) at each scan, before it, to let a person or the plant interfere.
    """

    def __init__(self, spec: LoopSpec = SPEC, *, latency_s: float = 0.01, seed: int = 1) -> None:
        self.plc = Plc([spec], scan_s=SCAN_S, seed=seed)
        self.loop = self.plc.loops[spec.name]
        self.latency_s = latency_s
        self.links: list[FakeLink] = []
        self.when: Callable[[float], None] = lambda _t_s: None
        self._due = 1
        self.run_to(SCAN_S)  # a cold start takes a button that is down already for no press
        self.loop.press_enable()
        self.run_to(3 * SCAN_S)

    @property
    def mode(self) -> LoopMode:
        """The block's mode."""
        return LoopMode[self.loop.block.mode.name]

    @property
    def op_pct(self) -> float:
        """The block's output."""
        return self.loop.block.op_pct

    def open_link(self, loop: LoopConfig) -> FakeLink:
        """A link to this plant, not yet connected."""
        link = FakeLink(loop)
        link.latency_s = self.latency_s
        names = tuple(name for name, _ in loop.tags)

        def refresh() -> None:
            self.run_to(asyncio.get_running_loop().time())
            link.image.update(self._image(names))

        def take(written: Mapping[str, RawValue]) -> None:
            self.run_to(asyncio.get_running_loop().time())
            for name, raw in written.items():
                self.loop.write(name, raw)

        link.on_read, link.on_write = refresh, take
        self.links.append(link)
        return link

    def run_to(self, t_s: float) -> None:
        """Make up the scans that are due until ``t_s``."""
        while self._due * SCAN_S <= t_s:
            self.when(self._due * SCAN_S)
            self.plc.scan(round(self._due * SCAN_S, 3))
            self._due += 1

    def _image(self, names: tuple[str, ...]) -> dict[str, RawValue]:
        readings = self.loop.readings()
        readings |= {"plc_clock_ms": self.plc.clock_ms, "boot_count": self.plc.boot_count}
        return {name: readings[name] for name in names if name in readings}
