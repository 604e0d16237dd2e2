"""The difference equation of a described PID block, one scan at a time.

Backward differences throughout, with h the block's execution (Astrom & Wittenmark, Computer-Controlled
Systems): integral K h/Ti e, derivative d(k) = Td/(Td + N h) d(k-1) + N Td/(Td + N h) (x(k) - x(k-1)), a PV
filter of first order.  A series block puts its derivative before the proportional and integral terms.
The equation describes a block as declared; how a real one differs is for a trial to show.
"""

from dataclasses import dataclass
from math import sqrt

from autotune.loop.conversion import to_form
from autotune.loop.mode import ControlAction
from autotune.loop.outcome import Refusal
from autotune.loop.settings import Algorithm, AntiWindup, BlockDescription, DerivativeOn, PidForm, PidSettings


@dataclass(frozen=True, slots=True)
class PidLaw:
    """A block with its settings, complete; made by ``pid_law``.

    ``scan_s`` is the execution, ``op_low_pct`` and ``op_high_pct`` the output's limits, in percent of span.
    """

    block: BlockDescription
    settings: PidSettings
    action: ControlAction
    scan_s: float
    op_low_pct: float
    op_high_pct: float


@dataclass(frozen=True, slots=True)
class PidState:
    """What the block remembers between two scans; everything in percent of span.

    ``integral_pct`` is the sum of the integral term (with the bias), ``op_pct`` the limited output,
    ``derivative_pct`` the filtered derivative before the gain, ``lead_pct`` what it acts on, and
    ``proportional_pct`` the proportional and derivative part of the output.
    """

    integral_pct: float
    op_pct: float
    pv_filtered_pct: float
    lead_pct: float
    derivative_pct: float
    proportional_pct: float


def pid_law(
    block: BlockDescription, settings: PidSettings, action: ControlAction, op_low_pct: float, op_high_pct: float
) -> PidLaw | Refusal:
    """The block ready to run.  Refuses what decides its behaviour and isn't declared.

    Codes: ``SCAN_NOT_DECLARED``, ``ANTI_WINDUP_NOT_DECLARED``, and those of ``to_form``.
    """
    in_form = to_form(settings, block.form)
    if isinstance(in_form, Refusal):
        return in_form
    if block.scan_s is None:
        return Refusal("SCAN_NOT_DECLARED", "the block's execution time is not declared", "declare scan_s")
    if block.algorithm is Algorithm.POSITIONAL and block.anti_windup is AntiWindup.NOT_DECLARED:
        return Refusal(
            "ANTI_WINDUP_NOT_DECLARED",
            "it is not declared what the block does with its integral at an output limit",
            "declare the block's anti-windup",
        )
    return PidLaw(block, in_form, action, block.scan_s, op_low_pct, op_high_pct)


def at_rest(law: PidLaw, sp_pct: float, pv_pct: float, op_pct: float) -> PidState:
    """The state from which the block goes on without a bump: a steady PV and the output as it is, in percent."""
    lead_pct = _lead_pct(law, sp_pct, pv_pct)
    proportional_pct = _proportional_pct(law, sp_pct, pv_pct, 0.0)
    return PidState(op_pct - proportional_pct, op_pct, pv_pct, lead_pct, 0.0, proportional_pct)


def step(law: PidLaw, state: PidState, sp_pct: float, pv_pct: float) -> tuple[PidState, float]:
    """One scan: setpoint and PV in, the next state and the limited output (percent of span) out."""
    block, settings, h_s = law.block, law.settings, law.scan_s
    pv_filtered_pct = state.pv_filtered_pct + (pv_pct - state.pv_filtered_pct) * h_s / (h_s + block.pv_filter_time_s)
    lead_pct = _lead_pct(law, sp_pct, pv_filtered_pct)
    derivative_pct = _derivative_pct(law, state, lead_pct)
    proportional_pct = _proportional_pct(law, sp_pct, pv_filtered_pct, derivative_pct)
    integral_step_pct = 0.0
    if settings.integral_time_s is not None:
        error_pct = law.action.process_sign * (sp_pct - pv_filtered_pct)
        if block.form is PidForm.SERIES:
            error_pct += derivative_pct
        integral_step_pct = settings.controller_gain * h_s / settings.integral_time_s * error_pct
    if block.algorithm is Algorithm.INCREMENTAL:
        # The limited output is the only memory: nothing can wind up, whatever is declared.
        wanted_pct = state.op_pct + proportional_pct - state.proportional_pct + integral_step_pct
        op_pct = _limited_pct(law, wanted_pct)
        integral_pct = op_pct - proportional_pct
    else:
        wanted_pct = proportional_pct + state.integral_pct + integral_step_pct
        op_pct = _limited_pct(law, wanted_pct)
        integral_pct = state.integral_pct + _allowed_step_pct(law, integral_step_pct, op_pct - wanted_pct)
    return PidState(integral_pct, op_pct, pv_filtered_pct, lead_pct, derivative_pct, proportional_pct), op_pct


def _lead_pct(law: PidLaw, sp_pct: float, pv_pct: float) -> float:
    """What the derivative acts on, signed so that a rising one raises the output."""
    sp_part_pct = sp_pct if law.block.derivative_on is DerivativeOn.ERROR else 0.0
    return law.action.process_sign * (sp_part_pct - pv_pct)


def _derivative_pct(law: PidLaw, state: PidState, lead_pct: float) -> float:
    td_s = law.settings.derivative_time_s
    if td_s is None:
        return 0.0
    change_pct = lead_pct - state.lead_pct
    ratio = law.block.derivative_filter_ratio
    if ratio is None:
        return td_s / law.scan_s * change_pct
    return (td_s * state.derivative_pct + ratio * td_s * change_pct) / (td_s + ratio * law.scan_s)


def _proportional_pct(law: PidLaw, sp_pct: float, pv_pct: float, derivative_pct: float) -> float:
    weighted_pct = law.action.process_sign * (law.block.setpoint_weight * sp_pct - pv_pct)
    return law.settings.controller_gain * (weighted_pct + derivative_pct)


def _limited_pct(law: PidLaw, wanted_pct: float) -> float:
    return min(max(wanted_pct, law.op_low_pct), law.op_high_pct)


def _allowed_step_pct(law: PidLaw, step_pct: float, cut_pct: float) -> float:
    """What anti-windup leaves of the integral's step; ``cut_pct`` is what the limit took from the output."""
    ti_s, td_s = law.settings.integral_time_s, law.settings.derivative_time_s
    if cut_pct == 0.0 or ti_s is None:
        return step_pct
    match law.block.anti_windup:
        case AntiWindup.TRACKING:
            # Tracking time Ti, or the geometric mean of Ti and Td (Astrom & Hagglund, PID Controllers, 1995).
            tracking_time_s = ti_s if td_s is None else sqrt(ti_s * td_s)
            return step_pct + min(1.0, law.scan_s / tracking_time_s) * cut_pct
        case AntiWindup.CONDITIONAL:
            return 0.0 if step_pct * cut_pct < 0.0 else step_pct
        case _:
            return 0.0
