"""The stored shapes of sheets and addenda, version 1.

A sheet is the record of one test and never changes; what happens later (a write of settings, a
restore, a recovery, a note) is added beside it.  These shapes belong to the record alone: the rest
of the program may be refactored and old sheets still open.

Rule for change: every change of shape raises ``SCHEMA_VERSION``; a new field gets a default, so that
an older entry opens; a field is never given another meaning.  Undefined numbers are null, NaN and
infinity are refused, instants are UTC, ``t_s`` is seconds of the test's own clock.
"""

import re
from datetime import UTC, datetime
from typing import Annotated, Literal, Self

from pydantic import AfterValidator, AwareDatetime, BaseModel, ConfigDict, Field, StringConstraints, model_validator

SCHEMA_VERSION = 1

Utc = Annotated[AwareDatetime, AfterValidator(lambda instant: instant.astimezone(UTC))]
SheetId = Annotated[str, StringConstraints(max_length=80, pattern=r"^[A-Za-z0-9._-]+-\d{8}-\d{6}-[0-9a-f]{4}$")]
Digest = Annotated[str, StringConstraints(pattern=r"^[0-9a-f]{64}$")]


def sheet_id(loop: str, started_utc: datetime, tail: int) -> str:
    """A name that sorts by time within its loop and can be said on the telephone: ``TIC-204-20261201-094502-7f3a``.

    ``tail`` tells apart two tests of one second; its low 16 bits are used.  What can't stand in a file name
    becomes ``_``; of a very long loop name the first 50 characters are kept.
    """
    return (
        f"{re.sub(r'[^A-Za-z0-9._-]', '_', loop)[:50]}-{started_utc.astimezone(UTC):%Y%m%d-%H%M%S}-{tail & 0xFFFF:04x}"
    )


class _Stored(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=False)


class Quantity(_Stored):
    """One number with its name, the words and the unit that a person reads beside it; null is undefined.

    ``low`` and ``high`` are its interval with the claimed coverage ``level`` (null: a hull that bounds).
    """

    name: str
    label: str
    unit: str
    amount: float | None
    low: float | None = None
    high: float | None = None
    level: float | None = None

    @model_validator(mode="after")
    def _in_order(self) -> Self:
        known = [bound for bound in (self.low, self.amount, self.high) if bound is not None]
        if known != sorted(known):
            raise ValueError(f"{self.name}: an interval needs low <= amount <= high")
        return self


class Span(_Stored):
    """The range of a signal: 0 % and 100 % in engineering units."""

    low_eu: float
    high_eu: float
    unit: str


class Versions(_Stored):
    """What software made the sheet; ``libraries`` are (name, version)."""

    autotune: str
    python: str
    libraries: tuple[tuple[str, str], ...] = ()


class Person(_Stored):
    """Who acted; a name that was only typed is not authenticated, and the sheet says so."""

    name: str
    is_authenticated: bool


class Said(_Stored):
    """A text that a person accepted or gave, and when."""

    text: str
    utc: Utc


class AsFound(_Stored):
    """The loop before it was touched, in percent of span and engineering units; ``settings`` as the controller held."""

    mode: str
    op_pct: float
    op_eu: float | None
    sp_pct: float | None
    sp_eu: float | None
    pv_pct: float | None
    pv_eu: float | None
    settings: tuple[Quantity, ...] = ()


class Plan(_Stored):
    """The excitation that was planned and how it should end; percent of span, seconds."""

    kind: str
    first_move: str
    step_up_pct: float
    step_down_pct: float
    hysteresis_pct: float | None
    wanted_swing_pct: float | None
    cycles_to_agree: int
    agreement_pct: float
    cycles_to_discard: int
    scan_s: float
    plc_scan_s: float | None
    baseline_s: float
    has_guard: bool
    has_clock_tags: bool


class Rested(_Stored):
    """PV at rest before the first move: its mean, about which the relay switches, and what came of it."""

    reference_pct: float
    hysteresis_pct: float
    noise_pct: float
    drift_pct_per_s: float


class WatchLimit(_Stored):
    """A condition outside the loop that had to hold, in its own unit."""

    name: str
    low_eu: float
    high_eu: float
    meaning: str = ""


class Limits(_Stored):
    """The limits that were in force; percent of span and seconds, null is switched off."""

    step_up_pct: float
    step_down_pct: float
    op_low_pct: float
    op_high_pct: float
    pv_low_pct: float
    pv_high_pct: float
    op_rate_pct_per_s: float | None
    pv_rate_pct_per_s: float | None
    pv_deviation_pct: float | None
    test_within_s: float
    cycles_at_most: int
    watch: tuple[WatchLimit, ...] = ()


class WatchColumn(_Stored):
    """The readings of one watch entry, a row per sample."""

    name: str
    reading_eu: tuple[float | None, ...]


class Samples(_Stored):
    """All samples in columns, a row per sample; an optional column is empty where the controller lacks its tag."""

    t_s: tuple[float, ...] = ()
    taken_earliest_s: tuple[float, ...] = ()
    taken_latest_s: tuple[float, ...] = ()
    pv_pct: tuple[float | None, ...] = ()
    sp_pct: tuple[float | None, ...] = ()
    op_pct: tuple[float | None, ...] = ()
    mode: tuple[str, ...] = ()
    pv_quality: tuple[str, ...] = ()
    op_quality: tuple[str, ...] = ()
    guard_state: tuple[str | None, ...] = ()
    plc_clock_ms: tuple[int | None, ...] = ()
    op_effect_ms: tuple[int | None, ...] = ()
    op_effect_count: tuple[int | None, ...] = ()
    watch: tuple[WatchColumn, ...] = ()

    @model_validator(mode="after")
    def _even(self) -> Self:
        rows = len(self.t_s)
        optional = {"guard_state", "plc_clock_ms", "op_effect_ms", "op_effect_count"}
        for name in type(self).model_fields.keys() - {"watch"}:
            length = len(getattr(self, name))
            if length != rows and not (name in optional and length == 0):
                raise ValueError(f"column {name} has {length} rows, t_s has {rows}")
        for column in self.watch:
            if len(column.reading_eu) != rows:
                raise ValueError(f"column watch.{column.name} has {len(column.reading_eu)} rows, t_s has {rows}")
        return self


class WriteLine(_Stored):
    """One tag written: the raw number sent, what became of it, and the request's span on our clock."""

    t_s: float
    utc: Utc
    tag: str
    raw: bool | int | float
    outcome: str
    sent_earliest_s: float
    sent_latest_s: float
    why: str = ""
    detail: str = ""


class EventLine(_Stored):
    """Something that happened: a trip, an operator's act, a change of phase, the link."""

    t_s: float
    utc: Utc
    kind: Literal["trip", "operator", "phase", "link", "note"]
    text: str
    code: str | None = None
    by: str | None = None


class Outcome(_Stored):
    """How the test ended; ``code`` is the trip's or refusal's, null for an ordinary end."""

    ended: Literal["COMPLETE", "ABORTED", "RELEASED", "STRANDED"]
    code: str | None
    text: str


class Cycle(_Stored):
    """One whole relay cycle as seen; amplitudes are half of peak-to-peak."""

    from_s: float
    period_s: float
    pv_amplitude_pct: float
    amplitude_pct: float


class SeenPoint(_Stored):
    """One point of the frequency response as seen; gain in %PV/%OP."""

    method: str
    frequency_rad_per_s: float
    gain: float
    phase_rad: float
    gain_sd_ratio: float
    phase_sd_rad: float


class Findings(_Stored):
    """What was measured and concluded; ``refusal`` says why there is no conclusion."""

    time_base: str
    cycles: tuple[Cycle, ...] = ()
    seen: tuple[SeenPoint, ...] = ()
    method: str = ""
    concluded: tuple[Quantity, ...] = ()
    because: tuple[str, ...] = ()
    cautions: tuple[str, ...] = ()
    refusal: str | None = None


class Proposal(_Stored):
    """One rule's settings as the controller would hold them, or why it proposes none; ``figures`` is the forecast."""

    name: str
    title: str
    source: str
    is_recommended: bool = False
    settings: tuple[Quantity, ...] = ()
    figures: tuple[Quantity, ...] = ()
    rounding_pct: float | None = None
    gain_factor: float | None = None
    cautions: tuple[str, ...] = ()
    not_proposed_because: str | None = None


class Sheet(_Stored):
    """One test of one loop, complete."""

    kind: Literal["sheet"] = "sheet"
    schema_version: int = SCHEMA_VERSION
    sheet_id: SheetId
    loop: str
    service: str
    unit: str
    controller: str
    started_utc: Utc
    ended_utc: Utc
    versions: Versions
    configuration_digest: Digest
    configuration_text: str
    pv_span: Span
    op_span: Span
    person: Person
    permission: Said
    cautions_accepted: tuple[Said, ...] = ()
    as_found: AsFound | None
    plan: Plan
    limits: Limits
    rested: Rested | None = None
    samples: Samples = Samples()
    writes: tuple[WriteLine, ...] = ()
    events: tuple[EventLine, ...] = ()
    outcome: Outcome
    findings: Findings | None = None
    proposals: tuple[Proposal, ...] = ()
    proposals_reason: str = ""
    as_found_figures: tuple[Quantity, ...] = ()
    costs: tuple[str, ...] = ()
    journal_file: str | None = None
    journal_digest: Digest | None = None

    @model_validator(mode="after")
    def _ends_after_it_started(self) -> Self:
        if self.ended_utc < self.started_utc:
            raise ValueError("a test ends after it started")
        return self


class _Addendum(_Stored):
    schema_version: int = SCHEMA_VERSION
    sheet_id: SheetId
    utc: Utc
    person: Person
    text: str = ""


class FieldWrite(_Stored):
    """One settings field written: the number in the controller's unit and what became of it."""

    name: str
    amount: float
    outcome: str
    utc: Utc
    detail: str = ""


class Change(_Addendum):
    """A confirmed change of settings.  ``write`` applies a proposal, ``restore`` puts earlier settings back.

    ``read_back`` is what the controller said afterwards, null amounts where it said nothing usable.
    ``confirmation_digest`` is as typed; ``plan_digest`` is what it had to match.
    """

    kind: Literal["write", "restore"]
    source: str
    as_found: tuple[Quantity, ...]
    wanted: tuple[Quantity, ...]
    order: tuple[str, ...]
    plan_digest: Digest
    configuration_digest: Digest
    confirmation_digest: str
    confirmed_utc: Utc
    writes: tuple[FieldWrite, ...]
    read_back: tuple[Quantity, ...]
    result: Literal["WRITTEN", "PUT_BACK", "UNVERIFIED"]
    op_bump_pct: float | None = None


class Note(_Addendum):
    """A person's remark on a sheet; the remark is ``text``."""

    kind: Literal["note"] = "note"


class Recovery(_Addendum):
    """What was done for a loop after the program itself had died: present state and what became of it."""

    kind: Literal["recovery"] = "recovery"
    present: AsFound | None
    result: Literal["RESTORED", "GUARD_GAVE_BACK", "TAKEN", "STRANDED"]
    writes: tuple[WriteLine, ...] = ()


Addendum = Change | Note | Recovery
Entry = Annotated[Sheet | Change | Note | Recovery, Field(discriminator="kind")]
