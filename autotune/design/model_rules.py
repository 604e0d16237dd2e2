"""Published rules that need a model, as rows.  A table; nothing is decided here.

Papers and tables by name: the coefficients are those commonly printed, checked against public tables and
recomputed examples, not read from the papers' own pages.
"""

from collections.abc import Callable
from dataclasses import dataclass
from enum import Enum
from functools import partial
from math import inf

from autotune.design import model_laws as laws
from autotune.design.choices import Purpose
from autotune.design.reduction import Ipdt, ReactionCurve, Sotd
from autotune.identify.closed_forms import Fotd
from autotune.loop.settings import PidForm

REGULATE, FOLLOW, AVERAGING, GENTLE = Purpose


class Basis(Enum):
    """What a rule reads from the model."""

    REACTION_CURVE = "the step response's tangent and 63 % time"
    STEP = "the FOTD read off the step response"
    FIRST_ORDER = "the FOTD of the half rule"
    SECOND_ORDER = "the SOTD of the half rule"
    INTEGRATOR = "the integrator with dead time"
    INTEGRATOR_WITH_LAG = "the integrator with lag and dead time"
    FREQUENCY = "the ultimate point and the static gain"


Law = (
    Callable[[ReactionCurve], laws.Terms]
    | Callable[[Fotd], laws.Terms]
    | Callable[[Sotd], laws.Terms]
    | Callable[[Ipdt], laws.Terms]
    | Callable[[laws.UltimateReading], laws.Terms]
)


@dataclass(frozen=True, slots=True)
class ModelRule:
    """One row: what it reads (``basis``), its formula (``law``), the form and source that it comes from.

    ``purposes`` are what it was made for, ``limits`` what must be known before it is used;
    ``dead_time_ratio_low`` and ``dead_time_ratio_high`` bound L/T (for ``FREQUENCY`` kappa): outside, it is refused.
    """

    name: str
    title: str
    basis: Basis
    law: Law
    form: PidForm
    source: str
    suits: str
    purposes: tuple[Purpose, ...]
    limits: str
    dead_time_ratio_low: float = 0.0
    dead_time_ratio_high: float = inf


_I, _S = PidForm.IDEAL, PidForm.SERIES
ZIEGLER_NICHOLS = "Ziegler & Nichols 1942, Trans. ASME 64:759, reaction curve"
_CC = "Cohen & Coon 1953, Trans. ASME 75:827"
_CHR = "Chien, Hrones & Reswick 1952, Trans. ASME 74:175"
_LOPEZ = "Lopez, Miller, Smith & Murrill 1967, Instrum. Technol. 14; Smith & Corripio, load tables"
_ROVIRA = "Rovira, Murrill & Smith 1969, Instrum. Control Syst. 42, setpoint tables"
_IMC = "Rivera, Morari & Skogestad 1986, Ind. Eng. Chem. Process Des. Dev. 25:252"
CHIEN_FRUEHAUF = "Chien & Fruehauf 1990, Chem. Eng. Prog. 86"
SIMC = "Skogestad 2003, J. Process Control 13:291"
AMIGO = "Astrom & Hagglund 2004, J. Process Control 14:635; Advanced PID Control 2006"
_KT = "Astrom & Hagglund 1995, PID Controllers, 2nd ed., chapter 5"
RINGS = "aims at quarter decay, so it rings"
_TABLE = "fitted for L/T from 0.1 to 1 on a lag with dead time; little margin is asked for"


def _quick(m: Fotd) -> float:
    return max(m.dead_time_s, 0.1 * m.time_constant_s)


def _wider(m: Fotd) -> float:
    return max(1.75 * m.dead_time_s, 0.2 * m.time_constant_s)


def _calm(m: Fotd) -> float:
    return max(m.time_constant_s, 3.0 * m.dead_time_s)


def _step(
    name: str, title: str, law: Callable[[Fotd], laws.Terms], source: str, suits: str, purpose: Purpose, limits: str
) -> ModelRule:
    """A rule fitted for 0.1 <= L/T <= 1 on the FOTD of the step response, ideal form."""
    return ModelRule(name, title, Basis.STEP, law, _I, source, suits, (purpose,), limits, 0.1, 1.0)


def _lopez(criterion: str, letters: str, gain: laws.Power, ti: laws.Power | None, td: laws.Power | None) -> ModelRule:
    return _step(
        f"lopez-{criterion.lower()}-{letters.lower()}",
        f"Lopez {criterion} {letters}",
        partial(laws.load_table, gain=gain, ti=ti, td=td),
        f"{_LOPEZ}, {criterion} {letters}",
        "upsets, with the least integrated error and no thought of margins",
        REGULATE,
        _TABLE,
    )


def _rovira(criterion: str, letters: str, gain: laws.Power, ti: laws.Power, td: laws.Power | None) -> ModelRule:
    return _step(
        f"rovira-{criterion.lower()}-{letters.lower()}",
        f"Rovira {criterion} {letters}",
        partial(laws.setpoint_table, gain=gain, ti=ti, td=td),
        f"{_ROVIRA}, {criterion} {letters}",
        "setpoint changes, with the least integrated error",
        FOLLOW,
        _TABLE,
    )


def _chr(
    aim: str, percent: str, letters: str, gain: float, ti: tuple[float, float] | None, td: float | None
) -> ModelRule:
    purpose = FOLLOW if aim == "setpoint" else REGULATE
    return _step(
        f"chr-{aim}-{percent}-{letters.lower()}",
        f"Chien-Hrones-Reswick {aim} {percent} % {letters}",
        partial(laws.chien_hrones_reswick, gain=gain, ti_ratio=ti, td_ratio=td),
        f"{_CHR}, {aim}, {percent} % overshoot, {letters}",
        f"{'setpoint changes' if purpose is FOLLOW else 'upsets'} with about {percent} % overshoot",
        purpose,
        "from analogue simulation of a lag with dead time; printed variants differ by 4 %",
    )


def _kappa_tau(
    letters: str, ms: str, basis: Basis, law: Callable[..., laws.Terms], *bends: laws.Bend | None
) -> ModelRule:
    gain, ti, td = bends
    kind = "step" if basis is Basis.STEP else "frequency"
    return ModelRule(
        name=f"kappa-tau-{kind}-{letters.lower()}-{ms.replace('.', '')}",
        title=f"Kappa-tau ({kind}) {letters}, Ms {ms}",
        basis=basis,
        law=partial(law, gain=gain, ti=ti, td=td),
        form=_I,
        source=f"{_KT}, kappa-tau, {kind} form, {letters}, Ms = {ms}",
        suits=f"upsets, {'calmly' if ms == '1.4' else 'briskly'}",
        purposes=(REGULATE,),
        limits="fitted on a batch of processes that come to rest; the printed Ms is met within 20 %",
    )


_TI_14: laws.Bend = (8.9, -6.6, 3.0)
_TI_KAPPA: laws.Bend = (0.90, -4.4, 2.7)

MODEL_RULES: tuple[ModelRule, ...] = (
    ModelRule(
        "simc-pi",
        "SIMC PI",
        Basis.FIRST_ORDER,
        lambda m: laws.simc_pi(m, m.dead_time_s),
        _S,
        f"{SIMC}, PI, tc = L",
        "upsets and setpoints alike; a good all-round loop",
        (REGULATE, FOLLOW),
        "needs some dead time in the reduced model; Ms is about 1.6 to 1.7",
    ),
    ModelRule(
        "simc-pid",
        "SIMC PID",
        Basis.SECOND_ORDER,
        lambda m: laws.simc_pid(m, m.dead_time_s),
        _S,
        f"{SIMC}, PID in series form, tc = L",
        "a plant of two clear lags with a quiet PV",
        (REGULATE, FOLLOW),
        "series form; worth its derivative where the second lag exceeds the dead time",
    ),
    ModelRule(
        "improved-simc-pi",
        "Improved SIMC PI",
        Basis.FIRST_ORDER,
        lambda m: laws.improved_simc_pi(m, m.dead_time_s),
        _S,
        "Grimholt & Skogestad 2012, IFAC Conf. Advances in PID Control, PI, tc = L",
        "upsets and setpoints alike, better where dead time rules",
        (REGULATE, FOLLOW),
        "needs some dead time in the reduced model",
    ),
    ModelRule(
        "improved-simc-pid",
        "Improved SIMC PID",
        Basis.FIRST_ORDER,
        lambda m: laws.improved_simc_pid(m, m.dead_time_s),
        _S,
        "Grimholt & Skogestad 2018, J. Process Control 70:36, PID in series form, Td = L/3, tc = L",
        "upsets on a lag with dead time, with a quiet PV",
        (REGULATE,),
        "series form",
    ),
    ModelRule(
        "amigo-pi",
        "AMIGO PI",
        Basis.STEP,
        laws.amigo_pi,
        _I,
        f"{AMIGO}, PI from the step response",
        "upsets, calmly",
        (REGULATE, GENTLE),
        "fitted on a batch of processes for Ms 1.4",
    ),
    ModelRule(
        "amigo-pid",
        "AMIGO PID",
        Basis.STEP,
        laws.amigo_pid,
        _I,
        f"{AMIGO}, PID from the step response",
        "upsets, calmly, with a quiet PV",
        (REGULATE,),
        "cautious where L/(L + T) is below 0.3",
    ),
    ModelRule(
        "amigo-frequency-pi",
        "AMIGO (frequency) PI",
        Basis.FREQUENCY,
        laws.amigo_frequency_pi,
        _I,
        f"{AMIGO}, PI from ultimate point and static gain",
        "upsets, calmly",
        (REGULATE, GENTLE),
        "fitted on a batch of processes",
        0.0,
        1.0,
    ),
    ModelRule(
        "amigo-frequency-pid",
        "AMIGO (frequency) PID",
        Basis.FREQUENCY,
        laws.amigo_frequency_pid,
        _I,
        f"{AMIGO}, PID from ultimate point and static gain",
        "upsets, calmly, with a quiet PV",
        (REGULATE,),
        "fitted on a batch of processes",
        0.0,
        1.0,
    ),
    ModelRule(
        "lambda-pi",
        "Lambda PI",
        Basis.FIRST_ORDER,
        lambda m: laws.lambda_pi(m, _calm(m)),
        _I,
        f"{CHIEN_FRUEHAUF}, lambda tuning; lambda = T or 3 L, the larger (common practice, no source)",
        "setpoint changes without overshoot, sparing the valve",
        (FOLLOW, GENTLE),
        "slow against upsets where the lag is long",
    ),
    ModelRule(
        "imc-improved-pi",
        "IMC improved PI",
        Basis.FIRST_ORDER,
        lambda m: laws.imc_improved_pi(m, _wider(m)),
        _I,
        f"{_IMC}, improved PI; lambda = 1.75 L or 0.2 T, the larger (lambda > 1.7 L)",
        "setpoint changes",
        (FOLLOW,),
        "slow against upsets where the lag is long",
    ),
    ModelRule(
        "imc-pid",
        "IMC PID",
        Basis.FIRST_ORDER,
        lambda m: laws.imc_pid(m, _quick(m)),
        _I,
        f"{_IMC}, PID; lambda = L or 0.1 T, the larger (lambda > 0.8 L)",
        "setpoint changes, with a quiet PV",
        (FOLLOW,),
        "slow against upsets where the lag is long",
    ),
    _kappa_tau("PI", "1.4", Basis.STEP, laws.kappa_tau_step, (0.29, -2.7, 3.7), _TI_14, None),
    _kappa_tau("PI", "2.0", Basis.STEP, laws.kappa_tau_step, (0.78, -4.1, 5.7), _TI_14, None),
    _kappa_tau("PID", "1.4", Basis.STEP, laws.kappa_tau_step, (3.8, -8.4, 7.3), (5.2, -2.5, -1.4), (0.89, -0.37, -4.1)),
    _kappa_tau(
        "PID", "2.0", Basis.STEP, laws.kappa_tau_step, (8.4, -9.6, 9.8), (3.2, -1.5, -0.93), (0.86, -1.9, -0.44)
    ),
    _kappa_tau("PI", "1.4", Basis.FREQUENCY, laws.kappa_tau_frequency, (0.053, 2.9, -2.6), _TI_KAPPA, None),
    _kappa_tau("PI", "2.0", Basis.FREQUENCY, laws.kappa_tau_frequency, (0.13, 1.9, -1.3), _TI_KAPPA, None),
    _kappa_tau(
        "PID",
        "1.4",
        Basis.FREQUENCY,
        laws.kappa_tau_frequency,
        (0.33, -0.31, -1.0),
        (0.76, -1.6, -0.36),
        (0.17, -0.46, -2.1),
    ),
    _kappa_tau(
        "PID",
        "2.0",
        Basis.FREQUENCY,
        laws.kappa_tau_frequency,
        (0.72, -1.6, 1.2),
        (0.59, -1.3, 0.38),
        (0.15, -1.4, 0.56),
    ),
    *(
        ModelRule(
            f"ziegler-nichols-step-{letters.lower()}",
            f"Ziegler-Nichols (reaction curve) {letters}",
            Basis.REACTION_CURVE,
            partial(laws.from_intercept, gain=gain, ti_ratio=ti, td_ratio=td),
            _I,
            f"{ZIEGLER_NICHOLS}, {letters}",
            "comparison; brisk on upsets",
            (REGULATE,),
            RINGS,
            0.1,
            1.0,
        )
        for letters, gain, ti, td in (
            ("P", 1.0, None, None),
            ("PI", 0.9, 1.0 / 0.3, None),
            ("PID", 1.2, 2.0, 0.5),
        )
    ),
    _step("cohen-coon-p", "Cohen-Coon P", laws.cohen_coon_p, f"{_CC}, P", "comparison", REGULATE, RINGS),
    _step("cohen-coon-pi", "Cohen-Coon PI", laws.cohen_coon_pi, f"{_CC}, PI", "comparison", REGULATE, RINGS),
    _step("cohen-coon-pd", "Cohen-Coon PD", laws.cohen_coon_pd, f"{_CC}, PD", "comparison", REGULATE, RINGS),
    _step("cohen-coon-pid", "Cohen-Coon PID", laws.cohen_coon_pid, f"{_CC}, PID", "comparison", REGULATE, RINGS),
    _chr("setpoint", "0", "P", 0.3, None, None),
    _chr("setpoint", "0", "PI", 0.35, (1.2, 0.0), None),
    _chr("setpoint", "0", "PID", 0.6, (1.0, 0.0), 0.5),
    _chr("setpoint", "20", "P", 0.7, None, None),
    _chr("setpoint", "20", "PI", 0.6, (1.0, 0.0), None),
    _chr("setpoint", "20", "PID", 0.95, (1.4, 0.0), 0.47),
    _chr("load", "0", "P", 0.3, None, None),
    _chr("load", "0", "PI", 0.6, (0.0, 4.0), None),
    _chr("load", "0", "PID", 0.95, (0.0, 2.4), 0.42),
    _chr("load", "20", "P", 0.7, None, None),
    _chr("load", "20", "PI", 0.7, (0.0, 2.3), None),
    _chr("load", "20", "PID", 1.2, (0.0, 2.0), 0.42),
    _lopez("ISE", "P", (1.411, -0.917), None, None),
    _lopez("ISE", "PI", (1.305, -0.959), (0.492, -0.739), None),
    _lopez("ISE", "PID", (1.495, -0.945), (1.101, -0.771), (0.56, 1.006)),
    _lopez("IAE", "P", (0.902, -0.985), None, None),
    _lopez("IAE", "PI", (0.984, -0.986), (0.608, -0.707), None),
    _lopez("IAE", "PID", (1.435, -0.921), (0.878, -0.749), (0.482, 1.137)),
    _lopez("ITAE", "P", (0.49, -1.084), None, None),
    _lopez("ITAE", "PI", (0.859, -0.977), (0.674, -0.68), None),
    _lopez("ITAE", "PID", (1.357, -0.947), (0.842, -0.738), (0.381, 0.995)),
    _rovira("IAE", "PI", (0.758, -0.861), (1.02, -0.323), None),
    _rovira("IAE", "PID", (1.086, -0.869), (0.74, -0.13), (0.348, 0.914)),
    _rovira("ITAE", "PI", (0.586, -0.916), (1.03, -0.165), None),
    _rovira("ITAE", "PID", (0.965, -0.85), (0.796, -0.1465), (0.308, 0.929)),
)
"""Rules for a plant that comes to rest after a step."""
