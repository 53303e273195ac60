"""The log of `palmloop serve`: one JSON object a line, for people with grep and for machines."""

from __future__ import annotations

import contextlib
import json
import logging
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from hw_profiles.errors import DeviceError

OWN_KEYS = frozenset(vars(logging.makeLogRecord({}))) | {"message", "asctime"}


class JsonLines(logging.Formatter):
    """A record as one line of JSON: at, level, logger, message, and whatever was given with it."""

    def format(self, record: logging.LogRecord) -> str:
        at = time.strftime("%Y-%m-%dT%H:%M:%S", time.gmtime(record.created)) + f".{int(record.msecs):03d}Z"
        shown: dict[str, Any] = {"at": at, "level": record.levelname.lower(), "from": record.name, "message": record.getMessage()}
        shown |= {key: value for key, value in vars(record).items() if key not in OWN_KEYS}
        if record.exc_info:
            shown["trace"] = self.formatException(record.exc_info)
        return json.dumps(shown, default=str, ensure_ascii=False)


@contextlib.contextmanager
def log_to(path: Path | None) -> Iterator[None]:
    """Log to a file, to stderr for '-', and without a path only warnings, to stderr. Raises DeviceError where it cannot be written."""
    try:
        stream = path.open("a", encoding="utf-8") if path is not None and str(path) != "-" else None
    except OSError as error:
        raise DeviceError(f"--log {path}: {(error.strerror or str(error)).lower()}") from error
    handler = logging.StreamHandler(stream or sys.stderr)
    handler.setFormatter(JsonLines())
    root = logging.getLogger()
    before = root.level
    root.addHandler(handler)
    root.setLevel(logging.WARNING if path is None else logging.INFO)
    try:
        yield
    finally:
        root.removeHandler(handler)
        root.setLevel(before)
        if stream is not None:
            stream.close()
