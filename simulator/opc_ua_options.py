"""The OPC UA options of the command line; ``opc_ua_security`` reads them.

It stands alone, so that asyncua is loaded only when it is needed.
"""

import argparse
from pathlib import Path


def add_options(parser: argparse.ArgumentParser) -> None:
    """Add the options that say how the OPC UA server is guarded."""
    group = parser.add_argument_group("OPC UA", "by default all endpoints are secured and nameless sessions may read")
    group.add_argument("--opc-ua-none", action="store_true", help="offer an endpoint without security as well")
    group.add_argument(
        "--opc-ua-pki",
        metavar="FOLDER",
        type=Path,
        help="keeps the server's certificate and the trusted clients' (trusted/); without it a new one each time",
    )
    group.add_argument("--opc-ua-trust-all", action="store_true", help="trust every client's certificate")
    group.add_argument(
        "--opc-ua-user",
        metavar="NAME:PASSWORD:ROLE",
        action="append",
        default=[],
        help="a person; the role is read or operate; may be repeated",
    )
    group.add_argument(
        "--opc-ua-users", metavar="FILE", type=Path, help="persons from a file, one NAME:PASSWORD:ROLE a line"
    )
    group.add_argument(
        "--opc-ua-user-certificate",
        metavar="FILE:ROLE",
        action="append",
        default=[],
        help="a person with a certificate of their own (DER or PEM); may be repeated",
    )
    group.add_argument(
        "--opc-ua-anonymous",
        choices=["read", "operate", "none"],
        default="read",
        help="what a nameless session may do (default %(default)s)",
    )
