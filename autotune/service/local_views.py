"""The shapes of what a screen shows: persons, loops, controllers, sheets, a test as it runs, a plan on the table.

They belong to ``local_api``.  Undefined numbers are null, never NaN; instants are UTC.
"""

from pydantic import FiniteFloat

from autotune.service.local_api import Answer, CheckAnswer
from autotune.sheet import schema


class SessionAnswer(Answer):
    """Who is signed in at a screen; ``session`` and ``csrf`` are told only to who has just signed in."""

    session: str = ""
    csrf: str
    name: str
    roles: tuple[str, ...]
    is_locked: bool
    is_watch_only: bool


class DoneAnswer(Answer):
    """It was done, or the wish was passed on; ``text`` says what."""

    text: str


class SheetLineAnswer(Answer):
    """One line of the index of sheets."""

    sheet: str
    loop: str
    started_utc: str
    outcome: str
    code: str | None
    hash: str


class SheetLinesAnswer(Answer):
    """The index of sheets, newest first."""

    sheets: tuple[SheetLineAnswer, ...]


class SheetAnswer(Answer):
    """One sheet as it is kept, with what was added later and the hash that is printed on it."""

    sheet: schema.Sheet
    addenda: tuple[schema.Addendum, ...]
    hash: str


class FileAnswer(Answer):
    """One file to keep; its content is text, or the base64 of bytes."""

    file_name: str
    media_type: str
    content: str
    is_base64: bool = False


class LoopLineAnswer(Answer):
    """One loop of the index; readings in engineering units as of ``read_utc``, ``fault`` says why there are none.

    ``doing`` is empty, or what is under way and ``by`` whom.  ``notes`` tell what an earlier run has left behind.
    """

    loop: str
    service: str
    unit: str
    controller: str
    doing: str
    by: str
    mode: str | None
    pv_eu: FiniteFloat | None
    sp_eu: FiniteFloat | None
    op_eu: FiniteFloat | None
    pv_unit: str
    op_unit: str
    settings: tuple[schema.Quantity, ...]
    read_utc: str | None
    fault: str
    is_settled: bool
    notes: tuple[str, ...]
    last_sheet: SheetLineAnswer | None


class LoopsAnswer(Answer):
    """The index of loops at one instant."""

    utc: str
    loops: tuple[LoopLineAnswer, ...]


class ControllerAnswer(Answer):
    """How one controller answers: readings asked and missed since the start, median time of a reading (s)."""

    controller: str
    endpoint: str
    loops: tuple[str, ...]
    readings: int
    missed: int
    round_trip_s: FiniteFloat | None
    heard_utc: str | None
    fault: str
    is_busy: bool


class ControllersAnswer(Answer):
    """All controllers at one instant."""

    utc: str
    controllers: tuple[ControllerAnswer, ...]


class LookAnswer(Answer):
    """A look at one loop and all that a person is told and accepts before a test."""

    utc: str
    check: CheckAnswer
    settings: tuple[schema.Quantity, ...]
    cautions: tuple[str, ...]
    extremes: tuple[str, ...]
    writes: tuple[str, ...]


class CycleAnswer(Answer):
    """One whole relay cycle as seen; ``rough_ultimate_gain`` is 4d/(pi a), not the conclusion."""

    period_s: FiniteFloat
    pv_amplitude_eu: FiniteFloat
    op_amplitude_eu: FiniteFloat
    rough_ultimate_gain: FiniteFloat | None
    is_usable: bool


class WatchAnswer(Answer):
    """A condition outside the loop: its reading beside its limits."""

    name: str
    meaning: str
    low_eu: FiniteFloat
    high_eu: FiniteFloat
    reading_eu: FiniteFloat | None
    holds: bool


class StoryAnswer(Answer):
    """Something that happened, ``t_s`` after the test began."""

    t_s: FiniteFloat
    kind: str
    text: str
    by: str | None
    code: str | None


class TrendAnswer(Answer):
    """Readings in columns from number ``first`` on, in s since the test began and engineering units.

    ``switches`` are the moves of the output that we asked for: instant and output.
    """

    first: int
    t_s: tuple[FiniteFloat, ...]
    pv_eu: tuple[FiniteFloat | None, ...]
    sp_eu: tuple[FiniteFloat | None, ...]
    op_eu: tuple[FiniteFloat | None, ...]
    switches: tuple[tuple[FiniteFloat, FiniteFloat], ...]


class TestNowAnswer(Answer):
    """A test as it stands, in engineering units; ``None`` where not known yet."""

    __test__ = False

    test: str
    phase: str
    stage: str
    is_over: bool
    because: str
    elapsed_s: FiniteFloat
    left_at_most_s: FiniteFloat
    mode: str | None
    pv_eu: FiniteFloat | None
    sp_eu: FiniteFloat | None
    op_eu: FiniteFloat | None
    asked_op_eu: FiniteFloat | None
    pv_low_eu: FiniteFloat
    pv_high_eu: FiniteFloat
    op_low_eu: FiniteFloat
    op_high_eu: FiniteFloat
    reference_eu: FiniteFloat | None
    hysteresis_eu: FiniteFloat | None
    noise_eu: FiniteFloat | None
    usable_cycles: int
    cycles_to_agree: int
    cycles_at_most: int
    cycles: tuple[CycleAnswer, ...]
    watch: tuple[WatchAnswer, ...]
    story: tuple[StoryAnswer, ...]


class LiveAnswer(Answer):
    """One loop at one instant: what is under way, the test with the new part of its trend, and its sheet at the end."""

    utc: str
    loop: LoopLineAnswer
    test: TestNowAnswer | None
    trend: TrendAnswer | None
    sheet: str | None
    fault: str


class PlanLineAnswer(Answer):
    """One setting, now and afterwards, in the controller's own words and units."""

    label: str
    unit: str
    holds_now: FiniteFloat | None
    will_hold: FiniteFloat | None
    is_changed: bool


class PlanAnswer(Answer):
    """The exact change that waits for its digest to be typed; lines in the order of writing."""

    loop: str
    source: str
    lines: tuple[PlanLineAnswer, ...]
    how: str
    cautions: tuple[str, ...]
    digest: str
    good_for_s: FiniteFloat


class ServingAnswer(Answer):
    """A daemon that is ready: where its page is."""

    page: str


class PersonAnswer(Answer):
    """One person in the book; nothing of the secret."""

    name: str
    roles: tuple[str, ...]
    added_utc: str


class PersonsAnswer(Answer):
    """Everybody in the book."""

    persons: tuple[PersonAnswer, ...]
