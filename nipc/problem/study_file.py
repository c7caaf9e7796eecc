"""TOML -> Study, with everything that is wrong found at once and placed in the file."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

from pydantic import BaseModel, ValidationError

from nipc.errors import Finding, InputError, StudyError
from nipc.problem.consistency import findings as inconsistencies
from nipc.problem.consistency import nearest
from nipc.problem.study import Study

_HEADER = re.compile(r"^\s*(\[\[?)\s*([\w.\s\"'-]+?)\s*\]\]?\s*(#.*)?$")
_KEY = re.compile(r"^\s*([\w-]+|\"[^\"]*\"|'[^']*')\s*=")

ExtraChecks = Callable[[Study | None, dict[str, Any], Path], list[Finding]]


def load_study(path: str | Path, extra: ExtraChecks | None = None) -> Study:
    """The study in a TOML file.

    `extra` adds findings of its own (the adapter's settings). Raises StudyError, a list of all
    that is wrong with file, key, line, what was found and what would be right.
    """
    path = Path(path)
    try:
        text = path.read_bytes().decode("utf-8")
    except OSError as error:
        raise InputError(f"{path}: cannot read the study: {error.strerror or error}") from None
    except UnicodeDecodeError as error:
        raise InputError(f"{path}: not a text file in UTF-8 (byte {error.start})") from None
    try:
        raw = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError, ValueError) as error:
        raise StudyError([_syntax_finding(str(error), text)], str(path)) from None
    folder = path.resolve().parent
    found, study = [], None
    try:
        study = Study.model_validate(raw, context={"folder": folder, "checked": True})
    except ValidationError as error:
        found += [_finding(e) for e in error.errors(include_url=False)]
    found += inconsistencies(raw, folder)
    if extra is not None:
        found += extra(study, raw, folder)
    if found or study is None:
        lines = LineIndex(text)
        placed = [Finding(f.key, f.message, f.line or lines.line(f.key)) for f in found]
        placed.sort(key=lambda f: f.line or 0)
        raise StudyError(placed, str(path))
    study._text, study._name = text, path.stem
    return study


def settings_findings(error: ValidationError, prefix: str) -> list[Finding]:
    """The findings of a table that another model validates, such as an adapter's settings."""
    return [_finding(e, prefix) for e in error.errors(include_url=False)]


class LineIndex:
    """Where the keys of a TOML file stand.

    A scan of headers and `key =` lines; a key inside an inline table or array is found at its
    parent's line.
    """

    def __init__(self, text: str) -> None:
        self._lines: dict[str, int] = {}
        counts: dict[str, int] = {}
        prefix = ""
        for number, line in enumerate(text.splitlines(), start=1):
            header = _HEADER.match(line)
            if header:
                name = re.sub(r"[\s\"']", "", header[2])
                if header[1] == "[[":
                    counts[name] = counts.get(name, 0) + 1
                    name = f"{name}[{counts[name]}]"
                prefix = name
                self._lines.setdefault(name, number)
                continue
            key = _KEY.match(line)
            if key:
                name = key[1].strip("\"'")
                self._lines.setdefault(f"{prefix}.{name}" if prefix else name, number)

    def line(self, key: str) -> int | None:
        """The line of the key or of the nearest table above it."""
        while key:
            if key in self._lines:
                return self._lines[key]
            key = re.sub(r"(\.[^.\[]+|\[\d+\]|^[^.\[]+)$", "", key)
        return None


def _syntax_finding(message: str, text: str) -> Finding:
    place = re.search(r"\(at line (\d+), column (\d+)\)", message)
    if place is None:
        return Finding("", f"not valid TOML: {message}", len(text.splitlines()) or None)
    plain = message.replace(place[0], "").strip()
    return Finding("", f"not valid TOML: {plain} (column {place[2]})", int(place[1]))


def _path(location: Sequence[int | str]) -> str:
    """noise, 1, intensity -> noise[2].intensity; names of union members are left out."""
    text = ""
    for part in location:
        if isinstance(part, int):
            text += f"[{part + 1}]"
        elif _is_key(part, text):
            text += f".{part}" if text else part
    return text


_UNION_PARTS = re.compile(
    r"^(int|float|str|bool|list\[.*\]|literal\[.*\]|constrained-.*|function-.*|model-.*)$"
)


def _is_key(part: str, before: str) -> bool:
    if _UNION_PARTS.match(part):
        return False
    # a discriminated union puts the law's or the chart's name into the location
    tagged = re.fullmatch(r"parameter\[\d+\]", before) or before == "chart"
    return not (tagged and part in _tags())


def _tags() -> set[str]:
    from typing import get_args

    tags: set[str] = set()
    for field in ("parameter", "chart"):
        stack = [Study.model_fields[field].annotation]
        while stack:
            item = stack.pop()
            if isinstance(item, type) and issubclass(item, BaseModel):
                for key in ("law", "name"):
                    if key in item.model_fields:
                        tags |= {
                            a
                            for a in get_args(item.model_fields[key].annotation)
                            if isinstance(a, str)
                        }
            stack += [a for a in get_args(item) if not isinstance(a, str)]
    return tags


def _finding(error: Any, prefix: str = "") -> Finding:
    key = _path((prefix, *error["loc"]) if prefix else error["loc"])
    return Finding(key, _message(error))


def _shown(value: Any) -> str:
    text = f"text {value!r}" if isinstance(value, str) else repr(value)
    return text if len(text) <= 60 else text[:57] + "..."


def _message(error: Any) -> str:
    """What was found and what would be right."""
    kind, context, value = error["type"], error.get("ctx", {}), error.get("input")
    if kind == "missing":
        return "is missing"
    if kind == "extra_forbidden":
        last = str(error["loc"][-1])
        known = _known_keys(error["loc"])
        return f"unknown key{nearest(last, known)}" + (
            f"; known: {', '.join(known)}" if known else ""
        )
    if kind in ("value_error", "assertion_error"):
        return str(context.get("error", error["msg"]))
    if kind.startswith("union_tag"):
        expected = context.get("expected_tags", "")
        tag = context.get("discriminator", "").strip("'")
        found = f"found {_shown(context['tag'])}" if "tag" in context else f"{tag} is missing"
        return f"{found}; {tag} must be one of {expected}"
    return f"found {_shown(value)}; {_wanted(error['msg'])}"


def _wanted(message: str) -> str:
    text = message[0].lower() + message[1:]
    return re.sub(r"^input should", "it should", text)


def _known_keys(location: Sequence[int | str]) -> list[str]:
    model: Any = Study
    from typing import get_args

    for part in location[:-1]:
        if isinstance(part, int):
            continue
        if isinstance(model, type) and issubclass(model, BaseModel):
            field = model.model_fields.get(part)
            if field is None:
                return []
            stack, models = [field.annotation], []
            while stack:
                item = stack.pop()
                if isinstance(item, type) and issubclass(item, BaseModel):
                    models.append(item)
                stack += list(get_args(item))
            model = models[0] if len(models) == 1 else models
        elif isinstance(model, list):
            model = next((m for m in model if part in _literals(m)), None)
    if isinstance(model, type) and issubclass(model, BaseModel):
        return list(model.model_fields)
    return []


def _literals(model: type[BaseModel]) -> set[str]:
    from typing import get_args

    return {
        a
        for key in ("law", "name")
        if key in model.model_fields
        for a in get_args(model.model_fields[key].annotation)
        if isinstance(a, str)
    }
