"""Published rules for a plant that integrates, as rows."""

from functools import partial

from autotune.design import model_laws as laws
from autotune.design.choices import Purpose
from autotune.design.model_rules import AMIGO, CHIEN_FRUEHAUF, RINGS, SIMC, ZIEGLER_NICHOLS, Basis, ModelRule
from autotune.loop.settings import PidForm

INTEGRATOR_RULES: tuple[ModelRule, ...] = (
    ModelRule(
        "simc-integrator-pi",
        "SIMC PI (integrating)",
        Basis.INTEGRATOR,
        lambda m: laws.simc_integrator_pi(m, m.dead_time_s),
        PidForm.SERIES,
        f"{SIMC}, integrating process, PI, tc = L",
        "a level or another integrating loop held at its setpoint",
        (Purpose.REGULATE, Purpose.FOLLOW),
        "needs some dead time in the reduced model",
    ),
    ModelRule(
        "simc-integrator-pid",
        "SIMC PID (integrating)",
        Basis.INTEGRATOR_WITH_LAG,
        lambda m: laws.simc_integrator_pid(m, m.dead_time_s),
        PidForm.SERIES,
        f"{SIMC}, integrating process with lag, PID in series form, tc = L",
        "an integrating loop with a clear lag and a quiet PV",
        (Purpose.REGULATE, Purpose.FOLLOW),
        "series form",
    ),
    ModelRule(
        "imc-integrator-pi",
        "IMC PI (integrating, case M)",
        Basis.INTEGRATOR,
        lambda m: laws.imc_integrator_pi(m, 2.0 * m.dead_time_s),
        PidForm.IDEAL,
        f"{CHIEN_FRUEHAUF}, case M; tc = 2 L",
        "a level or another integrating loop held at its setpoint",
        (Purpose.REGULATE, Purpose.FOLLOW),
        "needs some dead time in the reduced model",
    ),
    ModelRule(
        "imc-integrator-pid",
        "IMC PID (integrating, case N)",
        Basis.INTEGRATOR,
        lambda m: laws.imc_integrator_pid(m, 2.0 * m.dead_time_s),
        PidForm.IDEAL,
        f"{CHIEN_FRUEHAUF}, case N; tc = 2 L",
        "an integrating loop with a quiet PV",
        (Purpose.REGULATE, Purpose.FOLLOW),
        "needs some dead time in the reduced model",
    ),
    *(
        ModelRule(
            name,
            title,
            Basis.INTEGRATOR,
            partial(laws.from_integrator, gain=gain, ti_ratio=ti, td_ratio=td),
            PidForm.IDEAL,
            source,
            suits,
            (Purpose.REGULATE,),
            limits,
        )
        for name, title, gain, ti, td, source, suits, limits in (
            (
                "amigo-integrator-pi",
                "AMIGO PI (integrating)",
                0.35,
                13.4,
                None,
                f"{AMIGO}, integrating",
                "an integrating loop, calmly",
                "fitted for Ms 1.4",
            ),
            (
                "amigo-integrator-pid",
                "AMIGO PID (integrating)",
                0.45,
                8.0,
                0.5,
                f"{AMIGO}, integrating",
                "an integrating loop, calmly, with a quiet PV",
                "fitted for Ms 1.4",
            ),
            (
                "tyreus-luyben-integrator-pi",
                "Tyreus-Luyben PI (integrating)",
                0.487,
                8.75,
                None,
                "Tyreus & Luyben 1992, Ind. Eng. Chem. Res. 31:2625, integrator with dead time",
                "an integrating loop against upsets",
                "closed-loop resonance of 2 dB",
            ),
            (
                "ziegler-nichols-integrator-p",
                "Ziegler-Nichols P (integrating)",
                1.0,
                None,
                None,
                f"{ZIEGLER_NICHOLS}, integrating, P",
                "comparison",
                RINGS,
            ),
            (
                "ziegler-nichols-integrator-pi",
                "Ziegler-Nichols PI (integrating)",
                0.9,
                1.0 / 0.3,
                None,
                f"{ZIEGLER_NICHOLS}, integrating, PI",
                "comparison",
                RINGS,
            ),
            (
                "ziegler-nichols-integrator-pid",
                "Ziegler-Nichols PID (integrating)",
                1.2,
                2.0,
                0.5,
                f"{ZIEGLER_NICHOLS}, integrating, PID",
                "comparison",
                RINGS,
            ),
        )
    ),
)
"""Rules for a plant that integrates."""
