"""What may be proposed for a process model: the robust optimum for the purpose, and every published rule."""

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

from autotune.design.averaging import OVERSHOOT_RATIO, AveragingDesign, averaging_pi
from autotune.design.choices import Caution, Purpose
from autotune.design.draws import DrawsOnGrid
from autotune.design.forecast import ForecastBench
from autotune.design.integrator_rules import INTEGRATOR_RULES
from autotune.design.model_rules import MODEL_RULES
from autotune.design.optimum import LoopBench
from autotune.design.readings import PlantReadings, settings_by
from autotune.design.reduction import integrates
from autotune.design.robust import GUARDED_SENSITIVITY, RobustOptimum, keeps_guard, robust_optimum
from autotune.design.rules import ULTIMATE_RULES
from autotune.identify.model import ProcessModel
from autotune.loop.outcome import Refusal
from autotune.loop.settings import PidSettings

OPTIMUM_SOURCE = (
    "Least load-step IAE within Ms and Mt (Astrom, Panagopoulos & Hagglund 1998, Automatica 34:585), "
    "on the sampled loop and over the model's draws"
)
AVERAGING_SOURCE = "Elementary: the peak of the level fills the band for the stated inflow step"

SUITS = {
    Purpose.REGULATE: "upsets, with the least error that calm margins allow",
    Purpose.FOLLOW: "setpoint changes without overshoot, as quick as calm margins allow",
    Purpose.GENTLE: "sparing the valve, with at most twice the error of the quickest after an upset",
    Purpose.AVERAGING: "a level that smooths what goes on downstream",
}

_ROUNDING_TURNS = 25
_ROUNDING_RATIO = 0.985


@dataclass(frozen=True, slots=True)
class AveragingDemand:
    """What an averaging level may use: the band around its setpoint (%PV), and the inflow step to answer (%OP).

    ``overshoot_ratio`` is how far the outflow may overshoot it.
    """

    band_pct: float
    inflow_pct: float
    overshoot_ratio: float = OVERSHOOT_RATIO


@dataclass(frozen=True, slots=True)
class Candidate:
    """One row before it is judged: name and words of the rule, and its settings or why not."""

    name: str
    title: str
    source: str
    suits: str
    words: tuple[str, ...]
    purposes: tuple[Purpose, ...]
    settings: PidSettings | Refusal


def optimum_candidate(
    ready: ForecastBench | Refusal,
    purpose: Purpose,
    caution: Caution,
    held: Callable[[PidSettings], PidSettings | Refusal],
) -> Candidate:
    """The robust optimum; ``held`` says what settings the block's fields make of given ones.

    Its gain is lowered until the numbers as rounded keep the margins too.
    """
    settings: PidSettings | Refusal
    words: tuple[str, ...] = ()
    if isinstance(ready, Refusal):
        settings = ready
    else:
        found = robust_optimum(ready.bench, ready.draws, purpose, caution, ready.noise_pct)
        if isinstance(found, Refusal):
            settings = found
        else:
            settings = _keeping_margins(ready.bench, ready.draws, caution, found, held)
            words = (found.because, *_guard_words(found))
    name, title = f"robust-{purpose.value}", f"Robust optimum: {purpose.value}"
    return Candidate(name, title, OPTIMUM_SOURCE, SUITS[purpose], words, (purpose,), settings)


def _keeping_margins(
    bench: LoopBench,
    draws: DrawsOnGrid,
    caution: Caution,
    found: RobustOptimum,
    held: Callable[[PidSettings], PidSettings | Refusal],
) -> PidSettings:
    def is_kept(settings: PidSettings) -> bool:
        in_fields = held(settings)
        return isinstance(in_fields, Refusal) or keeps_guard(bench, draws, caution, found, in_fields)

    gain = found.settings.controller_gain
    calmer = (replace(found.settings, controller_gain=gain * _ROUNDING_RATIO**turn) for turn in range(_ROUNDING_TURNS))
    return next((settings for settings in calmer if is_kept(settings)), found.settings)


def _guard_words(found: RobustOptimum) -> tuple[str, ...]:
    if found.guarded_sensitivity is None:
        return ("Designed on the best estimate alone: what the model may be instead is not guarded.",)
    if found.guarded_sensitivity > GUARDED_SENSITIVITY:
        return (
            f"Even backed off, what the model may be instead reaches Ms {found.guarded_sensitivity:.2f}: "
            "the model is not known well enough.",
        )
    return ()


def averaging_candidate(model: ProcessModel, demand: AveragingDemand | None) -> Candidate:
    """The averaging PI for a vessel, or why not."""
    settings: PidSettings | Refusal
    words: tuple[str, ...] = ()
    if demand is None:
        settings = Refusal(
            "DEMAND_NOT_STATED", "band and inflow step of the level are not stated", "state what the vessel may use"
        )
    elif not integrates(model):
        settings = Refusal(
            "NOT_FOR_THIS_PLANT", "averaging is for a vessel, and this plant comes to rest", "choose gentle instead"
        )
    else:
        gain_per_s = model.numerator[-1] / model.denominator[-2]
        design = averaging_pi(gain_per_s, demand.band_pct, demand.inflow_pct, demand.overshoot_ratio)
        settings, words = design.settings, (_averaging_words(design),)
    suits = SUITS[Purpose.AVERAGING]
    return Candidate(
        "averaging-pi", "Averaging level PI", AVERAGING_SOURCE, suits, words, (Purpose.AVERAGING,), settings
    )


def _averaging_words(design: AveragingDesign) -> str:
    over = design.outflow_rate_pct_per_s / design.least_outflow_rate_pct_per_s
    return (
        f"The outflow moves by at most {design.outflow_rate_pct_per_s:.3g} %/s, {over:.2g} times the least possible, "
        f"and overshoots by {100.0 * design.outflow_overshoot_ratio:.0f} %."
    )


def rule_candidates(readings: PlantReadings) -> Iterator[Candidate]:
    """Every published rule, in the order of the tables."""
    for rule in (*MODEL_RULES, *INTEGRATOR_RULES):
        words = (f"Limits of use: {rule.limits}.",)
        settings = settings_by(rule, readings)
        yield Candidate(rule.name, rule.title, rule.source, rule.suits, words, rule.purposes, settings)
    point = readings.ultimate
    for by_ultimate in ULTIMATE_RULES:
        yield Candidate(
            by_ultimate.name,
            by_ultimate.title,
            by_ultimate.source,
            by_ultimate.suits,
            (f"Limits of use: {by_ultimate.limits}.",),
            (Purpose.REGULATE,),
            point if isinstance(point, Refusal) else by_ultimate.settings(point.ultimate_gain, point.ultimate_period_s),
        )
