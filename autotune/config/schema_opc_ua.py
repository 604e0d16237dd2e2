"""``[controller.NAME]`` with ``protocol = "opc-ua"``: one OPC UA server, how far it is trusted, and as whom we come."""

from typing import Annotated, Literal

from pydantic import Field

from autotune.config.numbers import CHOICE, Seconds, SecondsOrNone, Table, Words
from autotune.config.types import MessageSecurity, SecurityPolicy

Thumbprint = Annotated[str, Field(pattern=r"^(?:[0-9A-Fa-f]{2}[:\s]?){31}[0-9A-Fa-f]{2}$")]
"""SHA-256 of a certificate: 64 hex digits; colons or spaces between the bytes don't matter."""


class OpcUaControllerTable(Table):
    """``[controller.NAME]``: one OPC UA server and how to reach it."""

    protocol: Literal["opc-ua"] = Field(description='the protocol: "opc-ua"')
    url: str = Field(
        max_length=400,
        pattern=r"^opc\.tcp://(?:[A-Za-z0-9.\-_]+|\[[0-9A-Fa-f:.]+\])(?::\d{1,5})?(?:/[^\s@?#]*)?$",
        description='the server\'s address, "opc.tcp://HOST:PORT/PATH", without user and password; port 4840 if none',
    )
    security: Annotated[MessageSecurity, CHOICE] = Field(
        default=MessageSecurity.SIGN_AND_ENCRYPT,
        description='"sign and encrypt", "sign", or "none" where the server has no security (every sheet says so)',
    )
    security_policy: Annotated[SecurityPolicy, CHOICE] | None = Field(
        default=None, description="Basic256Sha256, Aes128Sha256RsaOaep or Aes256Sha256RsaPss"
    )
    server_thumbprint: Thumbprint | None = Field(
        default=None,
        description="SHA-256 thumbprint of the server's certificate, 64 hex digits, compared at the server",
    )
    server_name: Words | None = Field(
        default=None, description="host name in the server's certificate, where it is reached by another name"
    )
    user: Words | None = Field(default=None, description="user name; without it and user_certificate anonymous")
    password_from: Annotated[str, Field(pattern=r"^(?:env:[A-Za-z_][A-Za-z0-9_]*|file:[^\x00-\x1f\x7f]+)$")] | None = (
        Field(
            default=None, description='"env:NAME" (an environment variable) or "file:NAME" (first line), never itself'
        )
    )
    user_certificate: Words | None = Field(
        default=None, description="file with the user's own certificate (DER or PEM), relative to this file"
    )
    user_key: Words | None = Field(default=None, description="file with the key of user_certificate, relative to it")
    plc_scan_s: Seconds | None = Field(default=None, description="the PLC's own scan, s")
    io_time_s: SecondsOrNone = Field(default=0.0, description="time that inputs and outputs need beside the scan, s")
    request_timeout_s: Seconds | None = Field(
        default=None, le=10, description="deadline of one request, s (at most 10)"
    )
    connect_gap_s: SecondsOrNone | None = Field(
        default=None, le=60, description="shortest time between two connections, s"
    )
    channel_lifetime_s: Annotated[float, Field(ge=1, le=86_400)] | None = Field(
        default=None, description="how long the keys of a connection are used before they are renewed, s"
    )
    source_time_is_sampling: bool | None = Field(
        default=None,
        description="true only where source timestamps are shown to be the instants of sampling, by our own time",
    )
