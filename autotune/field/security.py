"""What the protection of a connection costs, in words for the sheet.  Pure."""

from autotune.config.types import Endpoint, MessageSecurity, OpcUaEndpoint


def security_line(endpoint: Endpoint) -> str | None:
    """The line for every sheet of a loop that is reached without security; ``None`` where there is nothing to say."""
    if not isinstance(endpoint, OpcUaEndpoint) or endpoint.security is not MessageSecurity.NONE:
        return None
    return (
        "OPC UA without security: nobody was asked who he is, and readings and writes could be read and changed "
        "on their way"
    )
