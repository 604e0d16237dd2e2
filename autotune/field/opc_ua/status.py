"""What an OPC UA status code says about a reading and about a write.  Pure.

After OPC 10000-4, 7.39 (severity in the two highest bits; which bits of the lower half belong to the code)
and OPC 10000-6, annex A.2 (the codes).
"""

from asyncua.ua.status_codes import StatusCodes, get_name_and_doc

from autotune.loop.quality import Quality

_CODE = 0xFFFF0000
_SEVERITY = 0xC0000000
_UNCERTAIN = 0x40000000
_CHANGED = 0xC000  # structure or semantics changed: what the number means may be another
_IS_DATA_VALUE = 0x0400  # the limit bits hold only with this one
_LIMITS = 0x0300

_GOOD_QUALITIES = {
    StatusCodes.GoodLocalOverride: Quality.FORCED,
    StatusCodes.GoodClamped: Quality.CLAMPED,
}

_WRITTEN = (StatusCodes.Good, StatusCodes.GoodOverload)

_SURELY_UNDONE = (
    StatusCodes.BadNodeIdInvalid,
    StatusCodes.BadNodeIdUnknown,
    StatusCodes.BadAttributeIdInvalid,
    StatusCodes.BadIndexRangeInvalid,
    StatusCodes.BadIndexRangeNoData,
    StatusCodes.BadNotWritable,
    StatusCodes.BadWriteNotSupported,
    StatusCodes.BadTypeMismatch,
    StatusCodes.BadOutOfRange,
    StatusCodes.BadUserAccessDenied,
    StatusCodes.BadSecurityModeInsufficient,
    StatusCodes.BadNotSupported,
    StatusCodes.BadLocked,
    StatusCodes.BadServiceUnsupported,
    StatusCodes.BadTooManyOperations,
    StatusCodes.BadNothingToDo,
    StatusCodes.BadDecodingError,
    StatusCodes.BadEncodingLimitsExceeded,
    StatusCodes.BadRequestTooLarge,
    StatusCodes.BadRequestHeaderInvalid,
)

_ENDS_THE_SESSION = (
    StatusCodes.BadSessionIdInvalid,
    StatusCodes.BadSessionClosed,
    StatusCodes.BadSessionNotActivated,
    StatusCodes.BadSecureChannelIdInvalid,
    StatusCodes.BadSecureChannelClosed,
    StatusCodes.BadSecureChannelTokenUnknown,
    StatusCodes.BadTcpSecureChannelUnknown,
    StatusCodes.BadConnectionClosed,
    StatusCodes.BadServerHalted,
    StatusCodes.BadShutdown,
)


def to_quality(code: int) -> Quality:
    """How far a reading with this status may be trusted; what the standard reserves is ``BAD``."""
    severity = code & _SEVERITY
    if severity == _UNCERTAIN:
        return Quality.UNCERTAIN
    if severity:
        return Quality.BAD
    found = _GOOD_QUALITIES.get(code & _CODE)
    if found is not None:
        return found
    if code & _IS_DATA_VALUE and code & _LIMITS:
        return Quality.CLAMPED
    return Quality.UNCERTAIN if code & _CHANGED else Quality.GOOD


def in_words(code: int) -> str:
    """The status by its name in the standard, with what it means."""
    name, meaning = get_name_and_doc(code & _CODE)
    flags = ", limited" if code & _IS_DATA_VALUE and code & _LIMITS else ""
    flags += ", its meaning changed" if code & _CHANGED else ""
    return f"{name} ({code:08X}h{flags}): {meaning or 'which the standard does not explain'}".rstrip(". ")


def is_written(code: int) -> bool:
    """Whether a write answered with this status is done as asked, not later, elsewhere or otherwise."""
    return code & _CODE in _WRITTEN


def is_surely_undone(code: int) -> bool:
    """Whether a write answered with this status changed nothing; of any other it isn't known."""
    return code & _CODE in _SURELY_UNDONE


def ends_the_session(code: int) -> bool:
    """Whether only a fresh connection helps."""
    return code & _CODE in _ENDS_THE_SESSION
