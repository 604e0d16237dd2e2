"""The site's own file of ceilings: ``site-limits.toml``."""

from typing import Annotated, Literal

from pydantic import Field

from autotune.config.numbers import Pct, Seconds, StepPct, Table, Words
from autotune.config.schema_settings import SettingsLimitsTable
from autotune.config.schema_tags import TableChoice


class NeverWrittenTable(Table):
    """``[[never_written]]`` of the site's limits: a range of Modbus addresses, both ends included, or a node."""

    controller: Words = Field(description="the NAME of a [controller.NAME]")
    table: TableChoice | None = Field(default=None, description="coil or holding")
    first: int | None = Field(default=None, description="first address, counted as that controller's `addressing` says")
    last: int | None = Field(default=None, description="last address, included")
    node: Words | None = Field(default=None, description="instead of an address range: a node id of an OPC UA server")


class SiteLimitsTable(Table):
    """The site's own file: ceilings that no loop file can widen."""

    schema_version: Literal[1] = Field(description="1")
    step_at_most_pct: StepPct = Field(description="largest step of any output, % of span")
    op_low_pct: Pct = Field(default=0.0, description="no test moves an output below, % of span")
    op_high_pct: Pct = Field(default=100.0, description="no test moves an output above, % of span")
    test_within_s: Seconds | None = Field(default=None, description="longest test of any loop, s")
    concurrent_tests_at_most: Annotated[int, Field(ge=1, le=100)] = Field(default=1, description="most tests at a time")
    without_guard: Literal["refused", "with consent"] = Field(
        default="refused", description='tests where the PLC has no guard: "refused" or "with consent"'
    )
    write_settings: Literal["never", "in manual", "in automatic"] = Field(
        description="the most that any loop may allow: never, in manual or in automatic"
    )
    factor_at_most: Annotated[float, Field(gt=1, le=1000)] = Field(
        description="largest factor of any setting against as found, above 1"
    )
    never_written: list[NeverWrittenTable] = Field(default=[], description="tables [[never_written]]")
    settings_limits: dict[str, SettingsLimitsTable] = Field(default={}, description="tables [settings_limits.BLOCK]")
