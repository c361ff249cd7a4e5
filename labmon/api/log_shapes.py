"""The shapes of the logbook's bodies and answers."""

from labmon.api.schemas import ID, NAME, TAP_PATH, TEXT, TIME, YES_NO, Schema, many, or_null, ref, shape
from labmon.logbook.models import ChangeKind, LogTag

TAG: Schema = {"type": "string", "enum": [tag.value for tag in LogTag]}
CHANGE: Schema = {"type": "string", "enum": [kind.value for kind in ChangeKind]}
LONG_TEXT: Schema = {"type": "string", "maxLength": 4000}
_SAID: dict[str, Schema] = {"text": LONG_TEXT, "tag": TAG, "at": TIME, "until": or_null(TIME)}

LOG_SHAPES: dict[str, Schema] = {
    "LogEntry": shape(
        {"id": ID, "station": NAME, "tap": or_null(TAP_PATH), **_SAID, "configuration_change": or_null(CHANGE),
         "was_change": or_null(YES_NO), "by": TEXT, "written_at": TIME, "edited_at": or_null(TIME), "struck_at": or_null(TIME),
         "has_picture": YES_NO, "earlier": many(shape(_SAID | {"edited_at": TIME}))},
        text="until is null for a moment. was_change is null until someone has said whether it was a configuration change. "
             "earlier: how it read before each edit. by: a name for the bench's owner and managers, else a role."),
    "LogEntries": shape({"entries": many(ref("LogEntry")), "before": or_null(ID)},
                        text="Newest first; where more may follow, before is what to ask for next."),
    "NewLogEntry": shape(_SAID | {"tap": or_null(TEXT), "configuration_change": or_null(CHANGE)},
                         optional=(*_SAID, "tap", "configuration_change"), text="Without at it is about this moment."),
    "LogEntryChange": shape(_SAID | {"until": TEXT}, optional=tuple(_SAID),
                            text="What is left out stays; until \"\" makes a span a moment."),
    "WasChange": shape({"configuration_change": or_null(CHANGE)}, text="null: the bench is as it was."),
}
