"""The plain, frozen result of loading a configuration.  No pydantic leaves this room."""

from dataclasses import dataclass, field
from enum import Enum
from pathlib import Path

from autotune.confirmed_write.plan import FieldLimit
from autotune.experiment.plan import ConvergencePlan, RelayPlan
from autotune.loop.limits import Limits, WatchLimit
from autotune.loop.mode import ControlAction, LoopMode
from autotune.loop.settings import BlockDescription
from autotune.loop.span import Span


class RegisterTable(Enum):
    """The four tables of the Modbus data model."""

    COIL = "coil"
    DISCRETE = "discrete"
    INPUT = "input"
    HOLDING = "holding"


class DataType(Enum):
    """IEC 61131-3 elementary types that a tag may have."""

    BOOL = "BOOL"
    SINT = "SINT"
    USINT = "USINT"
    INT = "INT"
    UINT = "UINT"
    DINT = "DINT"
    UDINT = "UDINT"
    LINT = "LINT"
    ULINT = "ULINT"
    REAL = "REAL"
    LREAL = "LREAL"

    @property
    def register_count(self) -> int:
        """How many 16-bit registers one value fills."""
        return _REGISTERS[self]

    @property
    def is_whole(self) -> bool:
        """Whether it holds whole numbers only."""
        return self not in (DataType.REAL, DataType.LREAL)


_REGISTERS = dict.fromkeys(DataType, 1) | {
    DataType.DINT: 2,
    DataType.UDINT: 2,
    DataType.REAL: 2,
    DataType.LINT: 4,
    DataType.ULINT: 4,
    DataType.LREAL: 4,
}


class Order(Enum):
    """Order of words in a value, or of bytes in a word."""

    BIG = "big"
    LITTLE = "little"


@dataclass(frozen=True, slots=True)
class Ne43:
    """Raw readings at 4 and 20 mA of an analogue input, so that signal failure after NAMUR NE 43 shows."""

    raw_at_4_ma: float
    raw_at_20_ma: float


@dataclass(frozen=True, slots=True)
class ModbusTag:
    """Where one value lies in a Modbus device.

    ``address`` counts from 0 on the wire, whatever the file counts from.  Engineering value =
    raw * ``scale`` + ``offset``.  ``bit`` picks a bit of a register (0 is least significant).
    """

    table: RegisterTable
    address: int
    type: DataType
    word_order: Order = Order.BIG
    byte_order: Order = Order.BIG
    bit: int | None = None
    scale: float = 1.0
    offset: float = 0.0
    ne43: Ne43 | None = None


@dataclass(frozen=True, slots=True)
class OpcUaTag:
    """Where one value lies in an OPC UA server: at ``node_id``, or at the end of a browse path.

    ``node_id`` is the standard text, ``path`` begins below the folder Objects and its names lie in
    ``namespace`` (a URI) where they don't say theirs; one of the two is empty.
    """

    node_id: str
    type: DataType | None = None
    scale: float = 1.0
    offset: float = 0.0
    path: str = ""
    namespace: str = ""


Tag = ModbusTag | OpcUaTag


@dataclass(frozen=True, slots=True)
class AddressRange:
    """Wire addresses of one table that are never written; both ends included."""

    table: RegisterTable
    first: int
    last: int


@dataclass(frozen=True, slots=True)
class ModbusEndpoint:
    """How to reach a Modbus/TCP controller; times in seconds."""

    host: str
    port: int
    device_id: int
    request_timeout_s: float = 0.5
    connect_gap_s: float = 0.5
    registers_per_read: int = 125
    registers_per_write: int = 123
    read_gap_registers: int = 40
    never_written: tuple[AddressRange, ...] = ()


class MessageSecurity(Enum):
    """What protects the messages of an OPC UA session."""

    SIGN_AND_ENCRYPT = "sign and encrypt"
    SIGN = "sign"
    NONE = "none"


class SecurityPolicy(Enum):
    """The algorithms of an OPC UA session; the outdated ones are not offered."""

    BASIC256SHA256 = "Basic256Sha256"
    AES128_SHA256_RSA_OAEP = "Aes128Sha256RsaOaep"
    AES256_SHA256_RSA_PSS = "Aes256Sha256RsaPss"


@dataclass(frozen=True, slots=True)
class OpcUaEndpoint:
    """How to reach an OPC UA server, and how far it is trusted; times in seconds.

    ``server_thumbprint`` is the SHA-256 of the server's certificate, 64 hex digits; ``server_name`` the host
    name in it, where the server is reached by another.  ``password_from`` is ``env:NAME`` or ``file:NAME``;
    without ``user`` and ``user_certificate`` the session is anonymous.  ``never_written`` are node ids.
    File names are relative to ``folder``; ``pki_dir`` holds our own certificate.  These two places count in
    no digest.
    """

    url: str
    request_timeout_s: float = 0.5
    connect_gap_s: float = 0.5
    channel_lifetime_s: float = 3600.0
    security: MessageSecurity = MessageSecurity.SIGN_AND_ENCRYPT
    policy: SecurityPolicy = SecurityPolicy.BASIC256SHA256
    server_thumbprint: str = ""
    server_name: str = ""
    user: str = ""
    password_from: str = ""
    user_certificate: str = ""
    user_key: str = ""
    source_time_is_sampling: bool = False
    never_written: tuple[str, ...] = ()
    folder: Path = Path()
    pki_dir: Path = Path("pki")


Endpoint = ModbusEndpoint | OpcUaEndpoint


@dataclass(frozen=True, slots=True)
class Controller:
    """One PLC: its endpoint and its scan (s; ``None`` where clock tags make it unnecessary)."""

    name: str
    endpoint: Endpoint
    plc_scan_s: float | None
    io_time_s: float = 0.0


@dataclass(frozen=True, slots=True)
class ModeCodes:
    """Raw codes of the mode tag, both ways; codes that are not listed read as ``NOT_KNOWN``."""

    read: tuple[tuple[int, LoopMode], ...]
    write: tuple[tuple[LoopMode, int], ...]


@dataclass(frozen=True, slots=True)
class GuardCodes:
    """Raw codes of the guard's state tag."""

    idle: int = 0
    armed: int = 1
    gave_back: int = 2


@dataclass(frozen=True, slots=True)
class LoopConfig:
    """One loop, complete.

    ``tags`` maps a tag's name to its place: ``pv sp op mode``; the guard's ``holder_request heartbeat
    sequence op_request holder heartbeat_echo guard_state guard_alarm guard_timeout_s enable stop
    test_active op_effect_count op_effect_ms plc_clock_ms boot_count``; the settings ``gain integral
    derivative``; watch entries ``watch.NAME``.
    ``op_low_means`` and ``op_high_means`` say what 0 % and 100 % do physically.
    """

    name: str
    service: str
    controller: Controller
    unit: str
    action: ControlAction
    pv_span: Span
    op_span: Span
    op_low_means: str
    op_high_means: str
    failure_position: str
    tags: tuple[tuple[str, Tag], ...]
    mode_codes: ModeCodes
    guard_codes: GuardCodes
    has_guard: bool
    allows_no_guard: bool
    block: BlockDescription
    limits: Limits
    relay: RelayPlan
    convergence: ConvergencePlan
    scan_s: float
    look_around_s: float
    baseline_s: float
    baseline_noise_at_most_pct: float
    baseline_drift_at_most_pct_per_s: float
    hand_back_within_s: float
    recover_within_s: float
    guard_timeout_s: float | None
    protects: str
    watch: tuple[WatchLimit, ...]
    field_limits: tuple[tuple[str, FieldLimit], ...]
    write_in_manual: bool
    is_writing_settings_allowed: bool
    proves_writable: bool = False
    digest: str = ""
    block_digest: str = ""

    def tag(self, name: str) -> Tag | None:
        """The place of the tag called ``name``, or ``None`` where the loop has none."""
        return dict(self.tags).get(name)


@dataclass(frozen=True, slots=True)
class Configuration:
    """A whole configuration: loops by name, where records are kept, and the digest of all its files."""

    file: Path
    data_dir: Path
    loops: tuple[LoopConfig, ...]
    controllers: tuple[Controller, ...]
    concurrent_tests_at_most: int
    digest: str
    sources: tuple[tuple[str, str], ...] = field(default=())

    def loop(self, name: str) -> LoopConfig | None:
        """The loop called ``name``, or ``None``."""
        return next((loop for loop in self.loops if loop.name == name), None)
