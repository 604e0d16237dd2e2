"""The tables of a configuration file, key by key.  What one key's rule can't see is judged in ``checks``."""

from typing import Annotated, Literal

from pydantic import Field

from autotune.config.numbers import (
    CHOICE,
    Code,
    Count,
    Eu,
    EuStep,
    Name,
    Pct,
    RatePct,
    Seconds,
    SecondsOrNone,
    StepPct,
    Table,
    Unit,
    Words,
)
from autotune.config.schema_settings import SettingsLimitsTable
from autotune.config.schema_tags import OrderChoice, TagsTable, WatchTable
from autotune.experiment.plan import FirstMove
from autotune.loop.mode import ControlAction


class ControllerTable(Table):
    """``[controller.NAME]``: one PLC and how to reach it over Modbus/TCP."""

    protocol: Literal["modbus", "opc-ua"] = Field(  # with the latter another table is read
        description='the protocol: "modbus" (Modbus/TCP) or "opc-ua"'
    )
    host: str = Field(min_length=1, max_length=253, pattern=r"^\S+$", description="host name or IP address")
    port: int = Field(default=502, ge=1, le=65535, description="TCP port, usually 502")
    device_id: int = Field(ge=1, le=255, description="unit identifier, 1 to 255 (0 would address every device)")
    addressing: Literal["from 0", "from 1"] = Field(
        description='whether this file counts addresses "from 0" (as on the wire) or "from 1" (as in many manuals)'
    )
    uses_addresses_above_9999: bool = Field(
        default=False,
        description="true when an address such as 40001 is meant as it stands, not as table and number in one",
    )
    word_order: OrderChoice = Field(description='order of the words in a value: "big" (high word first) or "little"')
    byte_order: OrderChoice | None = Field(default=None, description='order of the bytes in a word: "big" or "little"')
    plc_scan_s: Seconds | None = Field(default=None, description="the PLC's own scan, s")
    io_time_s: SecondsOrNone = Field(default=0.0, description="time that inputs and outputs need beside the scan, s")
    request_timeout_s: Seconds | None = Field(
        default=None, le=10, description="deadline of one request, s (at most 10)"
    )
    connect_gap_s: SecondsOrNone | None = Field(
        default=None, le=60, description="shortest time between two connections, s"
    )
    registers_per_read: int | None = Field(
        default=None, ge=1, le=125, description="most registers in one read, 1 to 125"
    )
    registers_per_write: int | None = Field(
        default=None, ge=1, le=123, description="most registers in one write, 1 to 123"
    )
    read_gap_registers: int | None = Field(default=None, ge=0, le=125, description="largest gap that one read bridges")


class SpanTable(Table):
    """``[loop.span]``: ranges as the controller sees them, and what the ends of the output do."""

    pv_low_eu: Eu = Field(description="PV at 0 % of span, in its engineering unit")
    pv_high_eu: Eu = Field(description="PV at 100 % of span, in its engineering unit")
    pv_unit: Unit = Field(description="engineering unit of PV and SP, for instance degC")
    op_low_eu: Eu = Field(default=0.0, description="OP at 0 %, in the controller's unit")
    op_high_eu: Eu = Field(default=100.0, description="OP at 100 %, in the controller's unit")
    op_unit: Unit = Field(default="%", description="unit of OP")
    op_low_means: Words = Field(description="what 0 % does in the plant, for instance hot-water valve closed")
    op_high_means: Words = Field(description="what 100 % does in the plant")
    failure_position: Words = Field(description="where the actuator goes without signal or air")


class ModeCodesTable(Table):
    """``[loop.mode_codes]``: raw codes of the mode tag."""

    MAN: Code = Field(description="code of manual")
    AUTO: Code | None = Field(default=None, description="code of automatic")
    CAS: Code | None = Field(default=None, description="code of cascade")
    REMOTE: Code | None = Field(default=None, description="code of remote")
    TRACKING: Code | None = Field(default=None, description="code of tracking")
    INITIALISING: Code | None = Field(default=None, description="code of initialising")
    LOCAL: Code | None = Field(default=None, description="code of local operation")


class ModeRequestCodesTable(Table):
    """``[loop.mode_request_codes]``: codes to write, where they differ from the ones read."""

    MAN: Code = Field(description="code that requests manual")
    AUTO: Code | None = Field(default=None, description="code that requests automatic")
    CAS: Code | None = Field(default=None, description="code that requests cascade")
    REMOTE: Code | None = Field(default=None, description="code that requests remote")


class GuardTable(Table):
    """``[loop.guard]``: the PLC's own guard of this loop."""

    timeout_s: Seconds = Field(description="after this time without heartbeat the guard gives back, s")
    idle: Code | None = Field(default=None, description="code of idle in guard_state")
    armed: Code | None = Field(default=None, description="code of armed in guard_state")
    gave_back: Code | None = Field(default=None, description="code of gave back in guard_state")


class LimitsTable(Table):
    """``[loop.limits]``: how far a test may go."""

    step_up_pct: StepPct = Field(description="largest move of OP upwards from as found, % of span")
    step_down_pct: StepPct = Field(description="largest move of OP downwards from as found, % of span")
    op_low_pct: Pct = Field(description="lowest OP of a test, % of span")
    op_high_pct: Pct = Field(description="highest OP of a test, % of span")
    op_rate_pct_per_s: RatePct | None = Field(default=None, description="fastest move of OP, % of span per s")
    op_resolution_pct: StepPct | None = Field(default=None, description="how finely OP can be read back, % of span")
    pv_low_eu: Eu = Field(description="PV that ends a test, inside the plant's own low alarm, engineering unit")
    pv_high_eu: Eu = Field(description="PV that ends a test, inside the plant's own high alarm, engineering unit")
    pv_rate_eu_per_s: EuStep | None = Field(default=None, description="fastest plausible PV, engineering unit per s")
    pv_deviation_eu: EuStep | None = Field(
        default=None, description="largest distance of PV from where it was, eng. unit"
    )
    drift_eu_per_s: EuStep | None = Field(
        default=None, description="largest drift of PV during a test, eng. unit per s"
    )
    safe_without_view_s: SecondsOrNone | None = Field(default=None, description="how long missed reads are borne, s")
    switch_within_s: Seconds = Field(description="a test ends when PV brings no switch for this time, s")
    test_within_s: Seconds = Field(description="longest test, s")
    cycles_at_most: Annotated[int, Field(ge=1, le=1000)] | None = Field(
        default=None, description="most cycles of a test"
    )
    missed_ticks_at_most: Count | None = Field(default=None, description="most scans missed in a row")
    inverse_response_s: SecondsOrNone | None = Field(
        default=None, description="how long PV first moves the wrong way, s"
    )
    dead_time_s: SecondsOrNone = Field(description="longest dead time to be expected, s")
    pv_frozen_s: Seconds | None = Field(
        default=None, description="how long a PV may stand still, s; leave out to learn it"
    )


class RelayTable(Table):
    """``[loop.relay]``: the excitation."""

    step_up_pct: StepPct = Field(description="first step of OP above as found, % of span")
    step_down_pct: StepPct = Field(description="first step of OP below as found, % of span")
    first_move: Annotated[FirstMove, CHOICE] | None = Field(
        default=None, description="direction of the first move: up or down"
    )
    hysteresis_pct: StepPct | None = Field(default=None, description="half-width of the hysteresis, % of PV span")
    hysteresis_per_noise: Annotated[float, Field(ge=1, le=20)] | None = Field(
        default=None, description="hysteresis as a multiple of the noise at rest"
    )
    hysteresis_at_least_pct: StepPct | None = Field(default=None, description="smallest half-width, % of PV span")
    wanted_swing_pct: StepPct | None = Field(default=None, description="wanted half peak-to-peak of PV, % of span")
    blanking_s: SecondsOrNone | None = Field(default=None, description="shortest time between two switches, s")


class ConvergenceTable(Table):
    """``[loop.convergence]``: when a test has seen enough."""

    cycles_to_agree: Annotated[int, Field(ge=2, le=50)] | None = Field(
        default=None, description="successive cycles that must agree"
    )
    agreement_pct: Annotated[float, Field(gt=0, le=50)] | None = Field(
        default=None, description="how well they agree in period and swing, percent"
    )
    cycles_to_discard: Annotated[int, Field(ge=0, le=50)] | None = Field(
        default=None, description="first cycles that never count"
    )


class BaselineTable(Table):
    """``[loop.baseline]``: the look before a test."""

    look_around_s: Seconds = Field(description="time observed before anything is written, s")
    hold_s: Seconds = Field(description="time held in manual before the first step, s")
    noise_at_most_pct: StepPct = Field(description="largest standard deviation of PV at rest, % of span")
    drift_at_most_pct_per_s: RatePct = Field(description="largest slope of PV at rest, % of span per s")


class LoopTable(Table):
    """``[[loop]]``: one loop, complete."""

    name: Name = Field(description="the loop's tag name, for instance TIC-204")
    service: Words = Field(description="what the loop does, in plain words")
    controller: Words = Field(description="the NAME of a [controller.NAME]")
    unit: Words = Field(description="the plant unit; one test per unit at a time")
    action: Annotated[ControlAction, CHOICE] = Field(description="reverse (PV up, OP down) or direct (PV up, OP up)")
    actuator: Literal["continuous", "time_proportioned", "raise_lower", "on_off"] = Field(
        description="kind of actuator: continuous"
    )
    protects: Literal["none", "critical", "shared"] = Field(
        description='"none": no safety function depends on this loop'
    )
    block: Words = Field(description="the NAME of a [block.NAME]")
    scan_s: Seconds = Field(description="how often we read the loop, s")
    address_offset: int = Field(default=0, ge=0, le=65535, description="added to every address in this loop's tags")
    without_guard: Literal["refused", "with consent"] = Field(
        default="refused", description='"with consent": a person may allow a test although the PLC has no guard'
    )
    write_settings: Literal["never", "in manual", "in automatic"] = Field(
        default="never", description="whether confirmed settings may be written, and in which mode"
    )
    prove_writable: bool = Field(
        default=False,
        description="true: before a test each setting is written back with the number it holds, to show that it can be",
    )
    hand_back_within_s: Seconds = Field(default=30.0, description="longest hand-back with all its retries, s")
    recover_within_s: Seconds = Field(
        default=60.0, description="a restarted service hands back only within this time, s"
    )
    span: SpanTable = Field(description="table [loop.span]")
    tags: TagsTable = Field(description="table [loop.tags]")
    mode_codes: ModeCodesTable = Field(description="table [loop.mode_codes]")
    mode_request_codes: ModeRequestCodesTable | None = Field(
        default=None, description="table [loop.mode_request_codes]"
    )
    guard: GuardTable | None = Field(default=None, description="table [loop.guard]")
    limits: LimitsTable = Field(description="table [loop.limits]")
    relay: RelayTable = Field(description="table [loop.relay]")
    convergence: ConvergenceTable = Field(default=ConvergenceTable(), description="table [loop.convergence]")
    baseline: BaselineTable = Field(description="table [loop.baseline]")
    watch: list[WatchTable] = Field(default=[], description="tables [[loop.watch]]")
    settings_limits: SettingsLimitsTable = Field(
        default=SettingsLimitsTable(), description="table [loop.settings_limits]"
    )


class FileTable(Table):
    """The top of the main file; its controllers, blocks and loops are read one by one."""

    schema_version: Literal[1] = Field(description="1")
    data_dir: Words = Field(default="autotune-data", description="folder of records, relative to this file")
    concurrent_tests_at_most: Annotated[int, Field(ge=1, le=100)] = Field(default=1, description="most tests at a time")
    site_limits: Words | None = Field(default=None, description="file of the site's limits, relative to this file")


class IncludedTable(Table):
    """The top of an included file."""

    schema_version: Literal[1] = Field(description="1")
