"""The whole of a test as one frozen value."""

from dataclasses import dataclass, field
from enum import Enum

from autotune.experiment.commands import ClaimLoop, DriveOutput, SetMode
from autotune.experiment.cycles import Cycles, RelayCycle
from autotune.experiment.events import HandBackEnded
from autotune.experiment.held import Held
from autotune.experiment.history import History
from autotune.experiment.phases import Phase
from autotune.experiment.plan import TestPlan
from autotune.experiment.recording import Recording, Rested, build_record
from autotune.experiment.relay import Relay
from autotune.experiment.steadiness import Rest
from autotune.experiment.trace import Trace
from autotune.loop.limits import AsFound
from autotune.loop.outcome import Refusal, Trip
from autotune.loop.record import Record
from autotune.loop.sample import Sample


class Stage(Enum):
    """The steps within a phase, in words for a person."""

    WAITING = "not started"
    LOOKING = "looking around; nothing is written"
    CLAIMING = "asking the PLC's guard for the loop"
    SWITCHING = "asking for manual"
    SETTLING = "holding the output as found, until it is read back"
    HOLDING = "measuring noise and drift at rest"
    FIRST_MOVE = "first move; waiting for PV to answer"
    CYCLING = "relay cycles"
    GIVING_BACK = "handing back as found"
    OVER = "over"


class EndKind(Enum):
    """Why the test came to its end, whatever becomes of the hand-back."""

    ENOUGH = "seen enough"
    REFUSED = "refused"
    ENDED_EARLY = "ended early by a person"
    TRIPPED = "tripped"
    TAKEN = "taken by somebody"


@dataclass(frozen=True, slots=True)
class Unheard:
    """A write that was not answered and that no reading has shown yet."""

    command: ClaimLoop | SetMode | DriveOutput
    since_s: float


@dataclass(frozen=True, slots=True)
class Experiment:
    """One test of one loop; only ``step`` makes a new one.

    Times are seconds of our monotonic clock: ``t_s`` of the last event, ``seen_s`` of the last reading, ``touched_s``
    when the loop was first touched, ``stage_s`` when the present stage began, ``moved_s`` of the last move of the
    output.  ``as_found`` is set from the first touch on, ``held`` are our last writes, ``refusals`` all that was found;
    ``step_ratio`` is what a person's wishes before the first move leave of the planned steps.
    """

    plan: TestPlan
    phase: Phase = Phase.IDLE
    stage: Stage = Stage.WAITING
    t_s: float | None = None
    started_s: float | None = None
    touched_s: float | None = None
    stage_s: float = 0.0
    seen_s: float | None = None
    moved_s: float | None = None
    sample: Sample | None = None
    looked: History[Sample] = field(default=History())
    as_found: AsFound | None = None
    held: Held = field(default=Held())
    is_claimed: bool = False
    trace: Trace = field(default=Trace())
    resting: History[tuple[float, float]] = field(default=History())
    rest: Rest | None = None
    rested: Rested | None = None
    frozen_after_s: float | None = None
    relay: Relay | None = None
    cycles: Cycles = field(default=Cycles())
    wrong_since_s: float | None = None
    step_ratio: float = 1.0
    unheard: Unheard | None = None
    recording: Recording = field(default=Recording())
    end: EndKind | None = None
    because: str = ""
    refusals: tuple[Refusal, ...] = ()
    trip: Trip | None = None
    hand_back: HandBackEnded | None = None

    @property
    def refusal(self) -> Refusal | None:
        """The first reason for which the test was refused."""
        return self.refusals[0] if self.refusals else None

    @property
    def is_over(self) -> bool:
        """Whether a terminal phase is reached."""
        return self.phase.is_terminal

    @property
    def whole_cycles(self) -> tuple[RelayCycle, ...]:
        """The whole cycles so far, usable or not."""
        return self.cycles.whole

    @property
    def usable_cycles(self) -> tuple[RelayCycle, ...]:
        """The whole cycles that count."""
        return self.cycles.usable

    @property
    def noise_pct(self) -> float | None:
        """Standard deviation of PV at rest, in percent of span."""
        return None if self.rest is None else self.rest.noise_pct

    @property
    def drift_pct_per_s(self) -> float | None:
        """Slope of PV at rest."""
        return None if self.rest is None else self.rest.drift_pct_per_s

    @property
    def hysteresis_pct(self) -> float | None:
        """Half-width of the relay's hysteresis, once the baseline has fixed it."""
        return None if self.rested is None else self.rested.hysteresis_pct

    @property
    def reference_pct(self) -> float | None:
        """PV's mean at rest, about which the relay switches."""
        return None if self.rested is None else self.rested.reference_pct


def record(experiment: Experiment) -> Record | None:
    """The record of a test, complete or cut short; ``None`` while no move of the relay has gone out."""
    if experiment.rested is None:
        return None
    return build_record(experiment.recording, experiment.plan, experiment.rested)
