"""The record of a run: what record.json says, and the plan as the TOML text that would ask for it again."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping
from typing import Any

import numpy as np

from steelyard.keys import plan_keys
from steelyard.plan import Plan


def record_text(record: Mapping[str, object], warnings: tuple[str, ...]) -> str:
    """Return record.json: the answer's record, its warnings as they may leave the house."""
    told = {**record, "warnings": list(warnings)}
    return json.dumps(told, indent=2, ensure_ascii=False, default=_plain) + "\n"


def plan_json(plan: Plan) -> str:
    """Return the plan as JSON with sorted keys: the text of which the record's digest is taken."""
    return json.dumps(plan_keys(plan), sort_keys=True, ensure_ascii=False)


def plan_toml(plan: Plan) -> str:
    """Return the plan as TOML, defaults included: read back, it is the same plan."""
    keys = plan_keys(plan)
    lines = [f"{_key(key)} = {_value(value)}" for key, value in keys.items() if not _is_table(value)]
    for name, section in keys.items():
        if isinstance(section, Mapping):
            lines += ["", *_table(name, section)]
        elif _is_table(section):
            for item in section:
                lines += ["", f"[[{_key(name)}]]", *_table(name, item)[1:]]
    return "\n".join(lines).strip() + "\n"


def _table(name: str, section: Mapping[str, Any]) -> list[str]:
    lines = [f"[{name}]", *_pairs(section)]
    for key, value in section.items():
        if isinstance(value, Mapping) and value:
            lines += ["", *_table(f"{name}.{_key(key)}", value)]
    return lines


def _pairs(section: Mapping[str, Any]) -> list[str]:
    return [f"{_key(k)} = {_value(v)}" for k, v in section.items() if not isinstance(v, Mapping)]


def _is_table(value: Any) -> bool:
    return isinstance(value, Mapping) or (
        isinstance(value, list) and bool(value) and all(isinstance(item, Mapping) for item in value)
    )


def _key(key: str) -> str:
    bare = key.isascii() and bool(key) and all(c.isalnum() or c in "_-" for c in key)
    return key if bare else _text(key)


def _value(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return _text(value)
    if isinstance(value, list):
        return "[" + ", ".join(_value(item) for item in value) + "]"
    return str(value)


def _text(text: str) -> str:
    if "\n" in text and not re.search(r'["\\\x00-\x09\x0b-\x1f\x7f]', text):
        return f'"""\n{text}"""'
    # JSON's escapes are TOML's, but for DEL, which TOML wants escaped and JSON leaves.
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")


def _plain(value: object) -> object:
    if isinstance(value, np.generic):
        return value.item()
    return None if value is not None and value != value else str(value)
