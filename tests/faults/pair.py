"""One pair: a plant, the recording wire, and the tool, each run afresh; and what can be done to them."""

import asyncio
import json
import os
import re
import signal
import subprocess
from collections.abc import AsyncIterator, Sequence
from contextlib import asynccontextmanager, suppress
from pathlib import Path
from typing import Any

from tests.faults.evidence import PV_HIGH_EU, PV_LOW_EU, STEP_PCT, State
from tests.faults.nursery import Nursery, Tool
from tests.faults.wire import Wire
from tests.system.bench import BENCH, WITHOUT_GUARD
from tests.system.plant import LOOP, SoftPlant, soft_plant

LOOK_EVERY_S = 0.03
TYPED = f"{LOOP}\nbench permit 7\n"
SMALL_DISK_KIB = 1536

Key = tuple[str, str, object]
"""A key of the bench's file: its table, its name, and what it is to be."""

QUICK: Sequence[Key] = (
    ("controller.bench", "request_timeout_s", 0.4),
    ("controller.bench", "connect_gap_s", 0.05),
    ("loop", "scan_s", 0.05),
    ("loop", "hand_back_within_s", 3.0),
    ("loop", "recover_within_s", 60.0),
    ("loop.baseline", "look_around_s", 0.3),
    ("loop.baseline", "hold_s", 0.6),
    ("loop.limits", "safe_without_view_s", 0.3),
    ("loop.limits", "dead_time_s", 0.25),
    ("loop.limits", "pv_low_eu", PV_LOW_EU),
    ("loop.limits", "pv_high_eu", PV_HIGH_EU),
    ("loop.limits", "step_up_pct", STEP_PCT),
    ("loop.limits", "step_down_pct", STEP_PCT),
)


def write_config(folder: Path, host: str, port: int, keys: Sequence[Key], *, has_guard: bool = True) -> Path:
    """The bench's configuration in ``folder``, with some of its keys set otherwise, for the plant at ``port``."""
    text = BENCH.read_text("utf-8")
    for old, new in () if has_guard else WITHOUT_GUARD:
        assert text.count(old) == 1, f"{old!r} stands {text.count(old)} times in {BENCH.name}"
        text = text.replace(old, new)
    for table, name, setting in (*keys, ("controller.bench", "host", f'"{host}"'), ("controller.bench", "port", port)):
        pattern = rf"(?ms)^(\[+{re.escape(table)}\]+\n(?:(?!^\[).)*?^{name} = )[^\n]*"
        text, count = re.subn(pattern, rf"\g<1>{setting}", text, count=1)
        assert count == 1, f"{BENCH.name} has no {name} in [{table}]"
    folder.mkdir(parents=True, exist_ok=True)
    file = folder / "bench.toml"
    file.write_text(text, "utf-8")
    return file


class Pair:
    """A running plant with the wire before it; ``seen`` is what the panel showed and when (event loop's clock)."""

    def __init__(self, nursery: Nursery, plant: SoftPlant, wire: Wire, config: Path, network: str | None) -> None:
        self.plant = plant
        self.wire = wire
        self.seen: list[tuple[float, State]] = []
        self.taken: dict[str, Any] = {}
        self.tool: Tool | None = None
        self.is_plant_gone = False
        self.seen_last: State | None = None
        self.network = network
        self._nursery = nursery
        self._config = config
        self._runs = 0

    @property
    def folder(self) -> Path:
        """Where configuration, data and the tool's words lie."""
        return self._config.parent

    @property
    def data_dir(self) -> Path:
        """Where the tool keeps journals and sheets."""
        return self.folder / "data"

    async def start(self, act: str, typed: str = TYPED) -> Tool:
        """Start the tool: ``test`` or ``settings``."""
        self._runs += 1
        arguments = [act, str(self._config), LOOP]
        self.tool = await self._nursery.start(arguments, typed, self.folder, f"run-{self._runs}", self.network)
        return self.tool

    def signal(self, number: signal.Signals) -> None:
        """Send a signal to the tool."""
        if self.tool is not None:
            self.tool.signal(number)

    async def press(self, line: str, **taken: Any) -> bool:
        """Somebody at the panel; ``taken`` names what is theirs afterwards.  Whether the panel took it."""
        try:
            await self.plant.press(line)
        except AssertionError:  # an output moves in manual only
            return False
        self.taken |= taken
        return True

    async def look(self) -> State:
        """The loop and the PLC's restart count, as the panel shows them now."""
        plant = await self.plant.press("state")
        state: State = plant["loops"][LOOP] | {"boot_count": plant["boot_count"]}
        self.seen.append((asyncio.get_running_loop().time(), state))
        return state

    async def keep_looking(self) -> None:
        """Look at the panel until the plant is gone or nobody wants to know any more."""
        with suppress(json.JSONDecodeError, ConnectionError):
            while not self.is_plant_gone:
                await self.look()
                await asyncio.sleep(LOOK_EVERY_S)

    async def kill_plant(self) -> None:
        """The PLC is gone for good, and its loop stays as the panel showed it last."""
        self.seen_last = await self.look()
        self.is_plant_gone = True
        await self.plant.kill()

    async def heal(self) -> None:
        """Undo what lasts: everything goes on and answers again."""
        self.signal(signal.SIGCONT)
        self.wire.heal()
        self.pull_cable(is_pulled=False)
        if not self.is_plant_gone:
            self.plant.thaw()
            await self.plant.press("clear-faults")

    def pull_cable(self, *, is_pulled: bool) -> None:
        """Pull the plug between the tool's network and ours, or put it back."""
        if self.network is not None:
            _ip(f"link set {self.network} {'down' if is_pulled else 'up'}")

    def fill_disk(self) -> None:
        """Write to the tool's disk until nothing more fits."""
        with (self.data_dir / "filling").open("wb", buffering=0) as filling, suppress(OSError):
            while True:
                filling.write(b"\0" * 4096)


@asynccontextmanager
async def pair(
    nursery: Nursery, folder: Path, *, has_guard: bool, network: str | None = None, has_small_disk: bool = False
) -> AsyncIterator[Pair]:
    """A fresh plant, wire and configuration in ``folder``; all ends with the block."""
    async with soft_plant() as plant:
        wire = Wire(plant.port)
        host = "127.0.0.1" if network is None else _address(network, 1)
        port = await wire.open(host)
        config = write_config(folder, host, port, QUICK, has_guard=has_guard)
        bench = Pair(nursery, plant, wire, config, network)
        if has_small_disk:
            bench.data_dir.mkdir()
            _run(f"mount -t tmpfs -o size={SMALL_DISK_KIB}k tmpfs {bench.data_dir}")
        looking: asyncio.Task[None] | None = None
        try:
            await plant.press(f"enable {LOOP}")
            await plant.until(lambda state: state["enable"])
            await bench.look()
            looking = asyncio.create_task(bench.keep_looking(), name="looking at the panel")
            yield bench
        finally:
            plant_is_frozen_no_more(bench)
            if looking is not None:
                looking.cancel()
                await asyncio.gather(looking, return_exceptions=True)
            if bench.tool is not None and not bench.tool.is_over:
                bench.tool.signal(signal.SIGKILL)
                await bench.tool.ended()
            await wire.close()
            if has_small_disk:
                _run(f"umount {bench.data_dir}")


def plant_is_frozen_no_more(bench: Pair) -> None:
    """Whoever waits for a frozen panel would wait for ever."""
    with suppress(ProcessLookupError):
        bench.plant.thaw()


@asynccontextmanager
async def network(number: int) -> AsyncIterator[str]:
    """A network of its own for one tool at a time, joined to ours by a cable that can be pulled; yields its name."""
    name = f"ft{os.getpid()}-{number}"
    _ip(f"netns add {name}")
    try:
        _ip(f"link add {name} type veth peer name inside netns {name}")
        _ip(f"addr add {_address(name, 1)}/30 dev {name}")
        _ip(f"link set {name} up")
        for line in (f"addr add {_address(name, 2)}/30 dev inside", "link set inside up", "link set lo up"):
            _ip(f"-n {name} {line}")
        yield name
        _ip(f"link del {name}")  # at once: with its network alone it would go some time later
    finally:
        _ip(f"netns del {name}")


def why_no_networks() -> str | None:
    """Why this machine lets us make no network of our own, or ``None``."""
    name = f"ft{os.getpid()}-probe"
    return _why_not(f"ip netns add {name}") or _why_not(f"ip netns del {name}")


def why_no_small_disk(folder: Path) -> str | None:
    """Why this machine lets us mount no small disk, or ``None``."""
    return _why_not(f"mount -t tmpfs -o size=64k tmpfs {folder}") or _why_not(f"umount {folder}")


def _address(name: str, end: int) -> str:
    """An address of the small network ``name``: 1 is our end of its cable, 2 the tool's."""
    pid, number = map(int, name.removeprefix("ft").split("-"))
    return f"10.{200 + pid // 256 % 50}.{pid % 256}.{4 * number + end}"


def _ip(line: str) -> None:
    _run(f"ip {line}")


def _run(line: str) -> None:
    subprocess.run(line.split(), check=True, capture_output=True)


def _why_not(line: str) -> str | None:
    try:
        _run(line)
    except (OSError, subprocess.CalledProcessError) as fault:
        return f"{line.split()[0]}: {getattr(fault, 'stderr', b'') or fault!r}"
    return None
