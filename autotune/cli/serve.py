"""``serve``: the daemon with its page."""

import sys

import structlog

from autotune.cli.exit_codes import ExitCode
from autotune.cli.printing import Voice
from autotune.service.console_keeper import PageAddress
from autotune.service.local_views import ServingAnswer
from autotune.service.persons import PersonBook
from autotune.service.serving import serve
from autotune.service.workplace import Workplace


async def run(
    voice: Voice, workplace: Workplace, address: PageAddress, *, is_watch_only: bool, lock_after_min: float
) -> ExitCode:
    """Serve until asked to end; the log goes to standard error, one JSON object a line."""
    structlog.configure(
        processors=[
            structlog.processors.add_log_level,
            structlog.processors.TimeStamper(fmt="iso", utc=True),
            structlog.processors.JSONRenderer(),
        ],
        logger_factory=structlog.PrintLoggerFactory(sys.stderr),
    )
    is_empty = not PersonBook(workplace.data_dir).accounts()

    def ready(url: str) -> None:
        voice.say(f"The page: {url}", style="head")
        if is_empty:
            file = workplace.configuration.file
            voice.say(f"Nobody can sign in yet: 'autotune person add {file} NAME --role test --role write'.", "caution")
        voice.say("Ctrl-C ends the service; every loop is handed back first.")
        voice.answer(ServingAnswer(page=url))

    await serve(workplace, address, is_watch_only=is_watch_only, lock_after_s=60.0 * lock_after_min, on_ready=ready)
    return ExitCode.DONE
