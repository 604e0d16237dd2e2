"""``convert``: settings between forms and units, without any controller."""

from dataclasses import dataclass
from enum import StrEnum

from autotune.cli.exit_codes import ExitCode
from autotune.cli.printing import Voice
from autotune.loop.block_units import from_block, to_block
from autotune.loop.mode import ControlAction
from autotune.loop.outcome import Refusal
from autotune.loop.settings import (
    BlockDescription,
    BlockFields,
    DerivativeKind,
    GainKind,
    IntegralKind,
    PidForm,
)
from autotune.loop.span import Span
from autotune.service.local_api import ConvertAnswer, refusal_answer, settings_answer

_PERCENT = Span(0.0, 100.0, "%")


class GainWord(StrEnum):
    """How the gain is given."""

    GAIN = "gain"
    BAND = "band"


class IntegralWord(StrEnum):
    """How the integral is given."""

    S = "s"
    MIN = "min"
    REPEATS_PER_S = "repeats-per-s"
    REPEATS_PER_MIN = "repeats-per-min"
    GAIN_PER_S = "gain-per-s"
    GAIN_PER_MIN = "gain-per-min"


class DerivativeWord(StrEnum):
    """How the derivative is given."""

    S = "s"
    MIN = "min"
    GAIN_S = "gain-s"
    GAIN_MIN = "gain-min"


_GAINS = {GainWord.GAIN: GainKind.GAIN, GainWord.BAND: GainKind.PROPORTIONAL_BAND}
_INTEGRALS = {
    IntegralWord.S: IntegralKind.TIME_S,
    IntegralWord.MIN: IntegralKind.TIME_MIN,
    IntegralWord.REPEATS_PER_S: IntegralKind.REPEATS_PER_S,
    IntegralWord.REPEATS_PER_MIN: IntegralKind.REPEATS_PER_MIN,
    IntegralWord.GAIN_PER_S: IntegralKind.GAIN_PER_S,
    IntegralWord.GAIN_PER_MIN: IntegralKind.GAIN_PER_MIN,
}
_DERIVATIVES = {
    DerivativeWord.S: DerivativeKind.TIME_S,
    DerivativeWord.MIN: DerivativeKind.TIME_MIN,
    DerivativeWord.GAIN_S: DerivativeKind.GAIN_S,
    DerivativeWord.GAIN_MIN: DerivativeKind.GAIN_MIN,
}
_UNITS: dict[StrEnum, str] = {
    GainWord.GAIN: "%OP/%PV",
    GainWord.BAND: "%",
    IntegralWord.REPEATS_PER_S: "repeats/s",
    IntegralWord.REPEATS_PER_MIN: "repeats/min",
    IntegralWord.GAIN_PER_S: "gain per s",
    IntegralWord.GAIN_PER_MIN: "gain per min",
    DerivativeWord.GAIN_S: "gain x s",
    DerivativeWord.GAIN_MIN: "gain x min",
}


@dataclass(frozen=True, slots=True)
class Notation:
    """A form with the units of its three numbers."""

    form: PidForm
    gain: GainWord
    integral: IntegralWord
    derivative: DerivativeWord

    @property
    def block(self) -> BlockDescription:
        """A block that holds its settings in this notation."""
        return BlockDescription(
            form=self.form,
            gain_kind=_GAINS[self.gain],
            integral_kind=_INTEGRALS[self.integral],
            derivative_kind=_DERIVATIVES[self.derivative],
        )


def convert(voice: Voice, given: BlockFields, from_notation: Notation, to_notation: Notation) -> ExitCode:
    """Convert and print; a form that can't hold the settings is said with its reason."""
    wanted = converted(given, from_notation, to_notation)
    if isinstance(wanted, Refusal):
        voice.say(f"Refused. {wanted.reason}; {wanted.remedy}", style="stop")
        voice.answer(ConvertAnswer(settings=None, refusal=refusal_answer(wanted)))
        return ExitCode.NO
    voice.say(f"{to_notation.form.value} form", style="head")
    voice.say(f"  gain        {wanted.gain:.6g} {_UNITS[to_notation.gain]}")
    voice.say(f"  integral    {_number(wanted.integral)} {_unit(to_notation.integral)}")
    voice.say(f"  derivative  {_number(wanted.derivative)} {_unit(to_notation.derivative)}")
    voice.answer(ConvertAnswer(settings=settings_answer(wanted), refusal=None))
    return ExitCode.DONE


def converted(given: BlockFields, from_notation: Notation, to_notation: Notation) -> BlockFields | Refusal:
    """``given`` in another notation, of a reverse-acting controller in %OP per %PV of span."""
    settings = from_block(given, from_notation.block, ControlAction.REVERSE, _PERCENT)
    if isinstance(settings, Refusal):
        return settings
    return to_block(settings, to_notation.block, ControlAction.REVERSE, _PERCENT)


def _number(amount: float | None) -> str:
    return "off" if amount in (None, 0.0) else f"{amount:.6g}"


def _unit(word: IntegralWord | DerivativeWord) -> str:
    return _UNITS.get(word) or str(word.value)
