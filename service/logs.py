"""One JSON object a line on stdout: for requests, for the server, and nothing of a caller's data."""

import logging
import traceback
from datetime import UTC, datetime
from pathlib import PurePath
from typing import Any

import orjson

REQUESTS = logging.getLogger("tailrace.requests")


class JsonLine(logging.Formatter):
    """Writes a record whose message is a dict as it is, any other as its text."""

    def format(self, record: logging.LogRecord) -> str:
        """Return the record as one line. Of an exception it tells class and place, never the words."""
        at = datetime.fromtimestamp(record.created, UTC).isoformat(timespec="milliseconds")
        line: dict[str, Any] = {"time": at, "level": record.levelname.lower(), "logger": record.name}
        if isinstance(record.msg, dict):
            line |= record.msg
        else:
            line["message"] = record.getMessage().strip().encode(errors="replace").decode()
        if record.exc_info and record.exc_info[1] is not None:
            line |= failure(record.exc_info[1])
        return orjson.dumps(line).decode()


def failure(error: BaseException) -> dict[str, Any]:
    """Return class and places of an exception; its message may hold a caller's data and is left out."""
    frames = traceback.extract_tb(error.__traceback__)
    places = [f"{PurePath(frame.filename).name}:{frame.lineno} {frame.name}" for frame in frames]
    return {"error": type(error).__name__, "at": places}


CONFIGURATION: dict[str, Any] = {
    "version": 1,
    "disable_existing_loggers": False,
    "formatters": {"line": {"()": JsonLine}},
    "handlers": {"stdout": {"class": "logging.StreamHandler", "stream": "ext://sys.stdout", "formatter": "line"}},
    "loggers": {
        "tailrace": {"handlers": ["stdout"], "level": "INFO", "propagate": False},
        "uvicorn": {"handlers": ["stdout"], "level": "INFO", "propagate": False},
    },
}
"""For ``logging.config.dictConfig``; the server applies it in each of its processes."""
