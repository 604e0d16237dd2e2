"""A rig file (TOML) to a plant at rest.  Every complaint names the file, the key and what to write instead.

``rigs/juice-skid.toml`` is the commented example of all keys.
"""

import tomllib
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from enum import Enum
from pathlib import Path
from typing import NoReturn, TypeVar

from simulator.block import (
    Action,
    Algorithm,
    AntiWindup,
    BlockSpec,
    DerivativeKind,
    Form,
    GainKind,
    GainPer,
    IntegralKind,
    Mode,
    Settings,
    Sign,
    to_terms,
)
from simulator.guard import GuardLimits
from simulator.loop import LoopSpec
from simulator.plc import Plc
from simulator.process import ProcessSpec
from simulator.registers import BITS, REGISTERS, WATCH_AT_MOST
from simulator.transmitter import TransmitterSpec
from simulator.valve import ValveSpec

BUNDLED = Path(__file__).with_name("rigs")
WRITABLE_TAGS = tuple(register.name for register in REGISTERS if register.is_writable and register.mirrors is None)
MIRRORED_TAGS = tuple(register.mirrors for register in REGISTERS if register.mirrors is not None)
TAKEN_NAMES = {register.name for register in REGISTERS} | {name for _, name, _ in BITS}

Choice = TypeVar("Choice", bound=Enum)
Built = TypeVar("Built")


class RigError(Exception):
    """Means: a rig file is wrong.  Do: follow the text; it names file, key and remedy."""


@dataclass(frozen=True, slots=True)
class Rig:
    """A whole plant as engineered."""

    file: Path
    title: str
    scan_s: float
    word_order: str
    device_id: int
    seed: int
    clock_start_ms: int
    loops: tuple[LoopSpec, ...]

    def build(self) -> Plc:
        """A fresh PLC with all its loops at rest, its first scan done."""
        plc = Plc(self.loops, scan_s=self.scan_s, seed=self.seed, clock_start_ms=self.clock_start_ms)
        plc.scan(0.0)
        return plc


def load_rig(name: str) -> Rig:
    """Load a rig by path or by the name of a bundled one.  Raises ``RigError``."""
    file = find_rig(name)
    table = _Table(file, "", _read(file, set()))
    scan_s = table.number("plc_scan_s", low=0.001, high=10.0)
    if round(1000.0 * scan_s) != 1000.0 * scan_s:
        table.complain("plc_scan_s", f"{scan_s} is no whole number of milliseconds", "write 0.02, 0.05, 0.1, ...")
    is_op_refused = table.choice("op_write_in_auto", ("ignored", "refused"), "ignored") == "refused"
    loops = [_loop(loop, scan_s, is_op_refused) for loop in table.tables("loop")]
    rig = Rig(
        file=file,
        title=table.text("title", file.stem),
        scan_s=scan_s,
        word_order=table.choice("word_order", ("big", "little"), "big"),
        device_id=table.whole("device_id", 1, low=0, high=255),
        seed=table.whole("seed", 1, low=0, high=2**31),
        clock_start_ms=table.whole("clock_start_ms", 0, low=0, high=2**32 - 1),
        loops=tuple(loops),
    )
    table.finish()
    _check_links(table, rig.loops)
    return rig


def find_rig(name: str) -> Path:
    """The file of a rig given as path or bundled name.  Raises ``RigError`` when there is none."""
    for file in (Path(name), BUNDLED / f"{name}.toml"):
        if file.is_file():
            return file
    bundled = ", ".join(sorted(file.stem for file in BUNDLED.glob("*.toml")))
    raise RigError(f"{name}: no such rig; name a TOML file or one of the bundled rigs: {bundled}")


def _read(file: Path, seen: set[Path]) -> dict[str, object]:
    if file.resolve() in seen:
        raise RigError(f"{file}: based_on: goes in a circle; base it on a rig that stands alone")
    try:
        table: dict[str, object] = tomllib.loads(file.read_text(encoding="utf-8"))
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as reason:
        raise RigError(f"{file}: can't be read as TOML: {reason}") from reason
    base = table.pop("based_on", None)
    if base is None:
        return table
    base_file = file.parent / str(base)
    if not base_file.is_file():
        raise RigError(f"{file}: based_on: {base_file} doesn't exist; name a rig file beside this one")
    return _read(base_file, seen | {file.resolve()}) | table


class _Table:
    """One table of the file; it hands out typed entries and complains about what is missing, wrong or left over."""

    def __init__(self, file: Path, path: str, entries: Mapping[str, object]) -> None:
        self._file = file
        self._path = path
        self._entries = dict(entries)

    def complain(self, key: str, fault: str, remedy: str) -> NoReturn:
        raise RigError(f"{self._file}: {self._path}{key}: {fault}; {remedy}")

    def has(self, key: str) -> bool:
        return key in self._entries

    def number(self, key: str, default: float | None = None, *, low: float = -1e9, high: float = 1e9) -> float:
        entry = self._take(key, default)
        if isinstance(entry, bool) or not isinstance(entry, int | float) or not low <= entry <= high:
            self.complain(key, f"{entry!r} won't do", f"write a number from {low:g} to {high:g}")
        return float(entry)

    def optional_number(self, key: str, *, low: float = -1e9, high: float = 1e9) -> float | None:
        return self.number(key, low=low, high=high) if self.has(key) else None

    def whole(self, key: str, default: int, *, low: int, high: int) -> int:
        entry = self.number(key, default, low=low, high=high)
        if entry != round(entry):
            self.complain(key, f"{entry} won't do", "write a whole number")
        return round(entry)

    def text(self, key: str, default: str | None = None) -> str:
        entry = self._take(key, default)
        if not isinstance(entry, str) or not entry:
            self.complain(key, f"{entry!r} won't do", "write a text in quotes")
        return str(entry)

    def flag(self, key: str) -> bool:
        entry = self._take(key, False)
        if not isinstance(entry, bool):
            self.complain(key, f"{entry!r} won't do", "write true or false")
        return bool(entry)

    def choice(self, key: str, words: Iterable[str], default: str) -> str:
        entry = self._take(key, default)
        if entry not in tuple(words):
            self.complain(key, f"{entry!r} won't do", f"write one of: {', '.join(words)}")
        return str(entry)

    def one_of(self, key: str, kinds: type[Choice], default: Choice) -> Choice:
        return kinds(self.choice(key, [str(kind.value) for kind in kinds], str(default.value)))

    def numbers(self, key: str) -> tuple[float, ...]:
        entry = self._take(key, [])
        if not isinstance(entry, list) or not all(type(item) in (int, float) for item in entry):
            self.complain(key, f"{entry!r} won't do", "write a list of numbers")
        return tuple(float(item) for item in entry)

    def words(self, key: str, known: tuple[str, ...]) -> tuple[str, ...]:
        entry = self._take(key, [])
        if not isinstance(entry, list) or not all(item in known for item in entry):
            self.complain(key, f"{entry!r} won't do", f"write a list of: {', '.join(known)}")
        return tuple(entry)

    def table(self, key: str) -> "_Table":
        entry = self._take(key, {})
        if not isinstance(entry, dict):
            self.complain(key, "isn't a table", f"write [loop.{key}]")
        return _Table(self._file, f"{self._path}{key}.", entry)

    def tables(self, key: str) -> list["_Table"]:
        entry = self._take(key, None)
        if not isinstance(entry, list) or not entry or not all(isinstance(item, dict) for item in entry):
            self.complain(key, "no loop found", f"write at least one [[{key}]]")
        rows: list[dict[str, object]] = entry
        return [_Table(self._file, f"{key} {row.get('name', number)}: ", row) for number, row in enumerate(rows)]

    def names(self) -> list[str]:
        return list(self._entries)

    def build(self, key: str, make: Callable[[], Built]) -> Built:
        """Call ``make`` and turn its ``ValueError`` into a complaint about ``key``."""
        try:
            return make()
        except ValueError as reason:
            raise RigError(f"{self._file}: {self._path}{key}: {reason}; change it accordingly") from reason

    def finish(self) -> None:
        if self._entries:
            self.complain(next(iter(self._entries)), "isn't a key of a rig", "remove it or mend its spelling")

    def _take(self, key: str, default: object) -> object:
        entry = self._entries.pop(key, default)
        if entry is None:
            self.complain(key, "is missing", "write it")
        return entry


def _loop(table: _Table, scan_s: float, is_op_refused: bool) -> LoopSpec:
    low_eu, high_eu = table.number("pv_low_eu"), table.number("pv_high_eu")
    if not low_eu < high_eu:
        table.complain("pv_high_eu", f"{high_eu} isn't above pv_low_eu", "write a span")
    block, settings = _block(table.table("block"), scan_s, high_eu - low_eu)
    spec = LoopSpec(
        name=table.text("name"),
        service=table.text("service"),
        unit=table.text("unit"),
        pv_low_eu=low_eu,
        pv_high_eu=high_eu,
        pv_unit=table.text("pv_unit"),
        sp_eu=table.number("sp_eu", low=low_eu, high=high_eu),
        op_pct=table.number("op_pct", low=block.op_low_pct, high=block.op_high_pct),
        mode=Mode[table.choice("mode", Mode.__members__, "AUTO")],
        process=_process(table.table("process")),
        valve=_valve(table.table("valve")),
        transmitter=_transmitter(table.table("transmitter")),
        block=block,
        settings=settings,
        guard=_guard(table.table("guard"), block),
        watch=_watch(table.table("watch")),
        int_scales=_int_scales(table.table("int_scale")),
        read_only=table.words("read_only", WRITABLE_TAGS),
        is_op_refused_in_auto=is_op_refused,
        cascade_master=table.text("cascade_master") if table.has("cascade_master") else None,
        input_from=table.text("input_from") if table.has("input_from") else None,
    )
    table.finish()
    return spec


def _process(table: _Table) -> ProcessSpec:
    quadratic = table.numbers("quadratic")
    if len(quadratic) not in (0, 2):
        table.complain("quadratic", f"{len(quadratic)} numbers won't do", "write [q0 in s^2, q1 in s]")
    spec = table.build(
        "gain",
        lambda: ProcessSpec(
            gain=table.number("gain"),
            lags_s=table.numbers("lags_s"),
            dead_time_s=table.number("dead_time_s", 0.0, low=0.0, high=1e6),
            zero_s=table.optional_number("zero_s"),
            quadratic=(quadratic[0], quadratic[1]) if quadratic else None,
            integrating=table.flag("integrating"),
        ),
    )
    table.finish()
    return spec


def _valve(table: _Table) -> ValveSpec:
    spec = table.build(
        "low_pct",
        lambda: ValveSpec(
            low_pct=table.number("low_pct", 0.0),
            high_pct=table.number("high_pct", 100.0),
            rate_pct_per_s=table.optional_number("rate_pct_per_s", low=1e-6),
            dead_band_pct=table.number("dead_band_pct", 0.0, low=0.0, high=100.0),
        ),
    )
    table.finish()
    return spec


def _transmitter(table: _Table) -> TransmitterSpec:
    spec = TransmitterSpec(
        noise_pct=table.number("noise_pct", 0.0, low=0.0, high=100.0),
        resolution_pct=table.number("resolution_pct", 0.0, low=0.0, high=100.0),
        filter_time_s=table.number("filter_time_s", 0.0, low=0.0, high=1e6),
    )
    table.finish()
    return spec


def _block(table: _Table, plc_scan_s: float, span_width_eu: float) -> tuple[BlockSpec, Settings]:
    spec = BlockSpec(
        scan_s=table.number("scan_s", plc_scan_s, low=plc_scan_s, high=3600.0),
        span_width_eu=span_width_eu,
        form=table.one_of("form", Form, Form.IDEAL),
        gain_kind=table.one_of("gain_kind", GainKind, GainKind.GAIN),
        gain_per=table.one_of("gain_per", GainPer, GainPer.PERCENT),
        integral_kind=table.one_of("integral_kind", IntegralKind, IntegralKind.TIME_S),
        integral_off=table.number("integral_off", 0.0, low=0.0),
        derivative_kind=table.one_of("derivative_kind", DerivativeKind, DerivativeKind.TIME_S),
        derivative_off=table.number("derivative_off", 0.0, low=0.0),
        is_derivative_on_error=table.choice("derivative_on", ("PV", "error"), "PV") == "error",
        derivative_filter_ratio=table.number("derivative_filter_ratio", 10.0, low=0.0, high=1e6) or None,
        setpoint_weight=table.number("setpoint_weight", 1.0, low=0.0, high=1.0),
        sign=table.one_of("sign", Sign, Sign.ACTION_FLAG),
        action=table.one_of("action", Action, Action.REVERSE),
        algorithm=table.one_of("algorithm", Algorithm, Algorithm.POSITIONAL),
        anti_windup=table.one_of("anti_windup", AntiWindup, AntiWindup.CONDITIONAL),
        tracking_time_s=table.optional_number("tracking_time_s", low=1e-6),
        sp_tracks_in_manual=table.flag("sp_tracks_in_manual"),
        op_low_pct=table.number("op_low_pct", 0.0),
        op_high_pct=table.number("op_high_pct", 100.0),
    )
    executions = spec.scan_s / plc_scan_s
    if abs(executions - round(executions)) > 1e-9:
        table.complain("scan_s", f"{spec.scan_s} is no multiple of plc_scan_s {plc_scan_s}", "write a multiple")
    if not spec.op_low_pct < spec.op_high_pct:
        table.complain("op_high_pct", "isn't above op_low_pct", "write the clamps of the output")
    settings = Settings(table.number("gain"), table.number("integral"), table.number("derivative", 0.0))
    table.build("gain", lambda: to_terms(spec, settings))
    table.finish()
    return spec, settings


def _guard(table: _Table, block: BlockSpec) -> GuardLimits:
    limits = GuardLimits(
        # Inside the clamps: what the guard passes on must be what the block then holds.
        op_low_pct=table.number("op_low_pct", low=block.op_low_pct, high=block.op_high_pct),
        op_high_pct=table.number("op_high_pct", low=block.op_low_pct, high=block.op_high_pct),
        pv_low_eu=table.number("pv_low_eu"),
        pv_high_eu=table.number("pv_high_eu"),
        timeout_s=table.number("timeout_s", 2.0, low=0.01, high=3600.0),
        enable_s=table.number("enable_s", 900.0, low=0.01, high=86400.0),
    )
    table.finish()
    if not (limits.op_low_pct < limits.op_high_pct and limits.pv_low_eu < limits.pv_high_eu):
        table.complain("op_low_pct", "a low limit isn't below its high limit", "write low < high")
    return limits


def _watch(table: _Table) -> tuple[tuple[str, int], ...]:
    names = table.names()
    if len(names) > WATCH_AT_MOST:
        table.complain(names[-1], "is one too many", f"write at most {WATCH_AT_MOST} watch entries")
    for name in names:
        if name in TAKEN_NAMES or not name.isidentifier():
            table.complain(name, "won't do as a name", "write letters, digits and underscores, and no tag's name")
    return tuple((name, table.whole(name, 0, low=0, high=65535)) for name in names)


def _int_scales(table: _Table) -> tuple[tuple[str, float], ...]:
    scales = tuple((tag, table.number(tag, 100.0, low=1e-6)) for tag in MIRRORED_TAGS)
    table.finish()
    return scales


def _check_links(table: _Table, loops: tuple[LoopSpec, ...]) -> None:
    names = [loop.name for loop in loops]
    if len(set(names)) != len(names):
        table.complain("loop", "two loops have the same name", "rename one")
    for number, loop in enumerate(loops):
        if loop.cascade_master is not None and loop.cascade_master not in names[:number]:
            table.complain(f"loop {loop.name}: cascade_master", "isn't an earlier loop", "write the master first")
        if loop.input_from is not None and loop.input_from not in names:
            table.complain(f"loop {loop.name}: input_from", "isn't a loop of this rig", f"name one of {names}")
        if loop.mode is Mode.CAS and loop.cascade_master is None:
            table.complain(f"loop {loop.name}: mode", "CAS without a master", "name its cascade_master")
