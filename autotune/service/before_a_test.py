"""What a person is told, and accepts, before a test moves an output."""

from autotune.config.types import LoopConfig
from autotune.experiment.room import allowed_op_pct
from autotune.field.translate import settings_tags
from autotune.loop.limits import AsFound
from autotune.service.cautions import BEFORE_THE_OUTPUT_MOVES, WHERE_SETTINGS_ARE_PROVED
from autotune.service.check import LoopCheck
from autotune.service.readiness import Level


def consents(looked: LoopCheck) -> tuple[str, ...]:
    """What the look found that a person has to accept by name."""
    return tuple(str(finding) for finding in looked.findings if finding.level is Level.CAUTION)


def cautions_before(loop: LoopConfig, looked: LoopCheck) -> tuple[str, ...]:
    """Every sentence that is accepted before this loop's output moves."""
    proof = (WHERE_SETTINGS_ARE_PROVED,) if loop.proves_writable else ()
    return (*BEFORE_THE_OUTPUT_MOVES, *proof, *consents(looked))


def extremes(loop: LoopConfig, looked: LoopCheck) -> tuple[str, ...]:
    """How far the output may go, in which order, and for how long at most."""
    sample = looked.sample
    if sample is None or sample.op_pct is None:
        return ()
    low_pct, high_pct = allowed_op_pct(loop.limits, AsFound(sample.op_pct, sample.sp_pct, sample))
    relay = loop.relay
    low_eu, high_eu = loop.op_span.to_eu(low_pct), loop.op_span.to_eu(high_pct)
    pv_low_eu, pv_high_eu = (loop.pv_span.to_eu(pct) for pct in (loop.limits.pv_low_pct, loop.limits.pv_high_pct))
    swing = (
        ""
        if relay.wanted_swing_pct is None
        else (
            f", steps then fitted for a PV half-swing of {loop.pv_span.delta_to_eu(relay.wanted_swing_pct):g} "
            f"{loop.pv_span.unit}"
        )
    )
    return (
        f"The output stands at {sample.op_pct:.1f} % and will move {relay.first_move.value} first, to "
        f"+{relay.step_up_pct:g} / -{relay.step_down_pct:g} %{swing}.",
        f"It never leaves {low_eu:.1f} .. {high_eu:.1f} {loop.op_span.unit} "
        f"(0 % {loop.op_low_means}, 100 % {loop.op_high_means}).",
        f"PV outside {pv_low_eu:g} .. {pv_high_eu:g} {loop.pv_span.unit} stops the test; "
        f"it takes at most {loop.limits.test_within_s / 60.0:.1f} min or {loop.limits.cycles_at_most} cycles.",
    )


def writes_of_a_test(loop: LoopConfig) -> tuple[str, ...]:
    """Every tag that a test of this loop writes, and when."""
    settings = f"{', '.join(settings_tags(loop))}: before all else, each with the number that it holds"
    proof = (settings,) if loop.proves_writable else ()
    guard = ("holder_request, heartbeat, sequence, op_request: every scan, in one write",) if loop.has_guard else ()
    direct = () if loop.has_guard else ("op: at every switch, and back to the value as found",)
    tracked = ("sp: back to the value as found, after the test",) if loop.block.sp_tracks_in_manual else ()
    tags = (*proof, *guard, *direct, "mode: to MAN before, back to the mode as found after", *tracked)
    return ("Tags that the test writes:", *(f"  {tag}" for tag in tags))
