"""A proposal: settings from one rule, in one form, as the controller would hold them."""

from dataclasses import dataclass

from autotune.design.forecast import Forecast
from autotune.loop.outcome import Refusal
from autotune.loop.settings import BlockFields, PidSettings


@dataclass(frozen=True, slots=True)
class Proposal:
    """One column of the comparison.

    ``name`` is stable and typed by the operator (``ziegler-nichols-pi``); ``source`` is paper and
    equation or table.  ``settings`` are the rule's own (form of the paper), ``in_block_form`` the same in
    the block's form, ``fields`` the rounded numbers in the controller's registers, ``rounding_pct``
    the largest relative change that rounding made (percent).  ``gain_factor`` is proposed over
    present gain in the block's form (``None`` without present settings).  ``cautions`` are sentences;
    ``suits`` says in plain words what the rule was made for.  ``forecast`` is what a model says that the
    settings as rounded would do (``None`` without a model, a refusal where the block isn't declared enough).
    """

    name: str
    title: str
    source: str
    settings: PidSettings
    in_block_form: PidSettings
    fields: BlockFields
    rounding_pct: float
    gain_factor: float | None
    cautions: tuple[str, ...] = ()
    suits: str = ""
    forecast: Forecast | Refusal | None = None


@dataclass(frozen=True, slots=True)
class NotProposed:
    """A rule that doesn't suit, and why."""

    name: str
    title: str
    source: str
    refusal: Refusal


@dataclass(frozen=True, slots=True)
class ProposalSheet:
    """All proposals side by side; ``recommended`` names one, or is ``None`` with ``reason`` saying why.

    ``present_forecast`` is what a model says of the settings now in the controller.
    """

    proposals: tuple[Proposal, ...]
    not_proposed: tuple[NotProposed, ...]
    recommended: str | None
    reason: str
    present_forecast: Forecast | Refusal | None = None
