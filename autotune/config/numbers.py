"""The kinds of number, word and choice that a configuration file may hold, and the strict base of its tables."""

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field

Eu = Annotated[float, Field(ge=-1e12, le=1e12)]
"""An engineering value, bounded so that no conversion overflows."""

EuStep = Annotated[float, Field(gt=0, le=1e12)]
"""A difference or a rate in engineering units."""

Pct = Annotated[float, Field(ge=0, le=100)]
"""A position in percent of span."""

StepPct = Annotated[float, Field(gt=0, le=100)]
"""A move or a band in percent of span."""

RatePct = Annotated[float, Field(gt=0, le=1e6)]
"""Percent of span per second."""

Seconds = Annotated[float, Field(gt=0, le=604_800)]
"""A time above nothing and up to a week."""

SecondsOrNone = Annotated[float, Field(ge=0, le=604_800)]
"""A time that may be zero."""

Ratio = Annotated[float, Field(ge=0, le=1e6)]
"""A number without unit."""

Scale = Annotated[float, Field(ge=-1e9, le=1e9)]
"""A factor between a raw value and engineering units."""

Code = Annotated[int, Field(ge=-(2**31), le=2**32 - 1)]
"""A raw code of a mode or a state."""

Count = Annotated[int, Field(ge=0, le=10_000)]
"""How often."""

Words = Annotated[str, Field(min_length=1, max_length=200, pattern=r"^[^\x00-\x1f\x7f]+$")]
"""One line of plain text."""

Unit = Annotated[str, Field(max_length=30, pattern=r"^[^\x00-\x1f\x7f]*$")]
"""An engineering unit as it is printed; may be empty."""

Name = Annotated[str, Field(max_length=64, pattern=r"^[A-Za-z0-9][A-Za-z0-9_.\-]*$")]
"""A tag name as the trade writes it: letters, digits, point, hyphen, underscore."""

CHOICE = Field(strict=False)
"""Lets an enumeration be told by its word."""


class Table(BaseModel):
    """One table of a file: strict types, finite numbers, no unknown keys."""

    model_config = ConfigDict(strict=True, extra="forbid", frozen=True, allow_inf_nan=False)
