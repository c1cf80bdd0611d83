"""From what a file or a call says to what the fields of a dataclass hold, by their declared types.

Knows nothing of plans: any tree of frozen dataclasses will do. A word that fits no field, or a value of
another type, is refused with its place and the mend.
"""

from __future__ import annotations

import types
from collections.abc import Mapping, Sequence
from dataclasses import MISSING, fields, is_dataclass
from difflib import get_close_matches
from pathlib import Path
from typing import Any, Literal, Union, get_args, get_origin, get_type_hints

from steelyard.errors import PlanError

_WANTED = {str: "text", bool: "true or false", int: "a whole number", float: "a number", Path: "a path"}


def plan_keys(plan: object) -> dict[str, Any]:
    """Return the plan as plain dicts, lists and scalars: the keys a TOML file would have, defaults included."""
    out: dict[str, Any] = {}
    for f in fields(plan):  # type: ignore[arg-type]
        if f.metadata.get("key", True):
            value = _plain(getattr(plan, f.name))
            if value is not None:
                out[f.name] = value
    return out


def _plain(value: Any) -> Any:
    if is_dataclass(value):
        return plan_keys(value)
    if isinstance(value, Mapping):
        return {key: _plain(item) for key, item in value.items()}
    if isinstance(value, tuple | list):
        return [_plain(item) for item in value]
    return value


def section(raw: Mapping[str, Any], kind: type, where: str) -> dict[str, Any]:
    """Turn a table of the file into the keyword arguments of dataclass ``kind``, naming what does not fit."""
    keys = {f.name: f for f in fields(kind) if f.metadata.get("key", True)}
    place = f"[{where}]" if where else "The top level"
    for key in raw:
        if key not in keys:
            near = get_close_matches(key, keys, n=1, cutoff=0.5)
            hint = f'Did you mean "{near[0]}"?' if near else f"Known there: {', '.join(keys)}."
            raise PlanError(f'Unknown key "{key}" in the plan: {place} does not have it.', mend=hint)
    hints = _hints(kind)
    required = [
        name
        for name, f in keys.items()
        if f.default is MISSING and f.default_factory is MISSING and name not in raw
    ]
    if required:
        raise PlanError(f'{place} of the plan lacks "{required[0]}".', mend="Add it there.")
    return {key: _coerce(value, hints[key], f"{where}.{key}" if where else key) for key, value in raw.items()}


def settle(section: Any, where: str | None = None) -> None:
    """Give every field of a section its declared type, so that Python and TOML plans are the same plan."""
    name = type(section).__name__.lower() if where is None else where
    where = "" if name == "plan" else f"{name}."
    for f in fields(section):
        value = _coerce(getattr(section, f.name), _hints(type(section))[f.name], where + f.name)
        object.__setattr__(section, f.name, value)


def _hints(kind: type) -> dict[str, Any]:
    return get_type_hints(kind)


def _coerce(value: Any, hint: Any, where: str) -> Any:
    """Return ``value`` as the field's type: one word for a list of one, a table for its dataclass."""
    origin, arguments = get_origin(hint), get_args(hint)
    if is_dataclass(hint):
        return _coerce_table(value, hint, where)  # type: ignore[arg-type]
    if origin is tuple:
        return _coerce_list(value, arguments, where)
    if origin in (Union, types.UnionType):
        return _coerce_union(value, arguments, where)
    if origin is Literal:
        return _one_of(value, hint, where)
    if origin is not None and issubclass(origin, Mapping):
        if not isinstance(value, Mapping):
            raise _wrong(value, "a table", where)
        return {str(key): _coerce(item, arguments[1], f"{where}.{key}") for key, item in value.items()}
    if hint is float and isinstance(value, int) and not isinstance(value, bool):
        return float(value)
    if isinstance(value, hint) and not (hint is int and isinstance(value, bool)):
        return value
    raise _wrong(value, _WANTED[hint], where)


def _coerce_table(value: Any, kind: type, where: str) -> Any:
    if isinstance(value, kind):
        return value
    if not isinstance(value, Mapping):
        raise _wrong(value, f"a table (in Python, a {kind.__name__} or a dict)", where)
    return kind(**section(value, kind, where))


def _coerce_list(value: Any, arguments: tuple[Any, ...], where: str) -> tuple[Any, ...]:
    if isinstance(value, str | int | float | Mapping) or is_dataclass(value):
        value = (value,)
    if not isinstance(value, Sequence):
        raise _wrong(value, "a list", where)
    return tuple(_coerce(item, arguments[0], where) for item in value)


def _coerce_union(value: Any, arguments: tuple[Any, ...], where: str) -> Any:
    if value is None and type(None) in arguments:
        return None
    kinds = [kind for kind in arguments if kind is not type(None)]
    scalars = tuple(kind for kind in kinds if isinstance(kind, type))
    if isinstance(value, scalars):
        return value
    return _coerce(value, kinds[0], where)


def _one_of(value: Any, literal: Any, where: str) -> Any:
    words = get_args(literal)
    if value not in words:
        near = get_close_matches(str(value), words, n=1, cutoff=0.4)
        hint = f' Did you mean "{near[0]}"?' if near else ""
        raise PlanError(f'{where} is "{value}".', mend=f"It is one of {', '.join(words)}.{hint}")
    return value


def _wrong(value: Any, wanted: str, where: str) -> PlanError:
    return PlanError(f"{where} is {value!r}; it must be {wanted}.", mend=f"Write {wanted} there.")
