"""Which way proposals are made: from the fitted plant where there is one, from the ultimate point otherwise."""

from dataclasses import dataclass

from autotune.design.model_proposals import propose_from_model
from autotune.design.proposal import ProposalSheet
from autotune.design.propose import propose
from autotune.identify.findings import Findings
from autotune.loop.mode import ControlAction
from autotune.loop.settings import BlockDescription, BlockFields
from autotune.loop.span import Span


@dataclass(frozen=True, slots=True)
class DesignTask:
    """All that proposals rest on; it crosses into a worker process.

    ``present`` are the numbers in the controller now, ``noise_pct`` the standard deviation of PV at rest.
    """

    findings: Findings
    block: BlockDescription
    action: ControlAction
    pv_span: Span
    present: BlockFields | None
    noise_pct: float | None


def proposals_for(task: DesignTask) -> ProposalSheet:
    """All proposals side by side.

    A fitted plant carries the robust optimum and a forecast for each; that needs the block's own scan, so
    without it, or without a plant, the rules that need only the ultimate point are told.
    """
    findings = task.findings
    if findings.model is None or task.block.scan_s is None:
        return propose(
            ultimate=findings.ultimate,
            static_gain=findings.static_gain,
            block=task.block,
            action=task.action,
            pv_span=task.pv_span,
            present=task.present,
            noise_pct=task.noise_pct,
        )
    return propose_from_model(
        model=findings.model,
        block=task.block,
        action=task.action,
        pv_span=task.pv_span,
        present=task.present,
        noise_pct=task.noise_pct,
    )
