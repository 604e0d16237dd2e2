"""Reading one loop: a fresh connection when there is none, then one coalesced request."""

from autotune.config.types import LoopConfig
from autotune.errors import LinkError
from autotune.field.link import LoopLink, ReadReport
from autotune.field.translate import sample_tags, settings_tags, to_block_fields, to_sample
from autotune.loop.sample import Sample
from autotune.loop.settings import BlockFields


class LoopReader:
    """Reads samples and settings of one loop over one link; reconnects, since links never do by themselves."""

    def __init__(self, loop: LoopConfig, link: LoopLink) -> None:
        self._loop = loop
        self._link = link
        self._sample_tags = sample_tags(loop)
        self._settings_tags = settings_tags(loop)

    @property
    def has_settings(self) -> bool:
        """Whether the loop tells where its settings lie."""
        return bool(self._settings_tags)

    async def read_sample(self) -> Sample:
        """One reading of the loop.  Raises ``LinkError``; the next call connects afresh."""
        return to_sample(self._loop, await self._read(self._sample_tags))

    async def read_settings(self) -> BlockFields:
        """The settings as the controller holds them.  Raises ``LinkError`` also when one is not a number."""
        return self._fields(await self._read(self._settings_tags))

    async def read_settings_and_sample(self) -> tuple[BlockFields, Sample]:
        """Settings and loop in one reading.  Raises as ``read_settings``."""
        report = await self._read((*self._sample_tags, *self._settings_tags))
        return self._fields(report), to_sample(self._loop, report)

    def _fields(self, report: ReadReport) -> BlockFields:
        fields = to_block_fields(self._loop, report)
        if fields is None:
            raise LinkError(f"{self._loop.name}: a settings register holds no number; compare with the panel")
        return fields

    async def _read(self, names: tuple[str, ...]) -> ReadReport:
        if not self._link.is_connected:
            await self._link.connect()
        return await self._link.read(names)
