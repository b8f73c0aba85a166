"""The log: plain lines for people, or one JSON object per line. It holds no query, no title, no key."""

import datetime as dt
import json
import logging
import sys
from typing import Any

FORMS = ("plain", "json")


class JsonLines(logging.Formatter):
    """Writes a record as one JSON object; what a record carries as `facts` becomes keys of its own."""

    def format(self, record: logging.LogRecord) -> str:
        """Return the line of a record."""
        line: dict[str, Any] = {
            "time": dt.datetime.fromtimestamp(record.created, dt.UTC).isoformat(timespec="milliseconds"),
            "level": record.levelname.lower(),
            "logger": record.name,
            "message": record.getMessage(),
        }
        line |= getattr(record, "facts", {})
        if record.exc_info:
            line["trace"] = self.formatException(record.exc_info)
        return json.dumps(line, default=str)


def set_up(form: str) -> None:
    """Send everything to standard error: warnings in plain lines, requests too as JSON."""
    handler = logging.StreamHandler(sys.stderr)
    if form == "json":
        handler.setFormatter(JsonLines())
    else:
        handler.setFormatter(logging.Formatter("%(asctime)s %(levelname)s %(message)s"))
    logging.basicConfig(handlers=[handler], level=logging.WARNING, force=True)
    logging.getLogger("app").setLevel(logging.INFO if form == "json" else logging.WARNING)
