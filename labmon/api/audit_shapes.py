"""The shapes of the audit's answers."""

from labmon.api.schemas import ID, TEXT, TIME, Schema, many, or_null, ref, shape

_FACTS: Schema = {"type": ["object", "array", "string", "number", "boolean", "null"]}
AUDIT_SHAPES: dict[str, Schema] = {
    "AuditEntry": shape(
        {"id": ID, "at": TIME, "person": TEXT, "action": TEXT, "subject": TEXT, "before": _FACTS, "after": _FACTS,
         "reason": TEXT},
        text="subject names what was changed, such as tap/b08/eom-in. before and after hold what differs; null: none."),
    "AuditEntries": shape({"entries": many(ref("AuditEntry")), "before": or_null(ID)},
                          text="Newest first; where more may follow, before is what to ask for next."),
}
