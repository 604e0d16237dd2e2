"""How a PID block holds its settings, and how far a write may change them."""

from typing import Annotated

from pydantic import Field

from autotune.config.numbers import CHOICE, Eu, Ratio, Seconds, SecondsOrNone, Table, Words
from autotune.loop.settings import (
    Algorithm,
    AntiWindup,
    DerivativeKind,
    DerivativeOn,
    GainKind,
    GainPer,
    IntegralKind,
    PidForm,
    SignConvention,
)


class RangeTable(Table):
    """What a settings field can hold, in its own unit."""

    low: Eu = Field(description="lowest number that the field can hold")
    high: Eu = Field(description="highest number that the field can hold")
    resolution: Ratio = Field(default=0.0, description="smallest step of the field; 0 when as fine as its type")


class BlockTable(Table):
    """``[block.NAME]``: a PID block, described and never named by its maker."""

    form: Annotated[PidForm, CHOICE] = Field(description="how the terms combine: ideal, series or parallel")
    gain_kind: Annotated[GainKind, CHOICE] = Field(description="what the gain field holds: gain or proportional band")
    gain_per: Annotated[GainPer, CHOICE] = Field(description="gain per percent or per engineering unit of PV")
    integral_kind: Annotated[IntegralKind, CHOICE] = Field(description="what the integral field holds, with its unit")
    integral_off: Eu | None = Field(
        default=None, description="number that switches the integral off; leave out if none does"
    )
    has_derivative: bool = Field(default=True, description="whether the block has a derivative term")
    derivative_kind: Annotated[DerivativeKind, CHOICE] | None = Field(
        default=None, description="what the derivative field holds, with its unit"
    )
    derivative_off: Eu | None = Field(default=None, description="number that switches the derivative off")
    derivative_on: Annotated[DerivativeOn, CHOICE] | None = Field(
        default=None, description="derivative on PV or on error"
    )
    derivative_filter_ratio: Annotated[float, Field(gt=0, le=1e6)] | None = Field(
        default=None, description="N of the derivative filter Td/N; leave out when there is no filter"
    )
    pv_filter_time_s: SecondsOrNone = Field(default=0.0, description="the block's own PV filter, s")
    setpoint_weight: Ratio = Field(
        default=1.0, description="share of SP in the proportional term (1 = error, 0 = PV only)"
    )
    sign: Annotated[SignConvention, CHOICE] | None = Field(default=None, description="action flag or signed gain")
    algorithm: Annotated[Algorithm, CHOICE] | None = Field(default=None, description="positional or incremental")
    anti_windup: Annotated[AntiWindup, CHOICE] | None = Field(
        default=None, description="what the integral does at a limit: stop, conditional, tracking or not declared"
    )
    sp_tracks_in_manual: bool = Field(default=False, description="whether SP follows PV in manual")
    scan_s: Seconds | None = Field(default=None, description="the block's own execution, s")
    gain_range: RangeTable | None = Field(default=None, description="what the gain field can hold")
    integral_range: RangeTable | None = Field(default=None, description="what the integral field can hold")
    derivative_range: RangeTable | None = Field(default=None, description="what the derivative field can hold")
    panel_labels: list[Words] | None = Field(
        default=None, min_length=3, max_length=3, description="the panel's three labels: gain, integral, derivative"
    )


class SettingLimitTable(Table):
    """Floor, ceiling and largest change of one settings field."""

    low: Eu | None = Field(default=None, description="lowest number that may be written, in the field's unit")
    high: Eu | None = Field(default=None, description="highest number that may be written, in the field's unit")
    factor_at_most: Annotated[float, Field(gt=1, le=1000)] | None = Field(
        default=None, description="largest factor against as found, above 1"
    )


class SettingsLimitsTable(Table):
    """``[loop.settings_limits]`` and ``[settings_limits.BLOCK]`` of the site's limits."""

    gain: SettingLimitTable | None = Field(default=None, description="limits of the gain field")
    integral: SettingLimitTable | None = Field(default=None, description="limits of the integral field")
    derivative: SettingLimitTable | None = Field(default=None, description="limits of the derivative field")
