"""A PID block as PLCs have them: a difference equation at its own scan.

Backward differences throughout.  With e = s (SP - PV), s = +1 for reverse and -1 for direct action,
p = s (b SP - PV), and the derivative of x = -s PV or e filtered as Kd s / (1 + (Td/N) s):

    ideal, parallel   u = K p + I + D          I += Ki h e
    series            u = K (p + D1) + I       I += Ki h (e + D1), D1 the derivative with Td in place of Kd

(Astrom & Hagglund, "PID Controllers", 2nd ed. 1995, chapters 3.2-3.6: forms, filter, weights, windup, increments.)
Changed settings act from the next scan on and don't by themselves move the output.
"""

from dataclasses import dataclass
from math import isfinite

from simulator.block import Algorithm, AntiWindup, BlockSpec, Form, Mode, Settings, to_terms


@dataclass(slots=True)
class _Memory:
    """What the block remembers from one scan to the next (percent)."""

    integral_pct: float = 0.0
    derivative: float = 0.0
    derived_pct: float = 0.0
    proportional_pct: float = 0.0


class PidBlock:
    """One block, at rest at ``pv_pct``, ``sp_pct`` and ``op_pct`` when created.  Percent of span.

    ``execute`` is one scan of the block.  All the rest is what a panel may do between scans.
    """

    def __init__(
        self,
        spec: BlockSpec,
        settings: Settings,
        *,
        pv_pct: float,
        sp_pct: float,
        op_pct: float,
        mode: Mode = Mode.AUTO,
    ) -> None:
        self.spec = spec
        self.sp_pct = sp_pct
        self.op_pct = op_pct
        self._settings = settings
        self._terms = to_terms(spec, settings)
        self._mode = mode
        self._memory = _Memory()
        self._is_memory_stale = False
        self._settle(pv_pct)

    @property
    def mode(self) -> Mode:
        """MAN, AUTO or CAS."""
        return self._mode

    @mode.setter
    def mode(self, mode: Mode) -> None:
        self._mode = mode
        self._is_memory_stale = True

    @property
    def settings(self) -> Settings:
        """The settings in the block's own form and units."""
        return self._settings

    @settings.setter
    def settings(self, settings: Settings) -> None:
        terms = to_terms(self.spec, settings)  # raises before anything changes
        self._memory.integral_pct += (self._terms.gain - terms.gain) * self._memory.proportional_pct
        self._settings, self._terms = settings, terms

    def check_settings(self, settings: Settings) -> None:
        """Raise ``ValueError`` when the block can't run on these settings."""
        to_terms(self.spec, settings)

    @property
    def is_at_high_clamp(self) -> bool:
        """Whether the output stands at its upper clamp."""
        return self.op_pct >= self.spec.op_high_pct

    @property
    def is_at_low_clamp(self) -> bool:
        """Whether the output stands at its lower clamp."""
        return self.op_pct <= self.spec.op_low_pct

    def hold(self, op_pct: float) -> None:
        """Put the output at ``op_pct``, within the clamps, as a person in manual or a tracking slave does."""
        self.op_pct = self._clamp(op_pct)
        self._is_memory_stale = True

    def execute(self, pv_pct: float) -> None:
        """One scan.  An unusable PV holds the output."""
        if not isfinite(pv_pct):
            self._is_memory_stale = True
            return
        if self._mode is Mode.MAN:
            if self.spec.sp_tracks_in_manual:
                self.sp_pct = pv_pct
            self._settle(pv_pct)
            return
        if self._is_memory_stale:
            self._settle(pv_pct)
        if self.spec.algorithm is Algorithm.INCREMENTAL:
            self._execute_incremental(pv_pct)
        else:
            self._execute_positional(pv_pct)

    def _execute_positional(self, pv_pct: float) -> None:
        memory, terms = self._memory, self._terms
        proportional_pct, derivative_pct, error_pct = self._contributions(pv_pct)
        increment_pct = terms.integral_gain_per_s * self.spec.scan_s * error_pct
        candidate_pct = memory.integral_pct + increment_pct
        wanted_pct = proportional_pct + candidate_pct + derivative_pct
        self.op_pct = self._clamp(wanted_pct)
        excess_pct = wanted_pct - self.op_pct
        match self.spec.anti_windup:
            case _ if excess_pct == 0.0:
                memory.integral_pct = candidate_pct
            case AntiWindup.STOP:
                pass
            case AntiWindup.CONDITIONAL:
                if increment_pct * excess_pct <= 0.0:
                    memory.integral_pct = candidate_pct
            case AntiWindup.TRACKING:
                share = self.spec.scan_s / terms.tracking_time_s if terms.tracking_time_s else 0.0
                memory.integral_pct = candidate_pct - min(share, 1.0) * excess_pct

    def _execute_incremental(self, pv_pct: float) -> None:
        memory, terms = self._memory, self._terms
        before = memory.proportional_pct
        derivative_before = memory.derivative if self.spec.form is not Form.SERIES else 0.0
        proportional_pct, derivative_pct, error_pct = self._contributions(pv_pct)
        increment_pct = terms.integral_gain_per_s * self.spec.scan_s * error_pct
        move_pct = proportional_pct - terms.gain * before + derivative_pct - derivative_before + increment_pct
        self.op_pct = self._clamp(self.op_pct + move_pct)

    def _contributions(self, pv_pct: float) -> tuple[float, float, float]:
        """Proportional part, derivative part (both %) and the error that is integrated, of this scan."""
        memory, terms, sign = self._memory, self._terms, self._terms.sign
        derived_pct = self._derived(pv_pct)
        derivative_gain_s = terms.derivative_time_s if self.spec.form is Form.SERIES else terms.derivative_gain_s
        spread_s = terms.filter_time_s + self.spec.scan_s
        memory.derivative = (
            terms.filter_time_s * memory.derivative + derivative_gain_s * (derived_pct - memory.derived_pct)
        ) / spread_s
        memory.derived_pct = derived_pct
        memory.proportional_pct = sign * (self.spec.setpoint_weight * self.sp_pct - pv_pct)
        error_pct = sign * (self.sp_pct - pv_pct)
        if self.spec.form is Form.SERIES:
            memory.proportional_pct += memory.derivative
            return terms.gain * memory.proportional_pct, 0.0, error_pct + memory.derivative
        return terms.gain * memory.proportional_pct, memory.derivative, error_pct

    def _derived(self, pv_pct: float) -> float:
        return self._terms.sign * ((self.sp_pct if self.spec.is_derivative_on_error else 0.0) - pv_pct)

    def _settle(self, pv_pct: float) -> None:
        """Bumpless: remember what makes the present output the one that the equation gives."""
        memory, terms = self._memory, self._terms
        memory.derivative = 0.0
        memory.derived_pct = self._derived(pv_pct)
        memory.proportional_pct = terms.sign * (self.spec.setpoint_weight * self.sp_pct - pv_pct)
        memory.integral_pct = self.op_pct - terms.gain * memory.proportional_pct
        self._is_memory_stale = False

    def _clamp(self, op_pct: float) -> float:
        return min(max(op_pct, self.spec.op_low_pct), self.spec.op_high_pct)
