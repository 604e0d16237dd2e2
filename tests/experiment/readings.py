"""Single readings and views for tests of the parts."""

from dataclasses import replace
from typing import Any

from autotune.experiment.held import Held
from autotune.experiment.interlocks import View
from autotune.experiment.trace import Trace
from autotune.loop.limits import AsFound
from autotune.loop.mode import LoopMode
from autotune.loop.quality import Quality
from autotune.loop.sample import GuardState, GuardView, Sample, Stamp
from tests.experiment.bench import TOKEN, plan_for

GOOD = Sample(
    t_s=100.0,
    taken=Stamp.at(100.0),
    pv_pct=40.0,
    pv_quality=Quality.GOOD,
    sp_pct=40.0,
    op_pct=50.0,
    op_quality=Quality.GOOD,
    mode=LoopMode.MAN,
)

ARMED = GuardView(GuardState.ARMED, holder=TOKEN, heartbeat_echo=7)


def reading(**changes: Any) -> Sample:
    """A good reading in manual at 40 % PV and 50 % OP, with changes."""
    return replace(GOOD, **changes)


def found(op_pct: float = 50.0, sp_pct: float | None = 40.0, **changes: Any) -> AsFound:
    """A loop as found, from a good reading with changes."""
    return AsFound(op_pct, sp_pct, reading(**{"op_pct": op_pct, "sp_pct": sp_pct, **changes}))


def guard(**changes: Any) -> GuardView:
    """An armed guard that holds the loop for us, with changes."""
    return replace(ARMED, **changes)


def held(**changes: Any) -> Held:
    """Our hold of a loop that stands, confirmed, at 50 %, with changes."""
    at_rest = Held(op_pct=50.0, token=TOKEN, sequence=1, heartbeat=8, op_may_read_pct=(50.0, 50.0))
    return replace(at_rest, **changes)


def view(**changes: Any) -> View:
    """What the interlocks see of a loop with which all is well, with changes."""
    well = View(t_s=100.0, plan=plan_for(), sample=GOOD, as_found=found(), held=held(), trace=Trace(), moved_s=90.0)
    return replace(well, **changes)
