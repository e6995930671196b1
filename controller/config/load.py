"""Reads the files, and turns every fault into one message that names the place and the next action."""

from __future__ import annotations

import difflib
import hashlib
import re
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Generic, TypeVar

from pydantic import BaseModel, ValidationError

from controller.config.faults import Faults
from controller.config.instrument import Instrument
from controller.config.sample import Sample
from controller.config.sequence import Sequence
from controller.errors import ConfigRefused

Model = TypeVar("Model", bound=BaseModel)
MAX_BYTES = 1_000_000  # a settings file larger than this is not a settings file


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
        raw = Path(path).read_bytes()
    except FileNotFoundError:
        raise ConfigRefused(
            "no such file", file=path, next_action="check the path, or the path in the sequence file"
        ) from None
    except OSError as error:
        raise ConfigRefused(
            f"cannot be read ({error.strerror})", file=path, next_action="check the path and its permissions"
        ) from None
    if len(raw) > MAX_BYTES:
        raise ConfigRefused(
            "is too large for a settings file",
            file=path,
            value=len(raw),
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
    try:
        return model.model_validate(data)
    except ValidationError as error:
        raise _refusal(error, text, name, model) from None
    except RecursionError:
        raise ConfigRefused("is nested too deeply", file=name, next_action="name the right file") from None


def _refusal(error: ValidationError, text: str, name: str, model: type[BaseModel]) -> ConfigRefused:
    # an unknown key first: it is often a missing one, misspelt
    faults = error.errors(include_url=False)
    first = next((fault for fault in faults if fault["type"] == "extra_forbidden"), faults[0])
    path = first["loc"]
    problem, limit, next_action = _words(first, model)
    value = first.get("input")
    if isinstance(value, Mapping | list | tuple) or first["type"] == "missing":
        value = None
    return ConfigRefused(
        problem,
        file=name,
        line=line_of(text, path),
        key=key_text(path) or None,
        value=value,
        limit=limit,
        next_action=next_action,
    )


def _words(fault: Any, model: type[BaseModel]) -> tuple[str, str | None, str]:
    """(problem, limit, next action) of one fault."""
    kind, context = fault["type"], fault.get("ctx", {})
    match kind:
        case "extra_forbidden":
            near = difflib.get_close_matches(
                str(fault["loc"][-1]), known_keys(model, fault["loc"][:-1]), 1, 0.5
            )
            hint = f"did you mean {near[0]!r}?" if near else "remove the key or correct its name"
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
    return str(fault["msg"]).lower(), None, "correct the value"


def known_keys(model: type[BaseModel], path: tuple[Any, ...]) -> list[str]:
    """The keys that a table of the file may have."""
    here: Any = model
    for step in path:
        if isinstance(step, int):
            continue
        field = getattr(here, "model_fields", {}).get(step)
        if field is None:
            return []
        here = _model_in(field.annotation)
    return list(getattr(here, "model_fields", {}))


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
        answer += f"[{step}]" if isinstance(step, int) else (f".{step}" if answer else str(step))
    return answer


_HEADER = re.compile(r"^\s*(\[\[?)\s*([^\]]+?)\s*\]")
_KEY = re.compile(r"^\s*([A-Za-z0-9_\-\"'.+ ]+?)\s*=")


def line_of(text: str, path: tuple[Any, ...]) -> int | None:
    """The line of a key path in TOML text: the key itself, else the nearest table that holds it."""
    best: tuple[int, int] | None = None
    counts: dict[str, int] = {}
    table: tuple[Any, ...] = ()
    for number, line in enumerate(text.splitlines(), 1):
        header = _HEADER.match(line)
        if header:
            name = header.group(2)
            table = tuple(part.strip(" \"'") for part in name.split("."))
            if header.group(1) == "[[":
                counts[name] = counts.get(name, -1) + 1
                table = (*table, counts[name])
            here = table
        else:
            key = _KEY.match(line)
            if not key:
                continue
            here = (*table, *(part.strip(" \"'") for part in key.group(1).split(".")))
        depth = _shared(here, path)
        if depth == len(here) and (best is None or depth > best[0]):
            best = (depth, number)
    return best[1] if best else None


def _shared(here: tuple[Any, ...], path: tuple[Any, ...]) -> int:
    depth = 0
    for a, b in zip(here, path, strict=False):
        if a != b:
            break
        depth += 1
    return depth
