"""From a loop's configuration to the plan of one test.  Pure."""

from dataclasses import replace

from autotune.config.places import CLOCK_TAGS
from autotune.config.types import Controller, LoopConfig
from autotune.experiment.plan import TestPlan
from autotune.loop.limits import Limits

_HEARTBEAT_SHARE = 0.5
_TAKE_OVER_SCANS = 20
_TAKE_OVER_AT_LEAST_S = 5.0


def plan_for(loop: LoopConfig, token: int, *, is_no_guard_accepted: bool = False) -> TestPlan:
    """The plan of one test of ``loop``, held by ``token`` (1 .. 2^32-1).

    ``is_no_guard_accepted``: a person's recorded consent to test without a guard; it counts only where
    the configuration and the site allow to ask for it.  Raises ``ValueError`` for a token out of range.
    """
    if not 1 <= token <= 2**32 - 1:
        raise ValueError(f"a holder's token is 1 .. 2^32-1, not {token}")
    return TestPlan(
        loop=loop.name,
        action=loop.action,
        limits=timed_limits(loop.limits, loop.scan_s, loop.controller, loop.guard_timeout_s),
        relay=loop.relay,
        convergence=loop.convergence,
        scan_s=loop.scan_s,
        plc_scan_s=loop.controller.plc_scan_s,
        has_guard=loop.has_guard,
        token=token,
        accepts_no_guard=loop.allows_no_guard and is_no_guard_accepted,
        has_clock_tags=all(loop.tag(name) is not None for name in CLOCK_TAGS),
        sp_tracks_in_manual=loop.block.sp_tracks_in_manual,
        look_around_s=loop.look_around_s,
        baseline_s=loop.baseline_s,
        baseline_noise_at_most_pct=loop.baseline_noise_at_most_pct,
        baseline_drift_at_most_pct_per_s=loop.baseline_drift_at_most_pct_per_s,
        take_over_within_s=max(_TAKE_OVER_AT_LEAST_S, _TAKE_OVER_SCANS * loop.scan_s),
        hand_back_within_s=loop.hand_back_within_s,
    )


def timed_limits(limits: Limits, scan_s: float, controller: Controller, guard_timeout_s: float | None) -> Limits:
    """The limits with the three times that follow from scans (s), so that no file has to tell them.

    ``op_move_s``: a write may take a request's deadline, then waits for two of the PLC's scans and its
    I/O, the largest swing takes its time at the permitted rate, and it is seen with our next reading.
    ``sample_age_s``: the reading's deadline, one PLC scan with its I/O, and one scan of ours.
    ``heartbeat_s``: half of the guard's patience but never less than two scans, so always before the
    guard, which outlasts at least three; without a guard there is no echo to wait for and the age of a
    sample serves.
    """
    plc_scan_s = controller.plc_scan_s if controller.plc_scan_s is not None else scan_s
    swing_pct = limits.step_up_pct + limits.step_down_pct
    rate_s = swing_pct / limits.op_rate_pct_per_s if limits.op_rate_pct_per_s is not None else 0.0
    age_s = controller.endpoint.request_timeout_s + plc_scan_s + controller.io_time_s + scan_s
    heartbeat_s = age_s if guard_timeout_s is None else max(_HEARTBEAT_SHARE * guard_timeout_s, 2 * scan_s)
    return replace(
        limits,
        op_move_s=controller.endpoint.request_timeout_s + 2 * plc_scan_s + controller.io_time_s + rate_s + scan_s,
        sample_age_s=age_s,
        heartbeat_s=heartbeat_s,
    )
