"""pydantic models of one mapping each, and their errors as problems that a finding can be made of."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any, TypeVar

from pydantic import BaseModel, ConfigDict, ValidationError
from pydantic_core import ErrorDetails, PydanticCustomError


class Shape(BaseModel):
    """What the keys of one mapping may hold. Mappings inside it have shapes of their own."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    @classmethod
    def written_keys(cls) -> tuple[str, ...]:
        """The keys as they are written in the file."""
        return tuple(info.alias or name for name, info in cls.model_fields.items())


ShapeT = TypeVar("ShapeT", bound=Shape)


def unfit(
    expected: str, found: str | None = None, remedy: str = "", near: tuple[str, Iterable[str]] | None = None
) -> PydanticCustomError:
    """The error of a value that does not fit. Without `found` the value itself is named."""
    context = {"expected": expected, "found": found, "remedy": remedy, "near": near}
    return PydanticCustomError("unfit", "{expected}", context)


@dataclass(frozen=True)
class Problem:
    """One error of a model: `at` is the path inside the mapping."""

    at: tuple[str | int, ...]
    expected: str
    found: str | None = None
    remedy: str = ""
    near: tuple[str, Iterable[str]] | None = None
    unknown: bool = False
    missing: bool = False


def problems(model: type[ShapeT], value: Mapping[str, Any]) -> tuple[ShapeT | None, list[Problem]]:
    """The value in a model's shape, and what does not fit; what does not fit is left out when the rest can stand."""
    try:
        return model.model_validate(value), []
    except ValidationError as error:
        found = [_problem(detail) for detail in error.errors(include_url=False, include_input=False)]
    wrong = {problem.at[0] for problem in found}
    try:
        return model.model_validate({key: item for key, item in value.items() if key not in wrong}), found
    except ValidationError:
        return None, found


_LISTS = ("list_type", "tuple_type")


def _problem(detail: ErrorDetails) -> Problem:
    at, kind = detail["loc"], detail["type"]
    if kind == "unfit":
        return Problem(at, **detail["ctx"])
    if kind in _LISTS:
        return Problem(at, "a list, such as [one, two]")
    return Problem(at, detail["msg"], unknown=kind == "extra_forbidden", missing=kind == "missing")
