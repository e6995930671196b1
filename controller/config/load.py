"""Reads the files, and turns every fault into one message that names the place and the next action."""

from __future__ import annotations

import difflib
import hashlib
import re
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from functools import reduce
from typing import Any, Generic, TypeVar

from pydantic import BaseModel, ValidationError

from controller.config.faults import Faults
from controller.config.instrument import Instrument
from controller.config.sample import Sample
from controller.config.sequence import Sequence
from controller.config.units import FaultAt, Quantity
from controller.errors import ConfigRefused

Model = TypeVar("Model", bound=BaseModel)
MAX_BYTES = 1_000_000  # a settings file larger than this is not a settings file
MAX_VALUE = 80  # characters of a value in a message
# what a TOML reader gives up on: integers of thousands of digits, brackets nested without end
_BEYOND_READING = re.compile(r"[0-9][0-9_]{999}|[\[{][\s\[{]{99}")


@dataclass(frozen=True, slots=True)
class Loaded(Generic[Model]):
    """A file as it was read: its settings, and the whole text with its SHA-256 for the record."""

    settings: Model
    path: str
    text: str
    sha256: str


def load_instrument(path: str) -> Loaded[Instrument]:
    """Raises ConfigRefused."""
    return _load(path, Instrument)


def load_sequence(path: str) -> Loaded[Sequence]:
    """Raises ConfigRefused."""
    return _load(path, Sequence)


def load_sample(path: str) -> Loaded[Sample]:
    """Raises ConfigRefused."""
    return _load(path, Sample)


def load_faults(path: str) -> Loaded[Faults]:
    """Raises ConfigRefused."""
    return _load(path, Faults)


def parse_instrument(text: str, name: str) -> Instrument:
    """The settings of a text, for instance out of a record. Raises ConfigRefused."""
    return parse(text, name, Instrument)


def parse_sequence(text: str, name: str) -> Sequence:
    """The settings of a text, for instance out of a record. Raises ConfigRefused."""
    return parse(text, name, Sequence)


def _load(path: str, model: type[Model]) -> Loaded[Model]:
    try:
        with open(path, "rb") as file:
            raw = file.read(MAX_BYTES + 1)
    except FileNotFoundError:
        raise ConfigRefused(
            "no such file", file=path, next_action="check the path, or the path in the sequence file"
        ) from None
    except (OSError, ValueError) as error:  # ValueError: a path with a null character in it
        why = error.strerror if isinstance(error, OSError) else "no such path is possible"
        raise ConfigRefused(
            f"cannot be read ({why})", file=path, next_action="check the path and its permissions"
        ) from None
    if len(raw) > MAX_BYTES:
        raise ConfigRefused(
            "is too large for a settings file",
            file=path,
            limit=f"{MAX_BYTES} bytes",
            next_action="name the right file",
        )
    try:
        text = raw.decode("utf-8")
    except UnicodeDecodeError as error:
        line = raw[: error.start].count(b"\n") + 1
        raise ConfigRefused(
            "is not UTF-8 text", file=path, line=line, next_action="save it as UTF-8"
        ) from None
    return Loaded(parse(text, path, model), path, text, hashlib.sha256(raw).hexdigest())


def parse(text: str, name: str, model: type[Model]) -> Model:
    """Settings of ``model`` from TOML text. Raises ConfigRefused for the first fault found."""
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        found = re.search(r"at line (\d+)", str(error))
        line = int(found.group(1)) if found else text.count("\n") + 1
        raise ConfigRefused(
            f"is not TOML: {error}", file=name, line=line, next_action="correct the line"
        ) from None
    except (ValueError, RecursionError):
        place = _BEYOND_READING.search(text)
        raise ConfigRefused(
            "is not TOML: a number too long or a nesting too deep to be read",
            file=name,
            line=text.count("\n", 0, place.start()) + 1 if place else None,
            next_action="correct the line, or name the right file",
        ) from None
    try:
        return model.model_validate(data)
    except ValidationError as error:
        raise _refusal(error, data, text, name, model) from None


def _refusal(
    error: ValidationError, data: Any, text: str, name: str, model: type[BaseModel]
) -> ConfigRefused:
    # an unknown key first: it is often a missing one, misspelt
    faults = error.errors(include_url=False)
    first = next((fault for fault in faults if fault["type"] == "extra_forbidden"), faults[0])
    path = first["loc"]
    problem, limit, next_action = _words(first, model)
    value = first.get("input")
    if limit is not None:  # the value as it was written, not converted; the limit in the unit of the field
        value = reduce(lambda here, step: here[step], path, data)
        limit = f"{limit} {unit_of(model, path)}".rstrip()
    cause = first.get("ctx", {}).get("error")
    if isinstance(cause, FaultAt):
        path, value = (*path, *cause.path), None  # the message has the values
    if isinstance(value, Mapping | list | tuple) or first["type"] == "missing":
        value = None
    return ConfigRefused(
        problem,
        file=name,
        line=line_of(text, path) or 1,
        key=key_text(path) or None,
        value=_Shortened(value) if len(repr(value)) > MAX_VALUE else value,
        limit=limit,
        next_action=next_action,
    )


class _Shortened(str):
    """The start of a value that would drown its message."""

    __slots__ = ()

    def __new__(cls, value: object) -> _Shortened:
        return super().__new__(cls, f"{repr(value)[:MAX_VALUE]}...")

    def __repr__(self) -> str:
        return str(self)


def _words(fault: Any, model: type[BaseModel]) -> tuple[str, str | None, str]:
    """(problem, limit, next action) of one fault."""
    kind, context = fault["type"], fault.get("ctx", {})
    match kind:
        case "extra_forbidden":
            near = nearest_key(str(fault["loc"][-1]), known_keys(model, fault["loc"][:-1]))
            hint = f"did you mean {near!r}?" if near else "remove the key or correct its name"
            return "unknown key", None, hint
        case "missing":
            return "missing key", None, "add the key"
        case "greater_than":
            return "too small", f"above {context['gt']:g}", "enter a value inside the limit"
        case "greater_than_equal":
            return "too small", f"at least {context['ge']:g}", "enter a value inside the limit"
        case "less_than":
            return "too large", f"below {context['lt']:g}", "enter a value inside the limit"
        case "less_than_equal":
            return "too large", f"at most {context['le']:g}", "enter a value inside the limit"
        case "literal_error":
            return "not one of the choices", str(context["expected"]), "choose one of them"
        case "value_error":
            return str(context["error"]), None, "correct the value"
        case "model_type" | "dict_type":
            return "needs a table", None, f"write it under [{key_text(fault['loc'])}]"
        case "tuple_type":
            return "needs a list", None, "write [[...]] above each of its tables, or [...] around its values"
        case "too_short":
            return "is empty", None, f"enter {context['min_length']} or more"
    return str(fault["msg"]).lower(), None, "correct the value"


def nearest_key(wrong: str, known: list[str]) -> str | None:
    """The key that was probably meant: near as a whole, or else near to one of a key's words."""
    whole = difflib.get_close_matches(wrong, known, 1, 0.6)
    if whole:
        return whole[0]
    words = {word: key for key in reversed(known) for word in key.split("_")}
    near = difflib.get_close_matches(wrong, list(words), 1, 0.7)
    return words[near[0]] if near else None


def unit_of(model: type[BaseModel], path: tuple[Any, ...]) -> str:
    """The unit of the quantity at ``path``; empty for what has none."""
    parent = _at(model, path[:-1])
    field = getattr(parent, "model_fields", {}).get(path[-1])
    parts = [*field.metadata, *getattr(field.annotation, "__args__", ())] if field is not None else []
    for part in parts:
        for mark in (part, *getattr(part, "__metadata__", ())):  # of `Seconds | None`, too
            if isinstance(mark, Quantity):
                return mark.unit
    return ""


def known_keys(model: type[BaseModel], path: tuple[Any, ...]) -> list[str]:
    """The keys that a table of the file may have."""
    return list(getattr(_at(model, path), "model_fields", {}))


def _at(model: type[BaseModel], path: tuple[Any, ...]) -> Any:
    """The model of the table at ``path``; none if there is none."""
    here: Any = model
    for step in path:
        if isinstance(step, int):
            continue
        field = getattr(here, "model_fields", {}).get(step)
        if field is None:
            return None
        here = _model_in(field.annotation)
    return here


def _model_in(annotation: Any) -> Any:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    for part in getattr(annotation, "__args__", ()):
        found = _model_in(part)
        if found is not None:
            return found
    return None


def key_text(path: tuple[Any, ...]) -> str:
    """``("ions", 2, "dwell")`` as ``ions[2].dwell``."""
    answer = ""
    for step in path:
        name = str(step) if str(step).isprintable() else repr(step)
        answer += f"[{step}]" if isinstance(step, int) else (f".{name}" if answer else name)
    return answer


# possessive: no line, however odd, is tried twice
_HEADER = re.compile(r"\s*+(\[\[?)([^\]]++)\]\]?\s*+(?:#.*)?$")
_KEY = re.compile(r"\s*+((?:[A-Za-z0-9_-]++|\"[^\"]*+\"|'[^']*+'|[ \t]*\.[ \t]*)++)\s*=")
_STEP = re.compile(r"\"([^\"]*)\"|'([^']*)'|([A-Za-z0-9_-]+)")
_TRIPLE = re.compile(r"\"\"\"|\'\'\'")


def line_of(text: str, path: tuple[Any, ...]) -> int | None:
    """The line of a key path in TOML text: the key itself, else the nearest table that holds it."""
    best, depth_best = None, 0
    counts: dict[tuple[Any, ...], int] = {}
    table: tuple[Any, ...] = ()
    closing = ""  # of a text of many lines, whose inside holds no keys
    for number, line in enumerate(text.split("\n"), 1):
        if closing:
            closing = "" if closing in line else closing
            continue
        opened = _TRIPLE.findall(line)
        closing = opened[0] if len(opened) % 2 else ""
        header = _HEADER.match(line)
        if header:
            here = table = _table(header.group(2), header.group(1) == "[[", counts)
        else:
            key = _KEY.match(line)
            if not key:
                continue
            here = (*table, *_steps(key.group(1)))
        if isinstance(here[-1], int) and here[:-1] == path and len(path) > depth_best:
            best, depth_best = number, len(path)  # the whole array, or [[run]] where [run] is wanted
        if len(here) > depth_best and path[: len(here)] == here:
            best, depth_best = number, len(here)
    return best


def line_at(text: str, key: str) -> int | None:
    """``line_of`` for a key as ``key_text`` writes it: ``ions[2].dwell``."""
    steps = re.findall(r"([A-Za-z_]+)|\[(\d+)\]", key)
    return line_of(text, tuple(name or int(number) for name, number in steps))


def _steps(name: str) -> list[str]:
    return [double or single or bare for double, single, bare in _STEP.findall(name)]


def _table(name: str, is_array: bool, counts: dict[tuple[Any, ...], int]) -> tuple[Any, ...]:
    """The path of a header, with the number of each array's table that it stands in."""
    path: tuple[Any, ...] = ()
    steps = _steps(name)
    for place, step in enumerate(steps):
        path = (*path, step)
        if is_array and place == len(steps) - 1:
            counts[path] = counts.get(path, -1) + 1
        if path in counts:
            path = (*path, counts[path])
    return path
