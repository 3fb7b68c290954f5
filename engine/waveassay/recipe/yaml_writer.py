"""Plain values -> YAML that YAML 1.1 and 1.2 readers understand alike."""

import json
import re
from typing import Any

# Texts that no reader of either version takes for anything else: words, and values with a unit.
_WORDS = re.compile(r"[A-Za-z][A-Za-z0-9_.#%/^-]*(?: [A-Za-z0-9_.%/^-]+)*\Z")
_WITH_UNIT = re.compile(r"[+-]?[0-9][0-9.eE+-]* [A-Za-z%][A-Za-z0-9/^*%]*\Z")
_TAKEN = re.compile(r"(?:y|n|yes|no|on|off|true|false|null|nan|inf)\Z", re.IGNORECASE)
_NOT_PRINTABLE = re.compile(
    "[^\x20-\x7e\xa0-\u2027\u202a-\ud7ff\ue000-\ufefe\uff00-\ufffd\U00010000-\U0010ffff]"
)


def written(document: dict[str, Any]) -> str:
    """Return a document: mappings in block style, lists of plain values on one line."""
    return "\n".join(_block(document, 0)) + "\n"


def _block(mapping: dict[str, Any], indent: int) -> list[str]:
    space = " " * indent
    lines = []
    for key, value in mapping.items():
        head = f"{space}{scalar(key)}:"
        if isinstance(value, dict) and value:
            lines += [head, *_block(value, indent + 2)]
        elif isinstance(value, list) and value and all(isinstance(v, dict) and v for v in value):
            lines.append(head)
            for item in value:
                first, *rest = _block(item, indent + 4)
                lines += [f"{space}  - {first.lstrip()}", *rest]
        else:
            lines.append(f"{head} {_flow(value)}")
    return lines


def _flow(value: Any) -> str:
    if isinstance(value, dict):
        return "{" + ", ".join(f"{scalar(k)}: {_flow(v)}" for k, v in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(map(_flow, value)) + "]"
    return scalar(value)


def scalar(value: Any) -> str:
    """Return a text, number, bool or None on one line; floats read back to the same float."""
    if value is None:
        return "null"
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, int):
        return str(value)
    if isinstance(value, float):
        text = repr(value)  # YAML 1.1 wants a point in a number with an exponent
        return text if "." in text else text.replace("e", ".0e")
    text = str(value)
    if _WITH_UNIT.match(text) or (_WORDS.match(text) and not _TAKEN.match(text)):
        return text
    quoted = json.dumps(text, ensure_ascii=False)
    return _NOT_PRINTABLE.sub(lambda char: f"\\U{ord(char[0]):08X}", quoted)
