"""How the log is written: one line an event, as JSON for machines or plain for people, without tracebacks.

Every part of the program speaks through the standard library's `logging`; its words and extra fields are
brought into one form here, those of the HTTP server and of the libraries too. A traceback may hold what a
sender sent, so that of an exception only kind and place are written.
"""

from __future__ import annotations

import logging
import sys
from typing import IO, Any, Final, Literal

import structlog
from structlog.typing import EventDict, Processor

Form = Literal["json", "console"]
Level = Literal["debug", "info", "warning", "error"]

# libraries that say at these levels what they send and ask: addresses, statements and their parameters
_QUIET: Final = ("httpx", "httpcore", "sqlalchemy", "asyncio", "multipart", "alembic")


def place(error: BaseException) -> str:
    """File and line where an exception was raised."""
    trace = error.__traceback__
    while trace and trace.tb_next:
        trace = trace.tb_next
    return f"{trace.tb_frame.f_code.co_filename}:{trace.tb_lineno}" if trace else "(nowhere)"


def start_logging(form: Form, level: Level, stream: IO[str] | None = None) -> logging.Handler:
    """Everything that is logged in this process goes to `stream` (else standard error) in one form.

    Returns:
        The handler, for who wants to take it away again.
    """
    handler = logging.StreamHandler(stream or sys.stderr)
    handler.setFormatter(formatter(form))
    root = logging.getLogger()
    root.addHandler(handler)
    root.setLevel(level.upper())
    for name in _QUIET:
        logging.getLogger(name).setLevel(logging.WARNING)
    return handler


def formatter(form: Form) -> logging.Formatter:
    """Writes a line of the standard library's logging as JSON, or for a person."""
    shared: list[Processor] = [
        structlog.stdlib.add_log_level,
        structlog.stdlib.add_logger_name,
        structlog.stdlib.ExtraAdder(),
        structlog.contextvars.merge_contextvars,
        structlog.processors.TimeStamper(fmt="iso", utc=True, key="time"),
        _kind_and_place,
    ]
    last: list[Processor] = [structlog.processors.JSONRenderer()]
    if form == "console":
        last = [_one_line, structlog.dev.ConsoleRenderer(colors=False, pad_event_to=30)]
    return structlog.stdlib.ProcessorFormatter(
        foreign_pre_chain=shared,
        processors=[structlog.stdlib.ProcessorFormatter.remove_processors_meta, *last],
    )


def _kind_and_place(_logger: Any, _method: str, line: EventDict) -> EventDict:
    """Kind and place of an exception instead of its text and traceback."""
    raised = line.pop("exc_info", None)
    error = raised[1] if isinstance(raised, tuple) else raised
    if isinstance(error, BaseException):
        line["error"], line["place"] = type(error).__name__, place(error)
    line.pop("stack_info", None)
    line.pop("color_message", None)  # the HTTP server's, once more
    return line


def _one_line(_logger: Any, _method: str, line: EventDict) -> EventDict:
    """Nothing that a terminal would take for a command, or a reader for another line."""
    for key, value in line.items():
        if isinstance(value, str) and not value.isprintable():
            line[key] = value.strip().encode("unicode_escape").decode("ascii")
    return line
