"""TOML files held against a model of their tables; every fault is a sentence with its place.

May import errors.  The models are pydantic's, but none of its words reach the user: a fault names
file, line, table, key, value, what is allowed, and how to mend it.
"""

import difflib
import json
import re
import tomllib
from collections import Counter
from collections.abc import Callable, Iterable, Mapping
from datetime import UTC, date, datetime, time
from pathlib import Path
from types import NoneType, UnionType
from typing import Annotated, Any, Literal, TypeVar, Union, get_args, get_origin

from pydantic import BaseModel, ConfigDict, ValidationError
from pydantic.fields import FieldInfo
from pydantic_core import PydanticCustomError

from ngbound.errors import CaseError, NgboundError

LONGEST_VALUE = 60
"""Longer values are shown cut, letters."""

MORE_FAULTS = 3
"""So many faults are told beside the first; the error carries all of them."""

Model = TypeVar("Model", bound=BaseModel)
Place = tuple[str | int, ...]
"""Where something stands in a file: names of tables and keys, numbers in arrays of tables."""


class Table(BaseModel):
    """Any table of such a file: frozen, finite numbers only, no unknown keys."""

    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False)


def nearest(word: str, known: Iterable[str]) -> str:
    """``"did you mean 'x'?"`` when a known word is near, else the list of the known words."""
    words = list(known)
    near = difflib.get_close_matches(word, words, n=1, cutoff=0.5)
    return f"did you mean {near[0]!r}?" if near else f"known are {', '.join(words)}."


def see_whether(make: Callable[..., Any], *arguments: Any, key: str = "") -> None:
    """Build something from choices inside a validator, only to see whether they are sound.

    ``key`` is the one they come from, where the error does not carry it.
    """
    try:
        make(*arguments)
    except NgboundError as error:
        raise PydanticCustomError(
            "choice",
            "{sentence}",
            {"sentence": str(error), "keys": [key or str(error.data.get("key", "")), *error.data]},
        ) from error


def read_toml(path: str | Path, model: type[Model]) -> Model:
    """Read a TOML file into a model of its tables.

    Raises
    ------
    CaseError
        When the file cannot be read, is not TOML, or holds an unknown or impossible choice.
    """
    path = Path(path)
    text = _text(path)
    try:
        content = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        what, line, column = _parsed(str(error), text)
        raise CaseError(
            f"{path}, line {line}, column {column}: this is not TOML: {what}; mend the line."
        ) from error
    if not content:
        raise CaseError(f"{path} is empty; it must hold at least {_least(model)}.")
    try:
        # strict, so that true is no number and "4" none either; through JSON, because there a list
        # may stand for a tuple, a text for a path, and a date for the text of it
        return model.model_validate_json(json.dumps(content, default=_written), strict=True)
    except ValidationError as error:
        faults = _each_once(error, model)
        problems = []
        for place, fault in faults:
            at = _line_of(text, place, fault.get("ctx", {}).get("keys", ()))
            where = f"{path}, line {at}" if at else str(path)
            problems.append(_sentence(where, content, model, place, fault))
        others = problems[1 : 1 + MORE_FAULTS]
        left = len(problems) - 1 - len(others)
        told = " ".join(others) + (f" And {left} more." if left else "")
        more = f" ({len(problems) - 1} more: {told})" if others else ""
        raise CaseError(problems[0] + more, problems=problems) from error


def with_choices(model: Model, where: str, choices: Mapping[tuple[str, str], Any]) -> Model:
    """The model with other choices in it, by (table, key); ``where`` begins what a fault says.

    Raises
    ------
    CaseError
        A choice is not allowed.
    """
    content = model.model_dump()
    for (table, key), value in choices.items():
        content[table][key] = value
    return hold(content, type(model), where)


def hold(content: Mapping[str, Any], model: type[Model], where: str) -> Model:
    """Hold what would stand in such a file, given as a mapping, against a model of its tables;
    ``where`` begins what a fault says.

    Raises
    ------
    CaseError
        A key that does not exist, or a value that is not allowed.
    """
    try:
        return model.model_validate(dict(content))
    except ValidationError as error:
        place, fault = _each_once(error, model)[0]
        raise CaseError(_sentence(where, content, model, place, fault)) from error


def _text(path: Path) -> str:
    try:
        return path.read_bytes().decode("utf-8-sig")
    except OSError as error:
        reason = error.strerror or str(error)
        raise CaseError(
            f"{path} cannot be read: {reason}; give the path of a TOML file."
        ) from error
    except UnicodeDecodeError as error:
        raise CaseError(
            f"{path} is not a TOML file: byte {error.start} is not UTF-8 text; give a text file."
        ) from error


def _parsed(message: str, text: str) -> tuple[str, int, int]:
    """What the TOML parser says, with line and column."""
    for said, meant in (
        ("illegal character '\\n'", "a text in quotes does not end"),
        ("invalid statement", "there is neither key = value nor a [table]"),
    ):
        message = message.lower().replace(said, meant) if said in message.lower() else message
    message = re.sub(r"\('([^']*)',\)", r"\1", message)
    found = re.fullmatch(r"(.*?) \(at (?:line (\d+), column (\d+)|end of document)\)", message)
    lines = text.splitlines() or [""]
    if found is None:
        return _lower_first(message), len(lines), len(lines[-1]) + 1
    if found[2] is None:
        return _lower_first(found[1]), len(lines), len(lines[-1]) + 1
    return _lower_first(found[1]), int(found[2]), int(found[3])


def _written(value: Any) -> str:
    """Dates and times of TOML as text."""
    if isinstance(value, datetime) and value.tzinfo is not None:
        return f"{value.astimezone(UTC).replace(tzinfo=None).isoformat()}Z"
    if isinstance(value, date | time):
        return value.isoformat()
    raise TypeError(f"{value!r} is nothing that TOML holds")


def _lower_first(text: str) -> str:
    return text if text[:2].isupper() else text[:1].lower() + text[1:]


def _ended(text: str) -> str:
    """A sentence with one mark at its end."""
    text = text.rstrip()
    return text if text.endswith((".", "?", "!")) else text + "."


def _least(model: type[BaseModel]) -> str:
    names = [name for name, field in model.model_fields.items() if field.is_required()]
    return " and ".join(f"[{name}]" for name in names) or "one table"


# ------------------------------------------------------------------------------- where it stands


def _models_in(annotation: Any) -> list[type[BaseModel]]:
    """Models mentioned anywhere in a type annotation."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [annotation]
    return [found for part in get_args(annotation) for found in _models_in(part)]


def _walk(model: type[BaseModel], loc: Place) -> tuple[Place, type[BaseModel], FieldInfo | None]:
    """The place of the key that a location lies in, the model that holds it, and its field.

    What pydantic adds behind a key (which member of a union, which number of a list) is cut off.
    """
    place: list[str | int] = []
    holder, field = model, None
    rest = list(loc)
    while rest:
        name = rest.pop(0)
        place.append(name)
        field = holder.model_fields.get(str(name))
        inner = _models_in(field.annotation) if field else []
        if not inner or not rest:
            break
        if str(rest[0]) not in inner[0].model_fields and len(rest) > 1:
            place.append(rest.pop(0))  # the number in an array of tables, or a table's own name
        elif isinstance(rest[0], int):
            place.append(rest.pop(0))
            break
        holder = inner[0]
    return tuple(place), holder, field


def _each_once(
    error: ValidationError, model: type[BaseModel]
) -> list[tuple[Place, dict[str, Any]]]:
    """The faults with their places, one for each key."""
    found: dict[Place, dict[str, Any]] = {}
    for told in error.errors(include_url=False):
        fault: dict[str, Any] = dict(told)
        place = _walk(model, fault["loc"])[0]
        if fault["type"] == "missing" and place != fault["loc"]:
            fault["type"] = "too_short"  # a number that a list lacks
        found.setdefault(place, fault)
    # a misspelt key before the one that is missed for it
    return sorted(found.items(), key=lambda each: each[1]["type"] == "missing")


def _line_of(text: str, place: Place, inner: Iterable[str]) -> int | None:
    """Line (from 1) where a key of a TOML text stands, or else the head of its table.

    ``inner`` are keys of the table at ``place`` that a fault of the whole table may lie in.
    """
    names = tuple(part for part in place if isinstance(part, str))
    index = next((part for part in place if isinstance(part, int)), 0)
    wanted = [*((*names, key) for key in inner), names, names[:-1]]
    lines: dict[tuple[str, ...], int] = {}
    head: tuple[str, ...] = ()
    seen: Counter[tuple[str, ...]] = Counter()
    for number, line in enumerate(text.splitlines(), start=1):
        opened = re.match(r"\s*\[\[?\s*([^\[\]=]+?)\s*\]\]?\s*(#.*)?$", line)
        key = re.match(r"\s*([\w.\"' -]+?)\s*=", line)
        if opened:
            head = _dotted(opened.group(1))
            seen[head] += 1
            here = head
        elif key:
            here = head + _dotted(key.group(1))
        else:
            continue
        if not head or seen[head] == index + 1:
            lines.setdefault(here, number)
    return next((lines[names] for names in wanted if names in lines), None)


def _dotted(text: str) -> tuple[str, ...]:
    return tuple(part.strip("\"' ") for part in text.split("."))


def _value_at(content: Any, place: Place) -> Any:
    for part in place:
        content = content[part]
    return content


# ------------------------------------------------------------------------------ what is said of it


def _sentence(
    where: str, content: Any, model: type[BaseModel], place: Place, fault: dict[str, Any]
) -> str:
    """One fault as a sentence that begins with ``where``."""
    place, holder, field = _walk(model, place)
    names = [part for part in place if isinstance(part, str)]
    key = names[-1] if names else ""
    left, right = ("[[", "]]") if len(place) > len(names) else ("[", "]")
    table = f"{left}{'.'.join(names[:-1])}{right} " if len(names) > 1 else ""
    kind = fault["type"]
    if kind == "extra_forbidden":
        noun = "table" if isinstance(_value_at(content, place), dict | list) else "key"
        holds = f"{table}has no" if table else "there is no"
        return f"{where}: {holds} {noun} {key!r}; {nearest(key, holder.model_fields)}"
    if kind == "missing":
        assert field is not None
        inner = _models_in(field.annotation)
        if inner:
            return (
                f"{where}: the table [{key}] is missing; it must hold at least {_keys(inner[0])}."
            )
        meant = f", {_lower_first(field.description)}" if field.description else ""
        return _ended(f"{where}: {table}{key} is missing; give {allowed(field)}{meant}")
    is_table = bool(field and _models_in(field.annotation)) or not names
    if kind in ("choice", "value_error"):
        said = str(fault.get("ctx", {}).get("sentence") or fault["msg"])
        said = _lower_first(said.removeprefix("Value error, "))
        if is_table:
            inside = f"in {left}{'.'.join(names)}{right}, " if names else ""
            return _ended(f"{where}: {inside}{said}")
        return _ended(f"{where}: {table}{key} = {shown(_value_at(content, place))}: {said}")
    assert field is not None
    value = shown(_value_at(content, place))
    if is_table:
        return _ended(f"{where}: {key} = {value} is not allowed; it must be {allowed(field)}")
    return _ended(
        f"{where}: {table}{key} = {value} is not allowed; it must be {allowed(field)}"
        f"{_otherwise(field)}"
    )


def _keys(model: type[BaseModel]) -> str:
    names = [name for name, field in model.model_fields.items() if field.is_required()]
    return " and ".join(names) or "one key"


def _otherwise(field: FieldInfo) -> str:
    if field.is_required():
        return ""
    default = field.get_default(call_default_factory=True)
    return ", or left out" + ("" if default is None else f" for the default {shown(default)}")


def shown(value: Any) -> str:
    """A value as TOML writes it, cut where it is long."""
    if isinstance(value, bool):
        text = "true" if value else "false"
    elif isinstance(value, str | Path):
        text = json.dumps(str(value), ensure_ascii=False)
    elif isinstance(value, date | time):
        text = value.isoformat()
    elif isinstance(value, list | tuple):
        text = f"[{', '.join(shown(item) for item in value)}]"
    elif isinstance(value, dict):
        text = f"{{{', '.join(f'{k} = {shown(v)}' for k, v in value.items())}}}"
    else:
        text = str(value)
    return text if len(text) <= LONGEST_VALUE else f"{text[:LONGEST_VALUE]}..."


WORDS: dict[Any, str] = {
    bool: "true or false",
    int: "a whole number",
    float: "a number",
    str: "a text in quotes",
    Path: "a path in quotes",
    date: "a date such as 2031-05-01",
    dict: "a table",
}


def allowed(field: FieldInfo | Any, metadata: Iterable[Any] = ()) -> str:
    """What a key may hold, in words, with its bounds.

    Parameters
    ----------
    field : FieldInfo or type annotation
    metadata : iterable
        Bounds that stand beside an annotation.
    """
    if isinstance(field, FieldInfo):
        return allowed(field.annotation, (*field.metadata, *metadata))
    origin, parts = get_origin(field), get_args(field)
    if origin is Annotated:
        inner = [m for part in parts[1:] for m in getattr(part, "metadata", [part])]
        return allowed(parts[0], (*inner, *metadata))
    if origin in (Union, UnionType):
        words = [allowed(part, metadata) for part in parts if part is not NoneType]
        return _list_of(list(dict.fromkeys(words)))
    if origin is Literal:
        return f"one of {_list_of([shown(part) for part in parts])}"
    if origin is tuple and parts and parts[-1] is not Ellipsis:
        same = len(set(map(allowed, parts))) == 1
        each = _plural(allowed(parts[0])) if same else " and ".join(map(allowed, parts))
        return f"a list of {f'{len(parts)} {each}' if same else each}"
    if origin in (tuple, list):
        if _models_in(field):
            return "an array of tables"
        filled = any(getattr(m, "min_length", None) for m in metadata)
        return f"a list of {'one or more ' if filled else ''}{_plural(allowed(parts[0]))}"
    if origin is dict or _models_in(field):
        return "a table"
    return WORDS.get(field, "a value of another kind") + _bounds(metadata)


def _bounds(metadata: Iterable[Any]) -> str:
    """Bounds in words: " above 0 and below 1"."""
    told = []
    for name, word in (("gt", "above"), ("ge", "of at least"), ("lt", "below"), ("le", "at most")):
        bounds = [getattr(m, name, None) for m in metadata]
        told += [f"{word} {bound:g}" for bound in bounds if bound is not None]
    pattern = next((p for m in metadata if (p := getattr(m, "pattern", None))), None)
    if pattern:
        told.append(f"of the pattern {pattern}")
    return f" {' and '.join(told)}" if told else ""


def _list_of(words: list[str]) -> str:
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} or {words[-1]}"


def _plural(words: str) -> str:
    """ "a number above 0" as "numbers above 0"."""
    for one, many in (
        ("a whole number", "whole numbers"),
        ("a number", "numbers"),
        ("a text in quotes", "texts in quotes"),
        ("a list of", "lists of"),
    ):
        if words.startswith(one):
            return many + words.removeprefix(one)
    return words
