"""The wire.  It decides nothing and writes only what the write list holds."""

from autotune.config.types import LoopConfig, ModbusEndpoint, ModbusTag, OpcUaTag
from autotune.field.link import LoopLink
from autotune.field.write_list import build_write_list


def open_link(loop: LoopConfig) -> LoopLink:
    """A link, not yet connected, for one loop's tags and its write list, after the endpoint's protocol."""
    endpoint = loop.controller.endpoint
    # A protocol's library is loaded only where it is spoken.
    if isinstance(endpoint, ModbusEndpoint):
        from autotune.field.modbus.link import ModbusLink

        tags = [(name, tag) for name, tag in loop.tags if isinstance(tag, ModbusTag)]
        return ModbusLink(endpoint, tags, build_write_list(loop))
    from autotune.field.opc_ua.link import OpcUaLink

    nodes = [(name, tag) for name, tag in loop.tags if isinstance(tag, OpcUaTag)]
    return OpcUaLink(endpoint, nodes, build_write_list(loop))
