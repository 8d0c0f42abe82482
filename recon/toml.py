"""Descriptions that people write as TOML: one clear line per mistake, units in the field names.

Reading is the standard library's; validation is pydantic's; this module turns what they find into
`InputError` lines that say where the mistake is and which field was probably meant.
"""

from __future__ import annotations

import json
import tomllib
from collections.abc import Mapping, Sequence
from difflib import get_close_matches
from pathlib import Path
from typing import Annotated, Any, Self, TypeVar, get_args

import numpy as np
from pydantic import BaseModel, BeforeValidator, ConfigDict, ValidationError

from recon.errors import InputError
from recon.files import atomic_path

Location = tuple[int | str, ...]
Model = TypeVar("Model", bound=BaseModel)


class DescriptionError(InputError):
    """Several mistakes in one description: the message has one line for each."""

    def __init__(self, mistakes: Sequence[InputError]) -> None:
        ValueError.__init__(self, "\n".join(str(mistake) for mistake in mistakes))
        self.mistakes = tuple(mistakes)


def _plain_number(value: object) -> object:
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, str | bool):
        raise ValueError("must be a number")
    return value


Number = Annotated[float, BeforeValidator(_plain_number)]
"""A finite number; text and true/false are refused."""

Count = Annotated[int, BeforeValidator(_plain_number)]
"""A whole number; text and true/false are refused."""


class Description(BaseModel):
    """A frozen set of typed fields: unknown names, NaN and infinities are refused.

    Raises
    ------
    InputError
        From the constructor and every reader: one line per mistake.
    """

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)

    def __init__(self, **fields: Any) -> None:
        try:
            super().__init__(**fields)
        except ValidationError as error:
            raise mistakes(error, type(self), type(self).__name__) from None

    # Only calls from Python pass here; nested fields are validated by pydantic directly.
    __init__.__pydantic_base_init__ = True  # type: ignore[attr-defined]

    @classmethod
    def from_toml(cls, path: Path | str) -> Self:
        """Read a description from a TOML file."""
        return validated(cls, read_toml(path), str(path))

    def to_toml(self, path: Path | str) -> None:
        """Write the description as a TOML file; fields without a value are left out."""
        write_toml(path, self.model_dump(mode="json", exclude_none=True))

    @classmethod
    def from_json(cls, text: str) -> Self:
        """Read a description from JSON text, such as a record carries."""
        return validated(cls, read_json(text, cls.__name__), cls.__name__)

    def to_json(self) -> str:
        """The description as one line of JSON."""
        return self.model_dump_json(exclude_none=True)


def read_toml(path: Path | str) -> dict[str, Any]:
    """Parse a TOML file.

    Raises
    ------
    InputError
        The file is missing, unreadable, not UTF-8 or not TOML.
    """
    try:
        return tomllib.loads(Path(path).read_bytes().decode())
    except OSError as error:
        reason = error.strerror or str(error)
        raise InputError(f"cannot be read ({reason})", str(path)) from error
    except UnicodeDecodeError as error:
        raise InputError("is not UTF-8 text", str(path), "give a TOML file") from error
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"is not valid TOML: {error}", str(path)) from error


def read_json(text: str, where: str) -> Any:
    """Parse JSON text, or raise one line that names `where` it came from."""
    try:
        return json.loads(text)
    except ValueError as error:
        raise InputError(f"is not valid JSON: {error}", where) from error


def validated(model: type[Model], data: object, where: str) -> Model:
    """`data` as a `model`, or an `InputError` with one line per mistake."""
    try:
        return model.model_validate(data)
    except ValidationError as error:
        raise mistakes(error, model, where) from None


def mistakes(error: ValidationError, model: type[BaseModel], where: str) -> InputError:
    """Turn pydantic's findings into lines; a misspelt field and the missing one become one line."""
    found = error.errors(include_url=False, include_context=False)
    missing = {tuple(item["loc"]) for item in found if item["type"] == "missing"}
    lines: list[InputError] = []
    explained: set[Location] = set()
    for item in found:
        if item["type"] == "extra_forbidden":
            location = tuple(item["loc"])
            line, meant = _unknown_field(location, missing, model, where)
            lines.append(line)
            explained.add(meant)
    for item in found:
        if item["type"] != "extra_forbidden" and tuple(item["loc"]) not in explained:
            lines.append(_mistake(item["type"], tuple(item["loc"]), item, where))
    return lines[0] if len(lines) == 1 else DescriptionError(lines)


def _unknown_field(
    location: Location, missing: set[Location], model: type[BaseModel], where: str
) -> tuple[InputError, Location]:
    parent, name = location[:-1], str(location[-1])
    absent = [str(other[-1]) for other in missing if other[:-1] == parent]
    known = _field_names(model, parent)
    close = get_close_matches(name, absent, 1, 0.5) or get_close_matches(name, known, 1)
    mend = f"did you mean '{close[0]}'?" if close else f"known fields: {', '.join(known)}"
    line = InputError(f"unknown field '{name}'", _place(where, parent), mend)
    return line, (*parent, close[0]) if close else location


def _mistake(kind: str, location: Location, item: Mapping[str, Any], where: str) -> InputError:
    if kind == "missing":
        place, name = _place(where, location[:-1]), location[-1]
        what = f"field '{name}'" if isinstance(name, str) else f"number {name + 1}"
        return InputError(f"{what} is missing", place)
    message = str(item["msg"]).removeprefix("Value error, ")
    message = message.replace("Input should be", "must be")
    if kind == "model_type":
        message = "must be a section with fields"
    given = repr(item["input"])
    if isinstance(item["input"], Mapping | BaseModel) or len(given) > 60:
        return InputError(message, _place(where, location))
    return InputError(f"{message}, not {given}", _place(where, location))


def _place(where: str, location: Location) -> str:
    """`file: species 2, shift_ppm`; items of a list are counted from 1."""
    words = ""
    for part in location:
        if isinstance(part, int):
            words += f" {part + 1}"
        else:
            words += f", {part}" if words else str(part)
    return f"{where}: {words}" if words else where


def _field_names(model: type[BaseModel], location: Location) -> list[str]:
    """Names of the fields of the model found at `location` inside `model`."""
    for part in location:
        if isinstance(part, str):
            field = model.model_fields.get(part)
            inner = _model_in(field.annotation) if field else None
            if inner is None:
                return []
            model = inner
    return list(model.model_fields)


def _model_in(annotation: object) -> type[BaseModel] | None:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    inner = (_model_in(part) for part in get_args(annotation))
    return next((model for model in inner if model is not None), None)


def write_toml(path: Path | str, data: Mapping[str, Any]) -> None:
    """Write plain data (numbers, text, lists, tables, lists of tables) as TOML, atomically."""
    with atomic_path(path) as temporary:
        temporary.write_text(toml_text(data), encoding="utf-8")


def toml_text(data: Mapping[str, Any]) -> str:
    """Plain data as TOML text: values first, then one section per table."""
    return "\n".join(_table_lines(data, "")).strip() + "\n"


def _table_lines(table: Mapping[str, Any], prefix: str) -> list[str]:
    lines, sections = [], []
    for key, value in table.items():
        name = f"{prefix}{_key(key)}"
        if isinstance(value, Mapping):
            sections += ["", f"[{name}]", *_table_lines(value, f"{name}.")]
        elif isinstance(value, list) and value and all(isinstance(v, Mapping) for v in value):
            for item in value:
                sections += ["", f"[[{name}]]", *_table_lines(item, f"{name}.")]
        else:
            lines.append(f"{_key(key)} = {_value(value)}")
    return lines + sections


def _key(key: str) -> str:
    plain = key.replace("-", "").replace("_", "")
    return key if plain.isascii() and plain.isalnum() else _text(key)


def _value(value: object) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return _text(value)
    if isinstance(value, int | float):
        return repr(value)
    if isinstance(value, list | tuple):
        return "[" + ", ".join(_value(item) for item in value) + "]"
    raise TypeError(f"cannot write {type(value).__name__} as TOML")


def _text(text: str) -> str:
    # A JSON string is a TOML basic string, save for the delete character.
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")
