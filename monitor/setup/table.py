"""Tables in files that people write: strict, frozen, and wrong values explained in the words of the file."""

from __future__ import annotations

import difflib
import json
import re
import tomllib
from collections import Counter
from collections.abc import Iterator
from types import UnionType
from typing import Any, NamedTuple, TypeVar, Union, get_args, get_origin

from pydantic import BaseModel, ConfigDict, ValidationError
from pydantic.fields import FieldInfo
from pydantic_core import ErrorDetails, PydanticCustomError

from monitor.errors import ConfigError

KeyPath = tuple[str | int, ...]


class Table(BaseModel):
    """One table: unknown keys refused, no silent conversions, immutable."""

    model_config = ConfigDict(
        extra="forbid", strict=True, frozen=True, allow_inf_nan=False, validate_default=True
    )


TableT = TypeVar("TableT", bound=Table)


def refusal(key: str | KeyPath, found: str, expected: str, todo: str = "") -> PydanticCustomError:
    """An error of a table's own checks; `key` is relative to the table or field that raises it."""
    path = (key,) if isinstance(key, str) else key
    context = {"key": path, "found": found, "expected": expected, "todo": todo}
    return PydanticCustomError("limbtell", "{expected}", context)


def validated(table: type[TableT], document: dict[str, Any], where: str, toml: str = "") -> TableT:
    """Build a table from a parsed file.

    Parameters
    ----------
    document : dict
        The parsed file.
    where : str
        Name of the file.
    toml : str
        Its text, if it is TOML: errors then name lines.

    Raises
    ------
    ConfigError
        Naming the first mistake, and the others in its advice.
    """
    try:
        return table.model_validate(_tuples(document))
    except RecursionError as error:
        raise ConfigError(where, "tables within tables without end", "a few levels") from error
    except ValidationError as error:
        details = [detail for detail in error.errors() if detail["type"] not in _CONSEQUENCES]
    raise _config_error([_mistake(table, detail, document) for detail in details], where, toml)


class Key(NamedTuple):
    """One key of a schema: its dotted path and its field."""

    path: tuple[str, ...]
    field: FieldInfo


def schema_keys(table: type[Table], prefix: tuple[str, ...] = ()) -> Iterator[Key]:
    """Every key below a table, inner tables included, in the order of the file."""
    for name, field in table.model_fields.items():
        path = (*prefix, field.alias or name)
        yield Key(path, field)
        inner = table_of(field.annotation)
        if inner is not None:
            yield from schema_keys(inner, path)


def table_of(annotation: Any) -> type[Table] | None:
    """The table inside an annotation (`X`, `X | None`, `tuple[X, ...]`), if there is one."""
    if get_origin(annotation) in (Union, UnionType, tuple):
        return next((table for part in get_args(annotation) if (table := table_of(part))), None)
    return annotation if isinstance(annotation, type) and issubclass(annotation, Table) else None


def _tuples(value: Any) -> Any:
    """Lists as tuples: what is read stays as immutable as the table."""
    if isinstance(value, dict):
        return {key: _tuples(inner) for key, inner in value.items()}
    return tuple(map(_tuples, value)) if isinstance(value, list) else value


# --- mistakes ------------------------------------------------------------------------------------

# A default that could not be derived because the key it comes from is wrong: that key is reported already.
_CONSEQUENCES = frozenset({"default_factory_not_called"})


class _Mistake(NamedTuple):
    path: KeyPath
    label: str
    found: str
    expected: str
    todo: str


def _mistake(root: type[Table], detail: ErrorDetails, document: dict[str, Any]) -> _Mistake:
    path: KeyPath = tuple(detail["loc"])
    found, expected, todo = shown(detail["input"]), _expectation(detail["msg"]), ""
    if detail["type"] == "limbtell":
        context = detail["ctx"]
        path += context["key"]
        found, expected, todo = context["found"], context["expected"], context["todo"]
    elif detail["type"] == "missing":
        meaning = _field(root, path).description or ""
        found, expected = "nothing", f"a value: {meaning.removesuffix('.')}"
    elif detail["type"] == "extra_forbidden":
        found, expected, todo = "an unknown key", "a key that limbtell knows", _nearest(root, path)
    return _Mistake(path, _label(path, document), found, expected, todo)


def shown(value: Any) -> str:
    """A value as the file has it, cut to a readable length."""
    text = json.dumps(value, default=str, ensure_ascii=False)
    return text if len(text) <= 60 else f"{text[:57]}..."


def _expectation(message: str) -> str:
    """What pydantic's sentence asks for, without its beginning and its Python words."""
    text = re.sub(r"^(Input|String|Tuple) should (be|have|match) ", "", message)
    if "pattern" in text:
        return "text without control characters"
    return re.sub("a valid dictionary or instance of .*", "a table", text).replace(
        "a valid tuple", "an array"
    )


def _names(path: KeyPath) -> tuple[str, ...]:
    return tuple(part for part in path if isinstance(part, str))


def _field(root: type[Table], path: KeyPath) -> FieldInfo:
    return next(key.field for key in schema_keys(root) if key.path == _names(path))


def _nearest(root: type[Table], path: KeyPath) -> str:
    """Advice about the known key that was probably meant: one of the same table, else one of any."""
    *table, name = _names(path)
    paths = [key.path for key in schema_keys(root)]
    here = [known[-1] for known in paths if known[:-1] == tuple(table)]
    if close := difflib.get_close_matches(name, here, 1, 0.6):
        return f"Did you mean `{close[0]}`?"
    if close := difflib.get_close_matches(name, [known[-1] for known in paths], 1, 0.8):
        there = next(known for known in paths if known[-1] == close[0])
        return f"Did you mean `{'.'.join(there)}`?"
    return f"Known here: {', '.join(here)}."


def _label(path: KeyPath, document: dict[str, Any]) -> str:
    """The key as a person writes it: `robot.joint[3] 'turn_4'.sign`."""
    label, value = "", document
    for part in path:
        label += f"[{part}]" if isinstance(part, int) else f".{part}" if label else part
        value = _inner(value, part)
        if isinstance(part, int) and isinstance(value, dict) and isinstance(value.get("name"), str):
            label += f" {value['name']!r}"
    return label


def _inner(value: Any, part: str | int) -> Any:
    if isinstance(value, dict):
        return value.get(part)
    return value[part] if isinstance(value, list) and isinstance(part, int) and part < len(value) else None


def _config_error(mistakes: list[_Mistake], where: str, toml: str) -> ConfigError:
    """The first mistake in the order of the file as the error, the others in its advice."""
    lines = _lines(toml)

    def line(mistake: _Mistake) -> int:
        """Line of the key, or of the innermost table around it; 0 if none is written."""
        cuts = range(len(mistake.path), 0, -1)
        return next((lines[mistake.path[:cut]] for cut in cuts if mistake.path[:cut] in lines), 0)

    def place(mistake: _Mistake) -> str:
        return f"line {line(mistake)}: {mistake.label}" if line(mistake) else mistake.label

    first, *others = sorted(mistakes, key=line)
    advice = [first.todo] if first.todo else []
    if others:
        sentences = (
            str(ConfigError(place(other), other.found, other.expected, other.todo)) for other in others
        )
        advice.append(f"Also wrong: {' | '.join(sentences)}")
    separator = ", " if line(first) else ": "
    return ConfigError(f"{where}{separator}{place(first)}", first.found, first.expected, " ".join(advice))


# --- lines ---------------------------------------------------------------------------------------


def _lines(toml: str) -> dict[KeyPath, int]:
    """Line of every key. The text is valid TOML, so each statement in it is a valid document of its own."""
    lines: dict[KeyPath, int] = {}
    tables: Counter[KeyPath] = Counter()
    table: KeyPath = ()
    statement, start = "", 1
    for number, line in enumerate(toml.split("\n"), 1):
        statement += f"{line}\n"
        try:
            parsed = tomllib.loads(statement)
        except (ValueError, RecursionError):
            continue
        if statement.lstrip().startswith("["):
            table = _header(parsed, tables)
            lines.setdefault(table, start)
            lines.setdefault(table[:-1], start)
        else:
            for key in _paths(parsed):
                lines.setdefault(table + key, start)
        statement, start = "", number + 1
    return lines


def _header(parsed: dict[str, Any], tables: Counter[KeyPath]) -> KeyPath:
    """Full path of a table's header; `tables` counts the elements of arrays of tables."""
    path: KeyPath = ()
    inner: Any = parsed
    while inner:
        name, inner = next(iter(inner.items()))
        path += (name,)
        if isinstance(inner, list):
            tables[path] += 1
            inner = inner[0]
        if tables[path]:
            path += (tables[path] - 1,)
    return path


def _paths(value: Any, path: KeyPath = ()) -> Iterator[KeyPath]:
    if path:
        yield path
    inner = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    for part, below in inner:
        yield from _paths(below, (*path, part))
