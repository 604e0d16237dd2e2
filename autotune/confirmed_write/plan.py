"""What is to be written, and the confirmation bound to it."""

from dataclasses import dataclass

from autotune.loop.settings import BlockFields


@dataclass(frozen=True, slots=True)
class FieldLimit:
    """Floor, ceiling and largest factor against as found, in the field's unit (``None``: no limit)."""

    low: float | None = None
    high: float | None = None
    factor_at_most: float | None = None


@dataclass(frozen=True, slots=True)
class WritePlan:
    """The exact change of one loop's settings.

    ``as_found`` and ``fields`` are the numbers as the controller holds them (already rounded to what its
    registers can hold).  ``order`` lists the field names in the order of writing.  ``block_digest`` and
    ``configuration_digest`` bind the plan to the description it was made for (hex SHA-256).
    ``sp_tracks_in_manual`` says that the setpoint follows PV in manual, so that it has to be given back.
    """

    loop: str
    proposal: str
    as_found: BlockFields
    fields: BlockFields
    order: tuple[str, ...]
    block_digest: str
    configuration_digest: str
    limits: tuple[tuple[str, FieldLimit], ...] = ()
    write_in_manual: bool = True
    sp_tracks_in_manual: bool = False


@dataclass(frozen=True, slots=True)
class Confirmation:
    """A person's word for exact values: ``digest`` as typed, single use, good until ``expires_s``."""

    digest: str
    person: str
    given_s: float
    expires_s: float
