"""What the models found wrong, put into sentences with file, line, key, value, range and remedy.

Turns the validation library's error list into ConfigErrors. Reads no files and checks nothing itself.
"""

from __future__ import annotations

import difflib
import types
import typing
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field

from pydantic import BaseModel, Tag, ValidationError
from pydantic_core import ErrorDetails

from sweeprig.errors import ConfigError, Where
from sweeprig.job.amounts import PROBLEM, Amount, Number, Words, as_written
from sweeprig.job.toml_source import KeyPath, Source, dotted

TOPIC = "job-files"
PARTS = ("rig", "motor", "sweep")
_WANTED = {
    "string_type": "a text in quotes is wanted",
    "bool_type": "true or false is wanted, without quotes",
    "date_type": "a date is wanted, without quotes",
    "datetime_type": "a date with time is wanted, without quotes",
    "tuple_type": "a list in square brackets is wanted",
    "list_type": "a list in square brackets is wanted",
    "dict_type": "a table is wanted",
    "model_type": "a table is wanted",
    "model_attributes_type": "a table is wanted",
}
_EXAMPLES = {
    "date_type": "Write for example 2026-03-02",
    "datetime_type": "Write for example 2026-03-02T06:30:00+01:00",
    "bool_type": "Write true or false",
}


@dataclass(frozen=True, slots=True)
class Sources:
    """The job file and the files it names for `rig`, `motor` or `sweep`; finds places for paths of the whole job."""

    job: Source
    parts: Mapping[str, Source] = field(default_factory=dict)

    def place_of(self, part: str) -> str:
        """The file in which `rig`, `motor` or `sweep` stands."""
        return self.parts.get(part, self.job).file

    def where(self, path: KeyPath) -> Where:
        part = self.parts.get(str(path[0])) if path else None
        return self.job.where(path) if part is None else part.where(path[1:])

    def written(self, path: KeyPath) -> str:
        """The value at `path` as it stands in its file; "" where it is not written."""
        part = self.parts.get(str(path[0])) if path else None
        node: object = self.job.data if part is None else part.data
        for key in path if part is None else path[1:]:
            members = dict(enumerate(node)) if isinstance(node, list) else node
            if not isinstance(members, dict) or key not in members:
                return ""
            node = members[key]
        return as_written(node)


def misfit(
    sources: Sources, path: KeyPath, what: str, allowed: str, remedy: str, topic: str = TOPIC, default: str = ""
) -> ConfigError:
    """The error of a value that is right by itself and does not fit; `default`: what holds where none is written."""
    value = sources.written(path) or (f"{default}, the default" if default else None)
    return ConfigError(what, value=value, allowed=allowed, where=sources.where(path), remedy=remedy, topic=topic)


def problems(error: ValidationError, sources: Sources, model: type[BaseModel]) -> list[ConfigError]:
    """One ConfigError for each thing that is wrong, in the order rig, motor, sweep, and by line within a file."""
    found: list[tuple[KeyPath, ConfigError]] = []
    misspelt: set[KeyPath] = set()
    details = error.errors(include_url=False)
    for detail in details:
        path = _path(detail)
        if detail["type"] == "extra_forbidden":
            near = _nearest(model, path)
            if near is not None:
                misspelt.add((*path[:-1], near))
    for detail in details:
        path = _path(detail)
        if path in misspelt and detail["type"] == "missing":
            continue  # one slip of the pen is one problem
        if detail["type"] == "too_short" and any(
            other["loc"][: len(path)] == path != other["loc"] for other in details
        ):
            continue  # the library counts only entries that are right
        found.append((path, _problem(detail, path, sources, model)))
    found.sort(key=lambda item: (_rank(item[0]), _line_of(item[1])))
    return [made for _path_, made in found]


def _rank(path: KeyPath) -> int:
    return PARTS.index(str(path[0])) if len(path) > 1 and path[0] in PARTS else -1


def _line_of(error: ConfigError) -> int:
    return (error.where.line or 0) if error.where else 0


def _path(detail: ErrorDetails) -> KeyPath:
    """The library's location without the marks it adds for mapping keys; marks of kinds stay, see `_written`."""
    return tuple(part for part in detail["loc"] if part != "[key]")


def _is_mark(part: str | int) -> bool:
    """The mark of one model among several, "[brushed]": it says whose keys these are and stands in no file."""
    return isinstance(part, str) and part.startswith("[") and part.endswith("]")


def _written(path: KeyPath) -> KeyPath:
    """The path as the file has it."""
    return tuple(part for part in path if not _is_mark(part))


def _problem(detail: ErrorDetails, path: KeyPath, sources: Sources, model: type[BaseModel]) -> ConfigError:
    kind, context = detail["type"], detail.get("ctx", {})
    where = sources.where(_written(path))
    if kind == PROBLEM:
        value, allowed, remedy = (str(context[name]) or None for name in ("value", "allowed", "remedy"))
        value = value or sources.written(_written(path)) or None
        return ConfigError(str(context["what"]), value=value, allowed=allowed, where=where, remedy=remedy, topic=TOPIC)
    if kind == "extra_forbidden":
        return _unknown_key(path, where, model)
    if kind == "missing":
        return _missing(path, where, model)
    if kind == "union_tag_invalid":
        words = tuple(tag[2:-2] for tag in str(context["expected_tags"]).split(", "))  # quotes and brackets off
        word = detail["input"]["kind"]
        return _no_such_word(as_written(word), str(word), words, sources.where((*_written(path), "kind")))
    value = as_written(detail["input"])
    if kind == "literal_error":
        return _no_such_word(value, str(detail["input"]), _literals(model, path), where)
    if kind in ("too_short", "too_long"):
        least, most = context.get("min_length"), context.get("max_length")
        allowed = f"{least} or more" if least is not None else f"up to {most}"
        what = (
            "there are too few entries" if kind == "too_short" else f"{context['actual_length']} entries are too many"
        )
        remedy = "Add some, or remove the key" if kind == "too_short" else "Remove some, or make two files"
        return ConfigError(what, value=value, allowed=allowed, where=where, remedy=remedy, topic=TOPIC)
    what, remedy = _WANTED.get(kind, detail["msg"]), _EXAMPLES.get(kind, "Look the key up in the manual")
    if kind in ("tuple_type", "list_type"):
        remedy = f"Write [{value}]"
    elif len(path) == 1 and path[0] in PARTS:
        what = f"the path of a {path[0]} file is wanted, or a table"
        remedy = f'Write {path[0]} = "{path[0]}s/….toml"'
    elif kind.startswith("model_") and isinstance(detail["input"], list):
        remedy = f"Write [{where.key}], single brackets: there is only one"
    return ConfigError(what, value=value, where=where, remedy=remedy, topic=TOPIC)


def _unknown_key(path: KeyPath, where: Where, model: type[BaseModel]) -> ConfigError:
    holder = _model_at(model, path[:-1])
    known = list(holder.model_fields) if holder else []
    near = _nearest(model, path)
    here = _written(path)[:-1]
    elsewhere = [p for p in _places(model, str(path[-1])) if p[:1] == path[:1] and p[:-1] != here]
    if near is not None:
        remedy = f'Did you mean "{near}"?'
    elif elsewhere:
        table = dotted(elsewhere[0][1:-1])
        remedy = (
            f"It belongs in the table [{table}]" if table else "It belongs at the top of the file, before any table"
        )
    else:
        remedy = "Remove it, or make it a comment with #"
    key, allowed = dotted(path[-1:]), ", ".join(known) or None
    return ConfigError("unknown key", value=key, allowed=allowed, where=where, remedy=remedy, topic=TOPIC)


def _missing(path: KeyPath, where: Where, model: type[BaseModel]) -> ConfigError:
    inner = _model_at(model, path)
    name = dotted(_written(path)[-1:])
    if len(path) == 1 and inner is not None:
        remedy = f'Name its file, {name} = "{name}s/….toml", or write the table [{name}]'
    elif inner is not None:
        remedy = f"Add the table [{where.key}]"
    else:
        kind = _kind(model, path)
        example = kind.example if kind else " or ".join(as_written(word) for word in _literals(model, path)) or "…"
        remedy = f"Add for example {name} = {example}"
    kind = _kind(model, path)
    allowed = kind.allowed if kind else None
    return ConfigError("this is required and missing", allowed=allowed, where=where, remedy=remedy, topic=TOPIC)


def _no_such_word(value: str, word: str, known: tuple[str, ...], where: Where) -> ConfigError:
    near = difflib.get_close_matches(word, known, 1, 0.5)
    remedy = f'Did you mean "{near[0]}"?' if near else "Choose one of these words"
    allowed = ", ".join(as_written(entry) for entry in known)
    return ConfigError("no such choice", value=value, allowed=allowed, where=where, remedy=remedy, topic=TOPIC)


def _nearest(model: type[BaseModel], path: KeyPath) -> str | None:
    holder = _model_at(model, path[:-1])
    near = difflib.get_close_matches(str(path[-1]), list(holder.model_fields) if holder else [], 1, 0.65)
    return near[0] if near else None


def _places(model: type[BaseModel], key: str, above: KeyPath = ()) -> Iterator[KeyPath]:
    """Paths of all fields called `key`, the shallow ones first; tables with free names are not entered."""
    if key in model.model_fields:
        yield (*above, key)
    for name, info in model.model_fields.items():
        for inner in _models_in(info.annotation):
            if typing.get_origin(info.annotation) is not dict:
                yield from _places(inner, key, (*above, name))


def _model_at(model: type[BaseModel], path: KeyPath) -> type[BaseModel] | None:
    """The model whose fields stand in the table at `path`; None where there is none."""
    annotation = _annotation_at(model, path)
    inner = _models_in(annotation) if typing.get_origin(_bare(annotation)) is not dict else []
    return inner[0] if inner else None


def _annotation_at(model: type[BaseModel], path: KeyPath) -> object:
    """The annotation of the value at `path`, walking through models, mappings and lists."""
    annotation: object = model
    for part in path:
        if _is_mark(part):
            annotation = _marked(annotation, str(part))
            continue
        annotation = _bare(annotation)
        if isinstance(annotation, type) and issubclass(annotation, BaseModel):
            info = annotation.model_fields.get(str(part))
            if info is None:
                return None
            annotation = typing.Annotated[info.annotation, *info.metadata] if info.metadata else info.annotation
        elif typing.get_origin(annotation) in (dict, tuple):
            inner = typing.get_args(annotation)
            annotation = inner[1] if typing.get_origin(annotation) is dict else inner[0]
        else:
            return None
    return annotation


def _marked(annotation: object, mark: str) -> object:
    """The arm of a union of models that carries `mark`."""
    arguments = typing.get_args(annotation)
    if any(isinstance(entry, Tag) and entry.tag == mark for entry in arguments):
        return arguments[0]
    return next((found for arm in arguments if (found := _marked(arm, mark)) is not None), None)


def _bare(annotation: object) -> object:
    """Without Annotated and without `| None`."""
    while True:
        if typing.get_origin(annotation) is typing.Annotated:
            annotation = typing.get_args(annotation)[0]
        elif typing.get_origin(annotation) in (typing.Union, types.UnionType):
            annotation = next(arm for arm in typing.get_args(annotation) if arm is not type(None))
        else:
            return annotation


def _models_in(annotation: object) -> list[type[BaseModel]]:
    if isinstance(annotation, type) and not typing.get_args(annotation) and issubclass(annotation, BaseModel):
        return [annotation]
    return [model for inner in typing.get_args(annotation) for model in _models_in(inner)]


def _kind(model: type[BaseModel], path: KeyPath) -> Amount | Number | Words | None:
    """The kind of value wanted at `path`, where it is one of ours."""
    annotation = _annotation_at(model, path)
    while True:
        arguments = typing.get_args(annotation)
        kind = next((entry for entry in arguments if isinstance(entry, Amount | Number | Words)), None)
        if kind is not None or not arguments:
            return kind
        annotation = arguments[0]


def _literals(model: type[BaseModel], path: KeyPath) -> tuple[str, ...]:
    annotation = _bare(_annotation_at(model, path))
    return typing.get_args(annotation) if typing.get_origin(annotation) is typing.Literal else ()
