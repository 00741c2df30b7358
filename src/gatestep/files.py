"""Reading TOML files, and telling a person everything that is wrong with one at once."""

from __future__ import annotations

import difflib
import json
import tomllib
import types
import typing
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel, ValidationError

from .errors import FileError
from .specbase import Spec
from .specs import StandardRate

MAX_BYTES = 1_000_000

SomeSpec = TypeVar("SomeSpec", bound=Spec)
Loc = tuple[int | str, ...]

_RATES = ("alpha", "beta", "inf", "tau")
_WORDS = (
    ("Input should", "must"),
    ("String should", "must"),
    ("a valid array", "a list"),
    ("an object", "a table"),
)
_RATE_KINDS = (
    "a formula in quotes, a number, {form, rate, midpoint, scale}, "
    "or {v_mv = [...], values = [...]}"
)


def read_toml(path: Path) -> dict[str, Any]:
    """Read a TOML file.

    Raises
    ------
    FileError
        If it is missing, not a file, too large, not UTF-8, or not TOML.
    """
    return parse_toml(read_bytes(path), path)


def read_bytes(path: Path) -> bytes:
    """Read a file of at most ``MAX_BYTES``.

    Raises
    ------
    FileError
        If it is missing, not a file, too large, or cannot be read.
    """
    try:
        if not path.exists():
            raise FileError(f"{path}: no such file")
        if not path.is_file():
            raise FileError(f"{path}: not a file; give the path of a TOML file")
        with path.open("rb") as file:
            content = file.read(MAX_BYTES + 1)
    except (OSError, ValueError) as error:
        if isinstance(error, FileError):
            raise
        reason = getattr(error, "strerror", None) or error
        raise FileError(f"{path}: cannot be read: {reason}") from None
    if len(content) > MAX_BYTES:
        raise FileError(f"{path}: over {MAX_BYTES:,} bytes, too large for such a file")
    return content


def parse_toml(content: bytes, path: Path) -> dict[str, Any]:
    """Turn the bytes of a TOML file into plain data; ``path`` is for messages.

    Raises
    ------
    FileError
        If they are not UTF-8, or not TOML.
    """
    try:
        return tomllib.loads(content.decode("utf-8"))
    except UnicodeDecodeError as error:
        line = content[: error.start].count(b"\n") + 1
        raise FileError(f"{path}: line {line} is not UTF-8 text; save the file as UTF-8") from None
    except tomllib.TOMLDecodeError as error:
        raise FileError(f"{path}: not valid TOML: {error}") from None
    except (RecursionError, ValueError) as error:
        raise FileError(f"{path}: not valid TOML: {error}") from None


def parse(spec_class: type[SomeSpec], data: Mapping[str, Any], path: Path) -> SomeSpec:
    """Validate plain data as a spec, reporting all faults at once.

    Types are strict: a number in quotes is no number, and ``true`` is no 1.

    Raises
    ------
    FileError
        With one line per fault: file, key, what was found, what is allowed.
    """
    try:
        return spec_class.model_validate_json(json.dumps(data, default=str), strict=True)
    except ValidationError as error:
        faults = error.errors(include_url=False, include_context=True)
    places: dict[Loc, list[str]] = {}
    for loc, fault in _one_per_rate(data, faults):
        if not _follows_from_members(data, loc, fault):
            places.setdefault(loc, []).append(_fault(spec_class, data, loc, fault))
    lines = [f"{path}: {_place(data, loc)}{_joined(said)}" for loc, said in places.items()]
    raise FileError("\n".join(lines))


def _follows_from_members(data: Mapping[str, Any], loc: Loc, fault: Any) -> bool:
    """Whether a list only counts as too short because its members are at fault."""
    found = _at(data, loc)
    return fault["type"] == "too_short" and len(found or ()) >= fault["ctx"]["min_length"]


def _joined(said: list[str]) -> str:
    """One text of what several kinds allowed at one place have to say of it."""
    first, *others = dict.fromkeys(said)
    return first + "".join(f", or {other.split('; ', 1)[-1]}" for other in others)


def _one_per_rate(data: Mapping[str, Any], faults: Sequence[Any]) -> list[tuple[Loc, Any]]:
    """Keep, of the faults of a rate that fits no kind, those of the kind that was meant."""
    kept: list[tuple[Loc, Any]] = []
    for fault in faults:
        loc = tuple(fault["loc"])
        rate = next((k for k, key in enumerate(loc) if key in _RATES and k < len(loc) - 1), None)
        if rate is None:
            kept.append((_without_kinds(data, loc), fault))
            continue
        found = _at(data, loc[: rate + 1])
        branch, rest = str(loc[rate + 1]), loc[rate + 2 :]
        meant = _meant(found)
        if not meant:
            kept.append((loc[: rate + 1], {"type": "rate", "input": found}))
        elif any(name in branch for name in meant):
            kept.append((loc[: rate + 1] + rest, fault))
    return kept


def _without_kinds(data: Any, loc: Loc) -> Loc:
    """Drop from a place what pydantic adds beyond the file's own keys, such as ``bool``."""
    for k, key in enumerate(loc):
        if not isinstance(data, Mapping | list):
            return loc[:k]
        data = _at(data, (key,))
    return loc


def _meant(found: Any) -> tuple[str, ...]:
    """Names by which pydantic knows the kind of rate this value was meant to be."""
    if isinstance(found, str):
        return ("str",)
    if isinstance(found, Mapping) and {"v_mv", "values"} & set(found):
        return ("MeasuredPoints",)
    if isinstance(found, Mapping) and set(StandardRate.model_fields) & set(found):
        return ("StandardRate",)
    if isinstance(found, int | float) and not isinstance(found, bool):
        return ("float",)
    return ()


def _at(data: Any, loc: Loc) -> Any:
    for key in loc:
        try:
            data = data[key]
        except (KeyError, IndexError, TypeError):
            return None
    return data


def _place(data: Mapping[str, Any], loc: Loc) -> str:
    """Where a fault is, in a person's words: ``conductance "K", gate "n": alpha: ``."""
    tables: list[str] = []
    keys: list[str] = []
    for k, key in enumerate(loc):
        if isinstance(key, int):
            name = _at(data, (*loc[: k + 1], "name"))
            label = json.dumps(name) if isinstance(name, str) else f"number {key + 1}"
            tables.append(f"{'.'.join(keys)} {label}")
            keys = []
        else:
            keys.append(key)
    return "".join(f"{part}: " for part in (", ".join(tables), ".".join(keys)) if part)


def _fault(spec_class: type[Spec], data: Mapping[str, Any], loc: Loc, fault: Any) -> str:
    kind, found = fault["type"], fault.get("input")
    if kind == "missing":
        return "missing; this key is required"
    if kind == "extra_forbidden":
        return _unknown_key(_spec_at(spec_class, data, loc[:-1]), str(loc[-1]))
    if kind == "rate":
        return f"found {_shown(found)}; allowed is {_RATE_KINDS}"
    message = str(fault["msg"]).removeprefix("Value error, ").removeprefix("Assertion failed, ")
    for theirs, ours in _WORDS:
        message = message.replace(theirs, ours)
    if kind == "value_error":
        return message
    if kind == "too_short":
        message = f"must hold at least {fault['ctx']['min_length']}"
    if kind == "too_long":
        message = f"must hold at most {fault['ctx']['max_length']}"
    if kind == "string_pattern_mismatch":
        message = "must be a letter, then up to 31 letters, digits, _ or -"
    return f"found {_shown(found)}; {message}"


def _shown(found: Any) -> str:
    if isinstance(found, Mapping):
        return f"a table with {', '.join(map(str, found)) or 'no keys'}"[:120]
    try:
        text = json.dumps(found, ensure_ascii=False)
    except (TypeError, ValueError):
        text = repr(found)
    return text if len(text) <= 80 else f"{text[:77]}..."


def _unknown_key(spec_class: type[BaseModel], key: str) -> str:
    known = list(spec_class.model_fields)
    close = difflib.get_close_matches(key, known, 1, 0.5)
    hint = f" (did you mean {close[0]}?)" if close else ""
    return f"unknown key{hint}; known here: {', '.join(known)}"


def _spec_at(spec_class: type[BaseModel], data: Any, loc: Loc) -> type[BaseModel]:
    """The spec that describes the table at a place in the file."""
    for k, key in enumerate(loc):
        if isinstance(key, int) or key not in spec_class.model_fields:
            continue
        meant = _meant(_at(data, loc[: k + 1])) if key in _RATES else ()
        inner = list(_specs_in(spec_class.model_fields[key].annotation))
        spec_class = next((c for c in inner if not meant or c.__name__ in meant), spec_class)
    return spec_class


def _specs_in(annotation: Any) -> typing.Iterator[type[BaseModel]]:
    if isinstance(annotation, type) and not isinstance(annotation, types.GenericAlias):
        if issubclass(annotation, BaseModel):
            yield annotation
        return
    for argument in typing.get_args(annotation):
        yield from _specs_in(argument)
