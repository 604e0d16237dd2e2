"""Where the tags of a loop lie: the tables ``[loop.tags]`` and ``[[loop.watch]]`` of a file."""

from typing import Annotated

from pydantic import Field

from autotune.config.numbers import CHOICE, Eu, Name, Scale, Table, Words
from autotune.config.types import DataType, Order, RegisterTable

TableChoice = Annotated[RegisterTable, CHOICE]
TypeChoice = Annotated[DataType, CHOICE]
OrderChoice = Annotated[Order, CHOICE]


class Ne43Table(Table):
    """Raw readings that correspond to the live range of a 4 to 20 mA input."""

    raw_at_4_ma: Eu = Field(description="the raw reading at 4 mA")
    raw_at_20_ma: Eu = Field(description="the raw reading at 20 mA")


class TagTable(Table):
    """One tag; what it leaves out comes from ``[loop.tags]`` and from its controller.

    A Modbus tag has an ``address``, an OPC UA tag a ``node`` or a ``path``.
    """

    address: int | None = Field(
        default=None, description="register or bit address, counted as the controller's `addressing` says"
    )
    node: Words | None = Field(
        default=None, description='the node id in an OPC UA server, for instance "ns=2;s={loop}.pv"'
    )
    path: Words | None = Field(
        default=None, description='instead of node: the browse path below Objects, for instance "/Skid/{loop}/pv"'
    )
    namespace: Words | None = Field(default=None, description="URI of the namespace of the path's names")
    table: TableChoice | None = Field(default=None, description="the Modbus table: coil, discrete, input or holding")
    type: TypeChoice | None = Field(default=None, description="the IEC 61131-3 type, for instance REAL or UINT")
    bit: int | None = Field(default=None, ge=0, le=15, description="bit of the register, 0 (least significant) to 15")
    word_order: OrderChoice | None = Field(default=None, description="order of the words in a value: big or little")
    byte_order: OrderChoice | None = Field(default=None, description="order of the bytes in a word: big or little")
    scale: Scale = Field(default=1.0, description="engineering value = raw x scale + offset")
    offset: Eu = Field(default=0.0, description="engineering value = raw x scale + offset")
    ne43: Ne43Table | None = Field(
        default=None, description="raw readings at 4 and 20 mA, so that a failed signal shows"
    )


class TagsTable(Table):
    """All tags of a loop; ``table`` and ``type`` here serve every tag that leaves them out."""

    table: TableChoice | None = Field(default=None, description="the table of all tags that name none")
    type: TypeChoice | None = Field(default=None, description="the type of all tags that name none")
    namespace: Words | None = Field(default=None, description="the namespace URI of all paths that name none")

    pv: TagTable = Field(description="measured value as the PID block sees it")
    sp: TagTable | None = Field(default=None, description="setpoint")
    op: TagTable = Field(description="output of the block")
    mode: TagTable = Field(description="actual mode of the block")

    holder_request: TagTable | None = Field(default=None, description="token of who asks for the loop (UDINT)")
    heartbeat: TagTable | None = Field(default=None, description="counter written in every scan (UINT)")
    sequence: TagTable | None = Field(default=None, description="number of the output move (UINT)")
    op_request: TagTable | None = Field(default=None, description="output that the guard may pass on")
    holder: TagTable | None = Field(default=None, description="token of who holds the loop, 0 when free (UDINT)")
    heartbeat_echo: TagTable | None = Field(default=None, description="the heartbeat as the PLC last saw it (UINT)")
    guard_state: TagTable | None = Field(default=None, description="state of the guard: idle, armed, gave back")
    guard_alarm: TagTable | None = Field(default=None, description="1 after the guard gave the loop back")
    guard_timeout_s: TagTable | None = Field(default=None, description="the guard's patience with the heartbeat, s")
    enable: TagTable | None = Field(default=None, description="permission set at the plant's own panel")
    stop: TagTable | None = Field(default=None, description="stop set at the plant's own panel")
    test_active: TagTable | None = Field(default=None, description="1 during a test, for the plant's panel")

    plc_clock_ms: TagTable | None = Field(default=None, description="PLC clock of the scan that sampled PV, ms (UDINT)")
    op_effect_ms: TagTable | None = Field(default=None, description="PLC clock when the output took effect, ms (UDINT)")
    op_effect_count: TagTable | None = Field(default=None, description="number of the output moves that took effect")
    boot_count: TagTable | None = Field(default=None, description="changes at every restart or download of the PLC")

    gain: TagTable | None = Field(default=None, description="the block's gain or proportional band")
    integral: TagTable | None = Field(default=None, description="the block's integral setting")
    derivative: TagTable | None = Field(default=None, description="the block's derivative setting")


class WatchTable(Table):
    """A condition outside the loop that must hold all through a test."""

    name: Name = Field(description="name of the condition, for instance pump-running")
    meaning: Words = Field(description="what a person reads when the condition fails")
    low_eu: Eu = Field(description="lowest permitted reading, in the tag's unit (a contact reads 0 or 1)")
    high_eu: Eu = Field(description="highest permitted reading, in the tag's unit")
    tag: TagTable = Field(description="where the reading lies")
