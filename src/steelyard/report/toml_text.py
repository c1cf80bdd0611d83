"""A plan as TOML text that reads back as the same plan; the standard library reads TOML but does not write it."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any


def plan_text(keys: Mapping[str, Any]) -> str:
    """Return the text of a TOML file with these keys, as :func:`steelyard.plan.plan_keys` gives them."""
    return "\n".join(_lines(keys, "")).strip() + "\n"


def _lines(keys: Mapping[str, Any], place: str) -> list[str]:
    plain = {k: v for k, v in keys.items() if not isinstance(v, Mapping) and not _is_tables(v)}
    lines = [f"{_key(name)} = {_value(value)}" for name, value in plain.items()]
    for name, value in keys.items():
        path = f"{place}.{_key(name)}" if place else _key(name)
        if isinstance(value, Mapping):
            if value:
                lines += ["", f"[{path}]", *_lines(value, path)]
        elif _is_tables(value):
            for table in value:
                lines += ["", f"[[{path}]]", *_lines(table, path)]
    return lines


def _is_tables(value: Any) -> bool:
    return isinstance(value, list) and bool(value) and isinstance(value[0], Mapping)


def _key(name: str) -> str:
    return name if name.replace("_", "").replace("-", "").isalnum() and name.isascii() else json.dumps(name)


def _value(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        # JSON's escapes are TOML's, but for the delete character.
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    if isinstance(value, list):
        return "[" + ", ".join(_value(item) for item in value) + "]"
    return repr(value)
