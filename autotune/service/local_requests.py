"""The shapes of every question and wish that the daemon hears; the answers are in ``local_api``.

A request is one JSON object with its ``act``.  ``session`` is the token of a screen at which a person signed in;
without one the person is the operating system's user behind the socket.  ``WatchRequest`` is all that a daemon
hears that only watches: none of its acts can write.
"""

from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field

Name = Annotated[str, Field(min_length=1, max_length=200)]
Line = Annotated[str, Field(min_length=3, max_length=300)]
Secret = Annotated[str, Field(max_length=1000, repr=False)]


class Request(BaseModel):
    """Frozen, and nothing unexpected in it."""

    model_config = ConfigDict(frozen=True, extra="forbid", str_strip_whitespace=True)
    session: str = Field(default="", max_length=200, repr=False)


class SignIn(Request):
    """A person at a new screen."""

    act: Literal["sign_in"] = "sign_in"
    name: Name
    secret: Secret


class Unlock(Request):
    """The same person again, at a screen that was left alone."""

    act: Literal["unlock"] = "unlock"
    secret: Secret


class SignOut(Request):
    """A screen is left for good."""

    act: Literal["sign_out"] = "sign_out"


class Touch(Request):
    """Somebody is at the screen."""

    act: Literal["touch"] = "touch"


class WhoAmI(Request):
    """Who is signed in at this screen."""

    act: Literal["who_am_i"] = "who_am_i"


class ListLoops(Request):
    """All loops as last read."""

    act: Literal["list_loops"] = "list_loops"


class ListControllers(Request):
    """How the controllers answer."""

    act: Literal["list_controllers"] = "list_controllers"


class ListSheets(Request):
    """The index of sheets, newest first, of one loop or of all."""

    act: Literal["list_sheets"] = "list_sheets"
    loop: str = Field(default="", max_length=200)


class OpenSheet(Request):
    """One sheet with all that was added to it."""

    act: Literal["open_sheet"] = "open_sheet"
    sheet: Name


class ExportSheet(Request):
    """One sheet as a file for another program, or as a page for a person."""

    act: Literal["export_sheet"] = "export_sheet"
    sheet: Name
    what: Literal["page", "pdf", "samples", "writes", "json"]


class Look(Request):
    """Read a loop for a few seconds and judge its fitness; nothing is written."""

    act: Literal["look"] = "look"
    loop: Name


class WatchLoop(Request):
    """A stream of ``LiveAnswer`` of one loop, the first with the whole trend."""

    act: Literal["watch_loop"] = "watch_loop"
    loop: Name


class WatchLoops(Request):
    """A stream of ``LoopsAnswer``."""

    act: Literal["watch_loops"] = "watch_loops"


class StartTest(Request):
    """A person allows one test: the cautions as shown, the loop's name typed, who answers for it and what protects.

    ``secret`` is asked for once more from a signed-in person.
    """

    act: Literal["start_test"] = "start_test"
    loop: Name
    typed_loop: str = Field(max_length=200)
    accepted: tuple[str, ...]
    loop_owner: Line
    protection: Line
    permit: Line
    secret: Secret = ""


class AbortTest(Request):
    """End the test now and hand the loop back; everybody may."""

    act: Literal["abort_test"] = "abort_test"
    loop: Name


class FinishTest(Request):
    """Finish now and keep what was measured."""

    act: Literal["finish_test"] = "finish_test"
    loop: Name


class SmallerSteps(Request):
    """Smaller steps from the next switch on."""

    act: Literal["smaller_steps"] = "smaller_steps"
    loop: Name


class PlanChange(Request):
    """Read the controller and say exactly what writing a sheet's proposal would change."""

    act: Literal["plan_change"] = "plan_change"
    sheet: Name
    proposal: Name


class PlanRestore(Request):
    """Read the controller and say exactly what writing a sheet's settings as found back would change."""

    act: Literal["plan_restore"] = "plan_restore"
    sheet: Name


class ConfirmChange(Request):
    """Write the plan on the table, confirmed by its digest as typed and the secret once more."""

    act: Literal["confirm_change"] = "confirm_change"
    loop: Name
    typed: str = Field(max_length=100)
    secret: Secret


class DropPlan(Request):
    """Take the plan off the table; nothing is written."""

    act: Literal["drop_plan"] = "drop_plan"
    loop: Name


Stream = WatchLoop | WatchLoops
WatchRequest = (
    SignIn
    | Unlock
    | SignOut
    | Touch
    | WhoAmI
    | ListLoops
    | ListControllers
    | ListSheets
    | OpenSheet
    | ExportSheet
    | Look
    | Stream
)
Wish = AbortTest | FinishTest | SmallerSteps
ActRequest = StartTest | Wish | PlanChange | PlanRestore | ConfirmChange | DropPlan
AnyRequest = WatchRequest | ActRequest

QUESTIONS = ("who_am_i", "list_loops", "list_controllers", "list_sheets", "open_sheet", "export_sheet")
"""Acts that change nothing anywhere, so that a page may ask them by GET."""
STREAMS = ("watch_loop", "watch_loops")
