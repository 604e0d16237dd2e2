"""The exception codes of Modbus in words, and whether a refused write surely changed nothing.

After MODBUS Application Protocol V1.1b3, section 7; code 7 stems from older documents.
"""

_WORDS = {
    1: "illegal function: the controller does not offer this kind of access",
    2: "illegal data address: no such register or coil, or it may not be accessed like this",
    3: "illegal data value: the controller does not take this number or this many registers",
    4: "server device failure: the controller failed while it tried",
    5: "acknowledge: the controller took the request and needs longer",
    6: "server device busy: try again later",
    7: "negative acknowledge: the controller can't perform the function now",
    8: "memory parity error: the controller's memory failed a check",
    10: "gateway path unavailable: the gateway is misconfigured or overloaded",
    11: "gateway target device failed to respond: it is off, or the device id is wrong",
}

_NOTHING_CHANGED = (1, 2, 3, 6, 10)


def in_words(code: int) -> str:
    """The exception code, with what it means."""
    return f"exception {code:02X}h, {_WORDS.get(code, 'which the standard does not define')}"


def is_surely_undone(code: int) -> bool:
    """Whether a write answered with this code changed nothing.

    A device that failed while it tried (4), that is still at it (5), or that answered a gateway too
    late (11) may have carried the write out.
    """
    return code in _NOTHING_CHANGED
