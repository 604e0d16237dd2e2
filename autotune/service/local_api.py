"""The shapes of every answer that leaves the service as JSON.  Undefined numbers are null, never NaN."""

from pydantic import BaseModel, ConfigDict, FiniteFloat

from autotune.identify.findings import Findings, FindingsOrRefusal
from autotune.loop.outcome import Refusal
from autotune.loop.settings import BlockFields
from autotune.sheet import schema


class Answer(BaseModel):
    """Frozen, and nothing unexpected in it."""

    model_config = ConfigDict(frozen=True, extra="forbid")


class RefusalAnswer(Answer):
    """A no with its reason."""

    code: str
    reason: str
    remedy: str


class SettingsAnswer(Answer):
    """Settings as the controller holds them, in its own units."""

    gain: FiniteFloat
    integral: FiniteFloat
    derivative: FiniteFloat | None


class TestAnswer(Answer):
    """How a test ended and what it found; gains in %OP/%PV, periods in s, swing and noise in % of span."""

    __test__ = False

    outcome: str
    code: str | None
    text: str
    refusal: RefusalAnswer | None
    cycles: int
    ultimate_gain: FiniteFloat | None
    ultimate_gain_low: FiniteFloat | None
    ultimate_gain_high: FiniteFloat | None
    ultimate_period_s: FiniteFloat | None
    ultimate_period_low_s: FiniteFloat | None
    ultimate_period_high_s: FiniteFloat | None
    describing_function_gain: FiniteFloat | None
    describing_function_period_s: FiniteFloat | None
    noise_pct: FiniteFloat | None
    method: str | None
    time_base: str | None
    because: tuple[str, ...]
    cautions: tuple[str, ...]
    sheet: str | None


class ConvertAnswer(Answer):
    """Settings in the notation asked for, or why they can't be held in it."""

    settings: SettingsAnswer | None
    refusal: RefusalAnswer | None


class FindingAnswer(Answer):
    """One thing that a look at a loop showed."""

    level: str
    code: str
    text: str
    remedy: str


class CheckAnswer(Answer):
    """A look at one loop; times in s, readings in engineering units."""

    loop: str
    fit: bool
    findings: tuple[FindingAnswer, ...]
    mode: str | None
    pv_eu: FiniteFloat | None
    sp_eu: FiniteFloat | None
    op_eu: FiniteFloat | None
    settings: SettingsAnswer | None
    round_trip_s: FiniteFloat | None
    refresh_s: FiniteFloat | None


class ChecksAnswer(Answer):
    """A look at several loops."""

    loops: tuple[CheckAnswer, ...]


class ProposalAnswer(Answer):
    """One rule's settings in the controller's own units, or why it proposes none."""

    name: str
    title: str
    source: str
    recommended: bool
    settings: SettingsAnswer | None
    rounding_pct: FiniteFloat | None
    gain_factor: FiniteFloat | None
    cautions: tuple[str, ...]
    not_proposed_because: str | None


class ProposalsAnswer(Answer):
    """All proposals of one sheet beside the settings as found."""

    sheet: str
    loop: str
    as_found: SettingsAnswer | None
    recommended: str | None
    proposals: tuple[ProposalAnswer, ...]


class WriteAnswer(Answer):
    """How a confirmed write ended."""

    outcome: str
    read_back_equal: bool
    text: str
    read_back: tuple[schema.Quantity, ...] = ()


class LoopNowAnswer(Answer):
    """A loop as it is: mode, whether PV stayed near where it was found and OP moved no more than before, both in %."""

    mode: str
    steady: bool
    pv_pct: FiniteFloat | None
    sp_pct: FiniteFloat | None
    op_pct: FiniteFloat | None
    op_bump_pct: FiniteFloat | None


class LoopFoundAnswer(Answer):
    """A loop as found or as left: OP, SP in % of span, mode and settings."""

    mode: str | None
    op_pct: FiniteFloat | None
    sp_pct: FiniteFloat | None
    settings: SettingsAnswer | None


class RehearsalAnswer(Answer):
    """The whole job on the soft plant."""

    as_found: LoopFoundAnswer
    as_left: LoopFoundAnswer
    test: TestAnswer
    proposal: str | None
    write: WriteAnswer | None
    loop_after: LoopNowAnswer | None
    sheet: str | None


def settings_answer(fields: BlockFields | None) -> SettingsAnswer | None:
    """``BlockFields`` as an answer."""
    if fields is None:
        return None
    return SettingsAnswer(gain=fields.gain, integral=fields.integral, derivative=fields.derivative)


def refusal_answer(refusal: Refusal | None) -> RefusalAnswer | None:
    """``Refusal`` as an answer."""
    if refusal is None:
        return None
    return RefusalAnswer(code=refusal.code, reason=refusal.reason, remedy=refusal.remedy)


def findings_of(result: FindingsOrRefusal | None) -> Findings | None:
    """The findings, where there are any."""
    return result if isinstance(result, Findings) else None
