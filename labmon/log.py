"""One JSON line per event: a constant event name, facts as fields."""

import json
import logging
from datetime import UTC, datetime

_STANDARD = set(vars(logging.makeLogRecord({}))) | {"message", "asctime", "taskName", "data"}


class LineFormatter(logging.Formatter):
    """Writes time, level, logger, event and the facts given by ``extra``."""

    def format(self, record: logging.LogRecord) -> str:
        line = {"at": datetime.fromtimestamp(record.created, UTC).isoformat(), "level": record.levelname,
                "logger": record.name, "event": record.getMessage()}
        line |= {key: value for key, value in vars(record).items() if key not in _STANDARD}
        if record.exc_info:
            line["trace"] = self.formatException(record.exc_info)
        return json.dumps(line, default=str)
