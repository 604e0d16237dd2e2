"""The wire.  It decides nothing and writes only what the write list holds."""

from autotune.config.types import LoopConfig, ModbusEndpoint, ModbusTag
from autotune.field.link import LoopLink


def open_link(loop: LoopConfig) -> LoopLink:
    """A link, not yet connected, for one loop's tags and its write list, after the endpoint's protocol.

    Raises ``NotImplementedError`` for a protocol that has no link here.
    """
    endpoint = loop.controller.endpoint
    if isinstance(endpoint, ModbusEndpoint):
        from autotune.field.modbus.link import ModbusLink  # a protocol's library is loaded only where it is spoken
        from autotune.field.write_list import build_write_list

        tags = [(name, tag) for name, tag in loop.tags if isinstance(tag, ModbusTag)]
        return ModbusLink(endpoint, tags, build_write_list(loop))
    raise NotImplementedError(f"{loop.name}: no link speaks to {endpoint}")
