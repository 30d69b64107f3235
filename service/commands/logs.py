"""How log lines look: text for people, JSON for programs."""

from __future__ import annotations

import json
import logging
from typing import Any

from service import request_ids


class JsonLines(logging.Formatter):
    """One JSON object a line; control characters are escaped by JSON itself."""

    def format(self, record: logging.LogRecord) -> str:
        """The record as one line."""
        line = {
            "at": self.formatTime(record, "%Y-%m-%dT%H:%M:%S%z"),
            "level": record.levelname.lower(),
            "logger": record.name,
            "message": record.getMessage(),
        }
        if (name := request_ids.current()) is not None:
            line["request_id"] = name
        if record.exc_info:
            line["exception"] = self.formatException(record.exc_info)
        return json.dumps(line)


def log_config(form: str) -> dict[str, Any]:
    """The logging configuration of a serving process; everything goes to standard error."""
    text = {"format": "%(asctime)s %(levelname)s %(name)s: %(message)s"}
    return {
        "version": 1,
        # Most were made at import, before this is read, and would fall silent.
        "disable_existing_loggers": False,
        "formatters": {"text": text, "json": {"()": JsonLines}},
        "handlers": {"stderr": {"class": "logging.StreamHandler", "formatter": form}},
        "root": {"handlers": ["stderr"], "level": "INFO"},
        "loggers": {"alembic": {"level": "WARNING"}},
    }
