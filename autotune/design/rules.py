"""Published rules that turn an ultimate gain and period into settings.  A table; nothing is decided here.

The papers' page numbers are given where a rule was found, equation and table by name: the coefficients
are those commonly printed, checked against public tables, not read from the papers' own pages.
"""

from dataclasses import dataclass

from autotune.loop.settings import PidForm, PidSettings


@dataclass(frozen=True, slots=True)
class UltimateRule:
    """One row: gain = ``gain_ratio`` Ku, Ti = ``integral_ratio`` Tu, Td = ``derivative_ratio`` Tu (``None``: off).

    ``form`` is the PID form that the rule is written for.  ``suits`` says in plain words what it was made
    for, ``limits`` what must be known before it is used.
    """

    name: str
    title: str
    gain_ratio: float
    integral_ratio: float | None
    derivative_ratio: float | None
    form: PidForm
    source: str
    suits: str
    limits: str

    def settings(self, ultimate_gain: float, ultimate_period_s: float) -> PidSettings:
        """The rule's settings in its own form, for Ku in %OP/%PV and Tu in seconds."""
        ti_ratio, td_ratio = self.integral_ratio, self.derivative_ratio
        return PidSettings(
            form=self.form,
            controller_gain=self.gain_ratio * ultimate_gain,
            integral_time_s=None if ti_ratio is None else ti_ratio * ultimate_period_s,
            derivative_time_s=None if td_ratio is None else td_ratio * ultimate_period_s,
        )


_ZIEGLER_NICHOLS = "Ziegler & Nichols 1942, Trans. ASME 64:759, settings from the ultimate sensitivity"
_OVERSHOOT = (
    "Perry & Chilton 1973, Chemical Engineers' Handbook, 5th ed.; McCormack & Godfrey 1998, "
    "IEEE Trans. Control Syst. Technol. 6; table of modified ultimate-cycle settings"
)

ULTIMATE_RULES: tuple[UltimateRule, ...] = (
    UltimateRule(
        name="tyreus-luyben-pi",
        title="Tyreus-Luyben PI",
        gain_ratio=1.0 / 3.2,
        integral_ratio=2.2,
        derivative_ratio=None,
        form=PidForm.IDEAL,
        source="Tyreus & Luyben 1992, Ind. Eng. Chem. Res. 31:2625, PI settings (Ku/3.2, 2.2 Tu)",
        suits="a calm loop that mostly fights upsets",
        limits="made for plants that integrate or lag with some dead time; slow where dead time rules",
    ),
    UltimateRule(
        name="tyreus-luyben-pid",
        title="Tyreus-Luyben PID",
        gain_ratio=1.0 / 2.2,
        integral_ratio=2.2,
        derivative_ratio=1.0 / 6.3,
        form=PidForm.IDEAL,
        source="Luyben & Luyben 1997, Essentials of Process Control, PID settings (Ku/2.2, 2.2 Tu, Tu/6.3)",
        suits="a calm loop with a quiet PV",
        limits="taken as ideal form; read as series form the gain would be 7 % higher",
    ),
    UltimateRule(
        name="no-overshoot-pid",
        title="No-overshoot PID",
        gain_ratio=0.2,
        integral_ratio=1.0 / 2.0,
        derivative_ratio=1.0 / 3.0,
        form=PidForm.IDEAL,
        source=_OVERSHOOT,
        suits="setpoint changes that should not overshoot, with a quiet PV",
        limits="the name is a wish: overshoot depends on the plant; a series block can't hold it (Ti < 4 Td)",
    ),
    UltimateRule(
        name="some-overshoot-pid",
        title="Some-overshoot PID",
        gain_ratio=1.0 / 3.0,
        integral_ratio=1.0 / 2.0,
        derivative_ratio=1.0 / 3.0,
        form=PidForm.IDEAL,
        source=_OVERSHOOT,
        suits="setpoint changes that may overshoot a little, with a quiet PV",
        limits="overshoot depends on the plant; a series block can't hold it (Ti < 4 Td)",
    ),
    UltimateRule(
        name="ziegler-nichols-p",
        title="Ziegler-Nichols P",
        gain_ratio=0.5,
        integral_ratio=None,
        derivative_ratio=None,
        form=PidForm.IDEAL,
        source=f"{_ZIEGLER_NICHOLS}, P (0.5 Ku)",
        suits="a loop where a lasting offset does no harm",
        limits="leaves an offset after every change of load",
    ),
    UltimateRule(
        name="ziegler-nichols-pi",
        title="Ziegler-Nichols PI",
        gain_ratio=0.45,
        integral_ratio=1.0 / 1.2,
        derivative_ratio=None,
        form=PidForm.IDEAL,
        source=f"{_ZIEGLER_NICHOLS}, PI (0.45 Ku, Tu/1.2)",
        suits="comparison; brisk on upsets",
        limits="aims at quarter decay, so it rings; can be unstable on a plant of two or more large lags",
    ),
    UltimateRule(
        name="ziegler-nichols-pid",
        title="Ziegler-Nichols PID",
        gain_ratio=0.6,
        integral_ratio=1.0 / 2.0,
        derivative_ratio=1.0 / 8.0,
        form=PidForm.IDEAL,
        source=f"{_ZIEGLER_NICHOLS}, PID (0.6 Ku, Tu/2, Tu/8)",
        suits="comparison; brisk on upsets with a quiet PV",
        limits="aims at quarter decay, so it rings; can be unstable where dead time rules",
    ),
    UltimateRule(
        name="pessen-pid",
        title="Pessen integral rule PID",
        gain_ratio=0.7,
        integral_ratio=0.4,
        derivative_ratio=0.15,
        form=PidForm.IDEAL,
        source="Pessen 1954, integral rule (0.7 Ku, 0.4 Tu, 0.15 Tu), as commonly printed",
        suits="comparison; the briskest of the table",
        limits="little margin; a series block can't hold it (Ti < 4 Td)",
    ),
)
"""All rules that need no more than the ultimate point, calm ones first."""
