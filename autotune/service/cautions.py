"""The sentences that a person accepts before an output moves or a setting is written.  One place."""

BEFORE_THE_OUTPUT_MOVES = (
    "Autotune is about to move a real output. Only a qualified person may start this test.",
    "The loop owner has given permission, and the operator at the panel knows about the test.",
    "Independent protection (safety functions, relief devices, the plant's alarms) stays in service. "
    "The guard in the PLC and the limits of this test do not replace it.",
    "Someone can reach the panel of this loop during the whole test and may take the loop over at any time.",
    "Site rules, permits and licensed engineering practice come before anything this tool says.",
)

BEFORE_SETTINGS_ARE_WRITTEN = (
    "Autotune is about to change settings in a running controller. Only a qualified person may confirm.",
    "The loop owner has given permission for exactly these values.",
    "Independent protection stays in service. The numbers come from one test at one operating point: "
    "the loop may behave differently at another load.",
    "Watch the loop after the change; the values as found are on the sheet and can be restored.",
    "Site rules, management of change and licensed engineering practice come before anything this tool says.",
)

WHERE_SETTINGS_ARE_PROVED = (
    "Before the output moves, each setting of the controller is written back with the number that it holds, to show "
    "that it can be written. Nobody changes settings at the panel meanwhile: a change in that moment would be undone."
)
