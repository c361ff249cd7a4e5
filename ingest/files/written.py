"""A mapping written out as the TOML text that ``import_csv --mapping`` takes."""

from typing import Any

from ingest.files.mapping import DELIMITERS, Mapping, rules_of

_WORD_OF = {sign: word for word, sign in DELIMITERS.items()}


def toml_of(mapping: Mapping) -> str:
    """The mapping as text; read back it gives the same mapping."""
    rules = rules_of(mapping)
    rules["file"]["delimiter"] = _WORD_OF.get(rules["file"]["delimiter"], rules["file"]["delimiter"])
    lines = []
    for table in ("file", "time", "columns"):
        lines += [f"[{table}]", *(f"{key} = {_value(value)}" for key, value in rules[table].items()), ""]
    return "\n".join(lines)


def _value(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return _text(value)
    if isinstance(value, list):
        return "[" + ", ".join(_value(part) for part in value) + "]"
    if isinstance(value, dict):
        return "{ " + ", ".join(f"{key} = {_value(part)}" for key, part in value.items()) + " }"
    return repr(value)


def _text(text: str) -> str:
    escaped = "".join(f"\\u{ord(sign):04X}" if ord(sign) < 32 or ord(sign) == 127 else sign
                      for sign in text.replace("\\", "\\\\").replace('"', '\\"'))
    return f'"{escaped}"'
