"""Who is at fault, and what to do next.

An expected outcome (a trip, a refusal, a verdict) is a value and is returned.  An exception
says that a contract was broken, and by whom: by us, by the controller or the wire, by the
user's files, or by another master.  Every class says what it means and what to do.
"""


class AutotuneError(Exception):
    """The one root.  Means: nothing by itself.  Do: catch the class that says who is at fault."""

    def __init__(self, *args: object) -> None:
        if type(self) is AutotuneError:
            raise TypeError("AutotuneError says nobody's fault: raise one of its subclasses")
        super().__init__(*args)


class IllegalEvent(AutotuneError):
    """Means: we fed an event that the phase has no entry for.  Do: report it with the journal; it is our fault."""


class WriteForbidden(AutotuneError):
    """Means: we tried to write what the frozen write list lacks.  Do: report it; nothing was sent."""


class LinkError(AutotuneError):
    """Means: the controller or the wire failed.  Do: check power, cable, address and port; the loop was not judged.

    An error raised while writing never means "not applied": read before doing anything else.
    """


class LinkTimeout(LinkError):
    """Means: no answer within the request's own deadline.  Do: check the network; the link was dropped."""


class LinkClosed(LinkError):
    """Means: the controller refused or closed the connection.  Do: check address, port and its free connections."""


class LinkRefused(LinkError):
    """Means: the controller answered with an exception.  Do: check the address and access named in the text."""


class WriteNotVerified(AutotuneError):
    """Means: a write could not be shown to hold.  Do: read the controller's panel and enter the values named."""


class ConfigError(AutotuneError):
    """Means: a file of the user's is wrong.  Do: follow each complaint; it names file, key and remedy."""

    def __init__(self, complaints: "tuple[Complaint, ...]") -> None:
        super().__init__("\n".join(str(complaint) for complaint in complaints))
        self.complaints = complaints


class Complaint:
    """One line about one key of one file.

    Attributes: ``file`` as the user named it, ``key`` in dotted form, ``fault`` what is wrong,
    ``remedy`` what to write instead.
    """

    __slots__ = ("fault", "file", "key", "remedy")

    def __init__(self, file: str, key: str, fault: str, remedy: str) -> None:
        self.file = file
        self.key = key
        self.fault = fault
        self.remedy = remedy

    def __str__(self) -> str:
        return f"{self.file}: {self.key}: {self.fault}; {self.remedy}"

    def __repr__(self) -> str:
        return f"Complaint({self!s})"


class LoopBusy(AutotuneError):
    """Means: another master holds the loop or the endpoint.  Do: finish there; the text says who and since when."""


class SheetError(AutotuneError):
    """Means: the store of sheets is missing, damaged or of a newer version.  Do: run ``autotune sheet verify``."""


class RecordNotKept(SheetError):
    """Means: a test or a write is over and its record could not be kept.  Do: note how it ended, which the text tells.

    ``is_stranded`` says that the loop was not shown to be as found, or its settings not to be the old or the new ones.
    """

    def __init__(self, text: str, *, is_stranded: bool = False) -> None:
        super().__init__(text)
        self.is_stranded = is_stranded


class JournalError(AutotuneError):
    """Means: the journal can't be written or read.  Do: free the disk or mend its rights; no test starts without it."""
