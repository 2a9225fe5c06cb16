"""Check the user's files against declared schemas and report every broken rule at once.

Schemas are pydantic models derived from `Options`. They are strict (no text where a number is due), closed (no unknown
keys) and finite (no NaN); TOML arrays arrive as tuples.
"""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel, ConfigDict, ValidationError

from scanfit.errors import InputError, Problem


class Options(BaseModel):
    """Base of every schema: closed, strict, frozen, finite."""

    model_config = ConfigDict(
        extra="forbid",
        strict=True,
        frozen=True,
        allow_inf_nan=False,
        validate_by_name=True,
        validate_by_alias=True,
        arbitrary_types_allowed=True,
    )


SchemaT = TypeVar("SchemaT", bound=BaseModel)


def read_toml(path: Path) -> dict[str, Any]:
    """Read a TOML file; arrays become tuples.

    Raises
    ------
    InputError
        If the file cannot be read or is not TOML.
    """
    try:
        with path.open("rb") as file:
            return {key: freeze(value) for key, value in tomllib.load(file).items()}
    except OSError as error:
        raise InputError([Problem("", f"the file cannot be read: {error.strerror}")], str(path)) from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError([Problem("", f"the file is not valid TOML: {error}")], str(path)) from None


def check(schema: type[SchemaT], data: Mapping[str, Any], where: str = "", source: str = "") -> SchemaT:
    """Build `schema` from `data`.

    Parameters
    ----------
    schema : type
        The pydantic model that states the rules.
    data : mapping
        What the user wrote.
    where : str
        Path of `data` within its file, put before the path of each problem.
    source : str
        The file, for the message.

    Raises
    ------
    InputError
        With every broken rule.
    """
    try:
        return schema.model_validate(dict(data))
    except ValidationError as error:
        raise InputError(problems_in(error, schema, where), source) from None


def problems_in(error: ValidationError, schema: type[BaseModel], where: str = "") -> list[Problem]:
    """Translate pydantic's findings into problems with path, rule, value and choices."""
    problems = []
    for item in error.errors(include_url=False):
        # pydantic marks a wrong key of a mapping by one more step.
        location = [str(part) for part in item["loc"] if part != "[key]"]
        path = ".".join(([where] if where else []) + location)
        kind, given, context = item["type"], item.get("input"), item.get("ctx", {})
        if kind == "extra_forbidden":
            holder = _schema_at(schema, item["loc"][:-1])
            problems.append(Problem(path, "unknown key", None, key_names(holder) if holder else ()))
        elif kind == "missing":
            problems.append(Problem(path, "this key is required"))
        elif kind == "value_error":
            # A validator that looks at several fields would print the whole table as the given value.
            given = None if isinstance(given, Mapping) else given
            problems.append(Problem(path, str(context.get("error", item["msg"])), given))
        elif kind == "literal_error":
            choices = [part.strip(" '\"") for part in context["expected"].replace(" or ", ", ").split(", ")]
            problems.append(Problem(path, "not one of the allowed values", given, choices))
        else:
            rule = item["msg"].replace("Input should be", "must be").replace("Input must", "must")
            problems.append(Problem(path, rule, given))
    return problems


def key_names(schema: type[BaseModel]) -> tuple[str, ...]:
    """Names of a schema's keys as the user writes them."""
    return tuple(field.alias or name for name, field in schema.model_fields.items())


def _schema_at(schema: type[BaseModel], location: tuple[int | str, ...]) -> type[BaseModel] | None:
    """The nested schema that holds `location`, or None where it is not a plain nested model."""
    for part in location:
        if isinstance(part, int):
            continue
        fields = {field.alias or name: field for name, field in schema.model_fields.items()}
        found = fields[part].annotation if part in fields else None
        kinds = (found, *getattr(found, "__args__", ()))
        nested = [kind for kind in kinds if isinstance(kind, type) and issubclass(kind, BaseModel)]
        if not nested:
            return None
        schema = nested[0]
    return schema


def freeze(value: Any) -> Any:
    """Turn lists into tuples, at every depth."""
    if isinstance(value, list):
        return tuple(freeze(item) for item in value)
    if isinstance(value, dict):
        return {key: freeze(item) for key, item in value.items()}
    return value
