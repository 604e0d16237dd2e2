"""The excitation: a relay with hysteresis around the as-found output, its steps and how they are fitted.

Everything about PV is told as ``rise_pct``: how far PV lies above the reference on the side to which a higher
output pushes it, (PV - reference) times the sign of the process gain.  So one rule serves both actions.
"""

from dataclasses import dataclass, replace

from autotune.experiment.plan import FirstMove, RelayPlan
from autotune.experiment.room import Room
from autotune.experiment.steadiness import Rest
from autotune.loop.limits import AsFound

SMALLER_RATIO = 0.6
"""What one wish for smaller steps leaves of them."""

LARGER_AT_MOST_RATIO = 2.0
SMALLER_AT_LEAST_RATIO = 0.25
FITS_WELL_RATIO = 1.25
"""A swing within this factor of the wanted one is left alone (common practice, no source)."""

FITS_AT_MOST = 3
"""How often the steps are fitted in one test; every fit costs the cycles before it."""


@dataclass(frozen=True, slots=True)
class Relay:
    """The relay between two switches.

    ``step_up_pct`` and ``step_down_pct`` are in force; ``next_ratio`` scales them from the next switch on.
    ``is_high`` tells the level, ``switched_s`` when it was taken, ``switches`` how many came after the first move.
    """

    step_up_pct: float
    step_down_pct: float
    is_high: bool
    switched_s: float
    switches: int = 0
    next_ratio: float = 1.0
    fits: int = 0
    is_fitting_over: bool = False

    @property
    def amplitude_pct(self) -> float:
        """Half of high to low: d of the describing function."""
        return 0.5 * (self.step_up_pct + self.step_down_pct)

    @property
    def push_sign(self) -> int:
        """+1 while the output stands high, -1 while it stands low."""
        return 1 if self.is_high else -1

    @property
    def step_ratio(self) -> float:
        """The larger step over the smaller one, at least 1."""
        small_pct, large_pct = sorted((self.step_up_pct, self.step_down_pct))
        return large_pct / small_pct


def hysteresis_pct(plan: RelayPlan, rest: Rest) -> float:
    """Half-width of the relay's hysteresis: as asked, or from the noise at rest, in percent of span."""
    if plan.hysteresis_pct is not None:
        return plan.hysteresis_pct
    return max(plan.hysteresis_at_least_pct, plan.hysteresis_per_noise * rest.noise_pct)


def start_relay(plan: RelayPlan, room: Room, step_ratio: float, t_s: float) -> Relay:
    """The relay at its first move, with the planned steps scaled by ``step_ratio`` and held inside the room."""
    return Relay(
        step_up_pct=min(plan.step_up_pct * step_ratio, room.up_pct),
        step_down_pct=min(plan.step_down_pct * step_ratio, room.down_pct),
        is_high=plan.first_move is FirstMove.UP,
        switched_s=t_s,
        is_fitting_over=step_ratio != 1.0,
    )


def is_switch_due(relay: Relay, rise_pct: float, hysteresis_pct: float, blanking_s: float, t_s: float) -> bool:
    """Whether PV has left the hysteresis on the side that the output pushes to, and blanking is over."""
    return relay.push_sign * rise_pct > hysteresis_pct and t_s - relay.switched_s >= blanking_s


def switched(relay: Relay, t_s: float) -> Relay:
    """The relay after a switch: the other level, with the steps that were waiting for it."""
    return replace(
        relay,
        is_high=not relay.is_high,
        switched_s=t_s,
        switches=relay.switches + 1,
        step_up_pct=relay.step_up_pct * relay.next_ratio,
        step_down_pct=relay.step_down_pct * relay.next_ratio,
        next_ratio=1.0,
    )


def with_smaller_steps(relay: Relay) -> Relay:
    """The relay after a person asked for smaller steps; from then on nothing enlarges them."""
    return replace(relay, next_ratio=min(relay.next_ratio, 1.0) * SMALLER_RATIO, is_fitting_over=True)


def fitted(relay: Relay, swing_pct: float, wanted_swing_pct: float, room: Room, *, may_enlarge: bool = True) -> Relay:
    """The relay with steps on their way to the wanted swing: both by one ratio, never beyond the room.

    ``may_enlarge`` is false while the swing still grows from the start or from the last change of the steps.
    """
    if relay.is_fitting_over or relay.fits >= FITS_AT_MOST or not swing_pct > 0.0:
        return relay
    wanted_ratio = wanted_swing_pct / swing_pct
    if 1.0 / FITS_WELL_RATIO <= wanted_ratio <= FITS_WELL_RATIO or (wanted_ratio > 1.0 and not may_enlarge):
        return relay
    largest_ratio = min(LARGER_AT_MOST_RATIO, room.up_pct / relay.step_up_pct, room.down_pct / relay.step_down_pct)
    ratio = min(max(wanted_ratio, SMALLER_AT_LEAST_RATIO), largest_ratio)
    return relay if ratio == 1.0 else replace(relay, next_ratio=ratio, fits=relay.fits + 1)


def level_pct(relay: Relay, as_found: AsFound) -> float:
    """The output that the relay asks for now, in percent of span."""
    return as_found.op_pct + (relay.step_up_pct if relay.is_high else -relay.step_down_pct)
