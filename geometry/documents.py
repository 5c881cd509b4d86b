"""YAML files in which every value knows its line and column, and the models they are held against.

A file is read once, as bytes; what is hashed is what was parsed. Nothing is guessed: a duplicate key, a tab, an alias,
a sexagesimal (``1:30``), an octal (``010``) and a number that is not finite are refused, all with their place.
"""

from __future__ import annotations

import json
import math
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Annotated, Any, Final, Literal, TypeAlias, TypeVar

import yaml
from pydantic import BaseModel, BeforeValidator, ConfigDict, ValidationError, WithJsonSchema

from .errors import InputError, did_you_mean

Key: TypeAlias = "str | int"
Path: TypeAlias = "tuple[Key, ...]"
Place: TypeAlias = "tuple[int, int]"

DEEPEST_NESTING: Final = 40
# Tags of unions in models: pydantic puts them into paths, no message shows them.
UNION_TAGS: Final = ("<file>", "<list>", "<word>", "<keys>")
LARGEST_NUMBER: Final = 1e300
# No head, coil or room is larger.
FARTHEST_MM: Final = 1e5
_SEXAGESIMAL: Final = re.compile(r"[-+]?[0-9][0-9_]*(:[0-5]?[0-9])+(\.[0-9_]*)?")
_OCTAL: Final = re.compile(r"[-+]?0[0-7_]+")
_ALMOST_NUMBER: Final = re.compile(r"[-+]?(\d+\.?\d*|\.\d+)[eE][-+]?\d+")


class Model(BaseModel):
    """A part of a file: unknown keys, wrong types and numbers that are not finite are refused; values are frozen."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True, allow_inf_nan=False)


AnyModel = TypeVar("AnyModel", bound=Model)


@dataclass(frozen=True)
class Document:
    """A parsed file.

    Attributes
    ----------
    name : str
        The path as messages show it.
    value : dict
        Plain Python values.
    places : mapping from path to (line, column)
        Both from 1; a path is the tuple of keys and indices that leads to a value.
    raw : mapping from path to str
        Scalars as they were typed.
    problems : mapping from path to str
        What YAML itself got wrong; `validate` says it together with everything else.
    """

    name: str
    value: dict[str, Any]
    places: Mapping[Path, Place]
    raw: Mapping[Path, str] = field(default_factory=dict)
    problems: Mapping[Path, str] = field(default_factory=dict)

    def place(self, path: Path) -> Place:
        """Return line and column of a value, or of the nearest thing around it that exists."""
        while path and path not in self.places:
            path = path[:-1]
        return self.places.get(path, (1, 1))

    def located(self, line: str) -> str:
        """Put the place before a line that begins with a key of this file (``order.kind: ...``)."""
        key, separator, rest = line.partition(": ")
        path: Path = tuple(key.split("."))
        return f"{self.at(path)}{separator}{rest}" if path in self.places else f"{self.name}:1:1: {line}"

    def at(self, path: Path) -> str:
        """Return ``name:line:column: dotted.path`` of a value, or of the nearest thing around it that exists."""
        where = ":".join([self.name, *map(str, self.place(path))])
        return f"{where}: {dotted(path)}" if path else where


def dotted(path: Path) -> str:
    """Return ``targets[0].at_mm`` for ``("targets", 0, "at_mm")``.

    Examples
    --------
    >>> dotted(("targets", 0, "at_mm"))
    'targets[0].at_mm'
    """
    text = ""
    for key in path:
        text += f"[{key}]" if isinstance(key, int) else f".{key}" if text else str(key)
    return text


def read_yaml(data: bytes, name: str) -> Document:
    """Parse one YAML mapping with the place of every value.

    Parameters
    ----------
    data : bytes
        The file.
    name : str
        Its path, for messages.

    Raises
    ------
    InputError
        Text that is no YAML mapping at all; what is wrong with single values waits for `validate`.

    Examples
    --------
    >>> read_yaml(b"coil: [1, 2]", "a.yaml").at(("coil", 1))
    'a.yaml:1:11: coil[1]'
    """
    try:
        text = data.decode("utf-8")
    except UnicodeDecodeError as error:
        raise InputError(f"{name}:1:1: not UTF-8 text (byte {error.start}); save the file as UTF-8") from None
    root = _compose(text, name)
    if not isinstance(root, yaml.MappingNode):
        raise InputError(f"{name}:1:1: expected keys and values (`key: value`), got something else or nothing")
    builder = _Builder(name)
    value = builder.build(root, ())
    return Document(name, value, builder.places, builder.raw, builder.problems)


def _compose(text: str, name: str) -> yaml.Node | None:
    problem = next(_forbidden_events(text, name), None)
    if problem:
        raise InputError(problem)
    try:
        return yaml.compose(text, Loader=yaml.SafeLoader)
    except yaml.YAMLError as error:  # two documents in one file
        raise InputError(_yaml_problem(error, name)) from None


def _forbidden_events(text: str, name: str) -> Iterator[str]:
    depth = 0
    try:
        for event in yaml.parse(text, Loader=yaml.SafeLoader):
            mark = event.start_mark
            where = f"{name}:{mark.line + 1}:{mark.column + 1}" if mark else name
            if isinstance(event, yaml.AliasEvent):
                yield f"{where}: an alias (*{event.anchor}) is not used here; write the value out"
            depth += isinstance(event, yaml.CollectionStartEvent) - isinstance(event, yaml.CollectionEndEvent)
            if depth > DEEPEST_NESTING:
                yield f"{where}: nested deeper than {DEEPEST_NESTING} levels; no file of this kind needs that"
                return
    except yaml.YAMLError as error:
        yield _yaml_problem(error, name)


def _yaml_problem(error: yaml.YAMLError, name: str) -> str:
    mark = getattr(error, "problem_mark", None)
    what = str(getattr(error, "problem", None) or getattr(error, "reason", None) or error)
    if "'\\t'" in what:
        what = "a tab where YAML wants spaces; indent with spaces"
    where = f"{name}:{mark.line + 1}:{mark.column + 1}" if mark else f"{name}:1:1"
    return f"{where}: {what}"


class _Builder:
    """Turns nodes into values, keeps their places, collects everything that is wrong."""

    def __init__(self, name: str) -> None:
        self.name = name
        self.places: dict[Path, Place] = {}
        self.raw: dict[Path, str] = {}
        self.problems: dict[Path, str] = {}

    def build(self, node: yaml.Node, path: Path) -> Any:
        self.places[path] = (node.start_mark.line + 1, node.start_mark.column + 1)
        if isinstance(node, yaml.MappingNode):
            return self._mapping(node, path)
        if isinstance(node, yaml.SequenceNode):
            return [self.build(child, (*path, i)) for i, child in enumerate(node.value)]
        return self._scalar(node, path)

    def _mapping(self, node: yaml.MappingNode, path: Path) -> dict[str, Any]:
        result: dict[str, Any] = {}
        for key_node, child in node.value:
            mark = key_node.start_mark
            where = f"{self.name}:{mark.line + 1}:{mark.column + 1}"
            if not isinstance(key_node, yaml.ScalarNode):
                self._say(where, f"{where}: expected a word as key")
                continue
            key = key_node.value
            at = (*path, key)
            if key in result:
                self._say(where, f"{where}: {dotted(at)}: this key stands here twice; keep one")
                continue
            result[key] = self.build(child, at)
            self.places[at] = (mark.line + 1, mark.column + 1)
        return result

    def _say(self, where: str, problem: str) -> None:
        """Remember a problem of a key: it belongs to no value's path, so it hides no other problem."""
        at: Path = (where,)
        line, column = where.rsplit(":", 2)[1:]
        self.places[at] = (int(line), int(column))
        self.problems[at] = problem

    def _scalar(self, node: yaml.Node, path: Path) -> Any:
        text, kind = str(node.value), node.tag.rpartition(":")[2]
        self.raw[path] = text
        where = f"{self.name}:{node.start_mark.line + 1}:{node.start_mark.column + 1}: {dotted(path)}"
        if kind in ("int", "float"):
            return self._number(text, kind, where, path)
        if kind == "bool":
            return text.lower() in ("yes", "true", "on")
        if kind == "null":
            return None
        if kind not in ("str", "timestamp"):
            self.problems[path] = f"{where}: the tag {node.tag!r} is not used here; write a plain value"
        return text

    def _number(self, text: str, kind: str, where: str, path: Path) -> Any:
        problem = None
        value: Any = None
        if _SEXAGESIMAL.fullmatch(text):
            problem = f"{text} is a base-60 number to YAML; write plain seconds, or quote text"
        elif _OCTAL.fullmatch(text):
            problem = f"{text} is an octal number to YAML; take out the leading zero, or quote text"
        elif "_" in text:
            problem = f"{text} is a number to YAML; take out the underscore, or quote text"
        else:
            try:
                value = yaml.safe_load(text)
            except ValueError:
                value = math.inf
            if isinstance(value, str) or not abs(value) <= LARGEST_NUMBER:
                wanted = (
                    "a finite number" if text.lstrip("+-").startswith(".") else f"a number below {LARGEST_NUMBER:g}"
                )
                problem = f"expected {wanted}, got {text[:40]}"
        if problem:
            self.problems[path] = f"{where}: {problem}"
            return None
        return int(value) if kind == "int" else float(value)


def validate(document: Document, model: type[AnyModel], path: Path = ()) -> AnyModel:
    """Hold a document, or the part of it at `path`, against a model; all errors at once.

    Raises
    ------
    InputError
        ``file:line:column: key: what was expected, what came, the remedy``, one line each.
    """
    value: Any = document.value
    for key in path:
        value = value[key]
    said = document.problems
    lines = [(document.place(at), line) for at, line in said.items()]
    try:
        checked = model.model_validate_json(json.dumps(value, allow_nan=False))
    except ValidationError as error:
        known = _all_keys(model.model_json_schema())
        details = _innermost(error.errors(include_url=False))
        for detail in details:
            at = _as_written(document, path, detail["loc"])
            if not any(other[: len(at)] == at for other in said):
                lines.append((document.place(at), _explain(document, at, detail, known)))
    if lines:
        raise InputError(*dict.fromkeys(line for _, line in sorted(lines, key=lambda item: item[0])))
    return checked


def _as_written(document: Document, start: Path, keys: Path) -> Path:
    """A value's path without the index that a before-validator adds when it makes one value a list of one."""
    path = start
    for key in keys:
        if not (isinstance(key, int) and (*path, key) not in document.places):
            path = (*path, key)
    return path


def _innermost(details: list[Any]) -> list[Any]:
    """Leave out what is said of a whole because a part of it is wrong."""
    details = [detail | {"loc": tuple(k for k in detail["loc"] if k not in UNION_TAGS)} for detail in details]
    paths = [detail["loc"] for detail in details]
    return [d for d in details if not any(p != d["loc"] and p[: len(d["loc"])] == d["loc"] for p in paths)]


def _all_keys(schema: Any) -> set[str]:
    if isinstance(schema, list):
        return set().union(*map(_all_keys, schema)) if schema else set()
    if not isinstance(schema, dict):
        return set()
    keys = set(schema.get("properties", {}))
    return keys.union(*(_all_keys(part) for part in schema.values()))


def _explain(document: Document, path: Path, detail: Any, known: set[str]) -> str:
    kind, context = detail["type"], detail.get("ctx", {})
    at = document.at(path)
    if kind == "missing":
        return f"{at}: missing; this key is required"
    if kind == "extra_forbidden":
        return f"{at}: unknown key{did_you_mean(str(path[-1]), known)}"
    if kind == "value_error":
        return f"{at}: {context['error']}"
    return (
        f"{at}: expected {_expected(kind, context, detail['msg'])}, got {_came(document, path, kind, detail['input'])}"
    )


def _expected(kind: str, context: Mapping[str, Any], message: str) -> str:
    plain = {
        "float_type": "a number",
        "int_type": "a whole number",
        "int_from_float": "a whole number",
        "string_type": "text",
        "bool_type": "true or false",
        "model_type": "keys and values",
        "dict_type": "keys and values",
        "tuple_type": "a list",
        "list_type": "a list",
        "date_from_datetime_parsing": "a date such as 2027-06-30",
        "date_parsing": "a date such as 2027-06-30",
        "date_type": "a date such as 2027-06-30",
    }
    bounds = {"greater_than": "gt", "greater_than_equal": "ge", "less_than": "lt", "less_than_equal": "le"}
    words = {"gt": "more than", "ge": "at least", "lt": "less than", "le": "at most"}
    if kind in plain:
        return plain[kind]
    if kind in bounds:
        return f"{words[bounds[kind]]} {context[bounds[kind]]:g}"
    if kind == "literal_error":
        return f"one of {context['expected']}"
    if kind in ("too_short", "too_long"):
        bound = context.get("min_length", context.get("max_length"))
        return f"{'at least' if kind == 'too_short' else 'at most'} {bound} values"
    if kind == "string_pattern_mismatch":
        return f"text that matches {context['pattern']}"
    return message.removeprefix("Input should be ").removeprefix("a valid ")


def _came(document: Document, path: Path, kind: str, value: Any) -> str:
    raw = document.raw.get(path)
    if isinstance(value, str):
        hint = ": to YAML this is text; write it as 1.0e-05" if _ALMOST_NUMBER.fullmatch(value) else ""
        return f"the text {value[:60]!r}{hint}"
    if isinstance(value, bool):
        remedy = "; put text in quotes" if kind == "string_type" else ""
        return f"{raw or value}, which is true or false to YAML{remedy}"
    if isinstance(value, int | float):
        return f"the number {raw or value}" + ("; put text in quotes" if kind == "string_type" else "")
    if value is None:
        return "nothing"
    return f"a list of {len(value)} values" if isinstance(value, list) else "keys and values"


@dataclass(frozen=True)
class AlsoAccepts:
    """Says in the JSON Schema that a before-validator takes another form as well.

    Parameters
    ----------
    other : dict, optional
        Schema of that form; left out, it is one item of the list.
    """

    other: dict[str, Any] | None = None

    def __get_pydantic_json_schema__(self, core_schema: Any, handler: Any) -> dict[str, Any]:
        base = handler(core_schema)
        return {"anyOf": [base["items"] if self.other is None else self.other, base]}

    def __hash__(self) -> int:
        return 0  # a schema is no key; annotations of one type may share a bucket


def _whole_one(value: Any) -> Any:
    if type(value) is not int or value != 1:
        raise ValueError(f"expected 1, the version that this program reads, got {value!r}")
    return value


Version: TypeAlias = Annotated[Literal[1], BeforeValidator(_whole_one)]


def _from_list(value: Any) -> Any:
    if isinstance(value, list) and (
        len(value) != 3 or any(isinstance(v, bool) or not isinstance(v, int | float) for v in value)
    ):
        raise ValueError(f"expected three numbers [x, y, z], got {value}")
    if isinstance(value, list) and not all(abs(v) <= FARTHEST_MM for v in value):
        raise ValueError(f"expected coordinates within {FARTHEST_MM:g} mm, got {value}")
    return tuple(value) if isinstance(value, list) else value


Vector3: TypeAlias = Annotated[tuple[float, float, float], BeforeValidator(_from_list)]


def _number_or_pair(value: Any) -> Any:
    pair = value if isinstance(value, list) else [value, value]
    if len(pair) != 2 or any(isinstance(v, bool) or not isinstance(v, int | float) for v in pair):
        came = f"the text {value!r}" if isinstance(value, str) else repr(value)
        raise ValueError(f"expected one number or [shortest, longest], got {came}")
    return tuple(pair)


NumberOrPair: TypeAlias = Annotated[
    tuple[float, float],
    BeforeValidator(_number_or_pair),
    WithJsonSchema(
        {"anyOf": [{"type": "number"}, {"type": "array", "items": {"type": "number"}, "minItems": 2, "maxItems": 2}]}
    ),
]
