"""Key paths: dotted names of values in a parsed system file ("species.ATP"), read, replaced and written back as TOML.

A path whose entry is a table ("compartments.lumen.diameter" = { median = ..., cv = ... }) stands for the table's main value.
"""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from difflib import get_close_matches
from typing import Any

Scalar = str | int | float | bool

# sections whose entries carry the user's own names: a name that is not there is a slip, never a new entry
_NAMED = ("compartments", "species", "reactions", "enzymes", "readouts", "requirements", "additions", "values")
_OPTIONAL = ("run", "conditions")  # sections that a file may do without
_NOT_SWEPT = ("title", "attachments")
# the key that a bare value stands for, by where the value stands
_MAIN = ("amount", "median", "value")


class KeyPathError(ValueError):
    """A path that is not in the system file; the message names the nearest ones that are."""


def valid_paths(raw: Mapping[str, Any]) -> list[str]:
    """Every path of the parsed file that a value can be put at."""
    return [path for path, _ in _leaves({k: v for k, v in raw.items() if k not in _NOT_SWEPT}, "")]


def _leaves(table: Mapping[str, Any], prefix: str) -> Iterator[tuple[str, Scalar]]:
    for key, value in table.items():
        path = f"{prefix}{key}"
        if isinstance(value, Mapping):
            main = _main_key(value)
            if main is not None:
                yield path, value[main]
            yield from ((p, v) for p, v in _leaves(value, f"{path}.") if p != f"{path}.{main}")
        elif isinstance(value, Scalar):
            yield path, value


def _main_key(table: Mapping[str, Any]) -> str | None:
    return next((key for key in _MAIN if isinstance(table.get(key), Scalar)), None)


def lookup(raw: Mapping[str, Any], path: str) -> Scalar:
    """The value at `path`. Raises KeyPathError when there is none."""
    node: Any = raw
    for part in path.split("."):
        if not isinstance(node, Mapping) or part not in node:
            raise KeyPathError(_unknown(raw, path))
        node = node[part]
    if isinstance(node, Mapping):
        main = _main_key(node)
        if main is None:
            raise KeyPathError(_whole_table(path, node))
        node = node[main]
    if not isinstance(node, Scalar):
        raise KeyPathError("is a list; single values can be swept")
    return node


def replaced(raw: Mapping[str, Any], changes: Mapping[str, Scalar]) -> dict[str, Any]:
    """A copy of the parsed file with each value put at its path; what is not touched is shared with `raw`.

    The key itself may be new where its table is there ("run.duration"); whether it means anything is for the build to say.
    Raises KeyPathError for a path that cannot be.
    """
    result = dict(raw)
    for path, value in changes.items():
        parts = path.split(".")
        if len(parts) < 2:
            raise KeyPathError(_unknown(raw, path))
        node = result
        for depth, part in enumerate(parts[:-1]):
            child = node.get(part)
            main = _short_for(parts[: depth + 1])
            if isinstance(child, Scalar) and main is not None:
                child = {main: child}  # "4 mM" is short for { amount = "4 mM" }
            if child is None and depth == 0 and part in _OPTIONAL:
                child = {}
            if not isinstance(child, Mapping):
                raise KeyPathError(_unknown(raw, path))
            node[part] = dict(child)
            node = node[part]
        last = parts[-1]
        if parts[0] in _NAMED and len(parts) == 2 and last not in node:
            raise KeyPathError(_unknown(raw, path))
        there = node.get(last)
        if isinstance(there, Mapping):
            main = _main_key(there)
            if main is None:
                raise KeyPathError(_whole_table(path, there))
            node[last] = {**there, main: value}
        else:
            node[last] = value
    return result


def _short_for(parts: list[str]) -> str | None:
    """The key that a bare value at this place stands for, None where a bare value is all there is."""
    if len(parts) == 2 and parts[0] in ("species", "enzymes"):
        return "amount"
    if len(parts) == 3 and parts[0] == "compartments" and parts[2] in ("diameter", "volume"):
        return "median"
    return "value" if len(parts) == 3 and parts[0] == "reactions" and parts[2] == "energy" else None


def _whole_table(path: str, table: Mapping[str, Any]) -> str:
    inside = next((f"{path}.{key}" for key, value in table.items() if isinstance(value, Scalar)), None)
    return "is a table without a main value" + (f': name a key in it, such as "{inside}"' if inside else "")


def _unknown(raw: Mapping[str, Any], path: str) -> str:
    known = valid_paths(raw)
    near = get_close_matches(path, known, 3, 0.5)
    last = path.rsplit(".", 1)[-1]
    near = list(dict.fromkeys([p for p in known if p.rsplit(".", 1)[-1] == last][:2] + near))[:3]
    hint = f"the nearest are {', '.join(near)}" if near else f"such as {', '.join(known[:3])}"
    return f"is no key path of the system file; {hint}"


def toml_text(raw: Mapping[str, Any]) -> str:
    """A parsed TOML file written as TOML again; comments and layout are gone.

    Raises TypeError for a value that system files do not have (dates).
    """
    lines: list[str] = []
    _write_table(lines, raw, [])
    return "\n".join(lines).lstrip("\n") + "\n"


def _write_table(lines: list[str], table: Mapping[str, Any], path: list[str]) -> None:
    plain = {k: v for k, v in table.items() if not isinstance(v, Mapping)}
    if path and (plain or not table):
        lines += ["", f"[{'.'.join(_key(p) for p in path)}]"]
    lines += [f"{_key(k)} = {_value(v)}" for k, v in plain.items()]
    for key, value in table.items():
        if isinstance(value, Mapping):
            _write_table(lines, value, [*path, key])


def _key(name: str) -> str:
    bare = name.isascii() and name.replace("_", "").replace("-", "").isalnum()
    return name if bare else _value(name)


def _value(value: Any) -> str:
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int | float):
        return repr(value)
    if isinstance(value, list):
        return f"[{', '.join(_value(v) for v in value)}]"
    if isinstance(value, Mapping):  # a table inside a list
        return f"{{ {', '.join(f'{_key(k)} = {_value(v)}' for k, v in value.items())} }}"
    raise TypeError(f"{value!r} has no place in a system file")
