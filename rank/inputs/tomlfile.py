"""Read a TOML file into a validated model, reporting everything that is wrong with it at once."""

from __future__ import annotations

import difflib
import re
import tomllib
from decimal import Decimal, InvalidOperation
from pathlib import Path as FilePath
from typing import TYPE_CHECKING, Annotated, Any, TypeVar, cast, get_args, get_origin

from pydantic import BaseModel, BeforeValidator, ConfigDict, ValidationError

from capmuster import catalogs
from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.inputs.faults import Fault, FaultsError, field_name
from capmuster.rank.inputs.quantity import Sign, Unit, parse_quantity, show_value
from capmuster.rank.inputs.tomlplace import Places

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

    from pydantic.fields import FieldInfo
    from pydantic_core import ErrorDetails

    from capmuster.rank.inputs.tomlplace import Path

    Keys = tuple[str, ...]

Model = TypeVar("Model", bound="Section")


class Section(BaseModel):
    """A table of a file: only the fields it declares."""

    model_config = ConfigDict(extra="forbid", frozen=True)


def quantity(
    unit: Unit, sign: Sign = "positive", *, least: float | None = None, most: float | None = None
) -> BeforeValidator:
    """Make the validator of a field that holds a quantity; the field's value is a float [`unit`]."""
    return BeforeValidator(
        lambda value: float(parse_quantity(value, unit, sign=sign, least=least, most=most))
    )


def choice(*words: str) -> BeforeValidator:
    """Make the validator of a field that holds one of some words."""

    def check(value: object) -> object:
        if value not in words:
            near = difflib.get_close_matches(str(value), words, n=1)
            hint = f" (did you mean {near[0]!r}?)" if near else ""
            raise CapmusterError(
                f"value {show_value(value)} is unknown{hint}", accepted=" or ".join(map(repr, words))
            )
        return value

    return BeforeValidator(check)


def whole(least: int, most: int) -> BeforeValidator:
    """Make the validator of a field that holds a whole number within limits."""

    def check(value: object) -> object:
        if isinstance(value, bool) or not isinstance(value, int) or not least <= value <= most:
            raise CapmusterError(
                f"value {show_value(value)} is not allowed", accepted=f"a whole number from {least} to {most}"
            )
        return value

    return BeforeValidator(check)


def _one_line(value: object) -> object:
    if not isinstance(value, str) or not value.strip() or not value.isprintable():
        raise CapmusterError(
            f"value {show_value(value)} is not a name", accepted="one line of text, in quotes"
        )
    return value.strip()


Line = Annotated[str, BeforeValidator(_one_line)]
"""One line of printable text."""


def load_model(path: FilePath, model: type[Model], what: str) -> tuple[Model, Places]:
    """Read and validate a TOML file.

    Parameters
    ----------
    path
        The file.
    model
        What it must hold.
    what
        What the file is, for messages: "brief", "technology".

    Returns
    -------
    Model
        The content, in base units.
    Places
        The lines of its fields, for checks that follow.

    Raises
    ------
    CapmusterError
        If the file cannot be read, is no TOML, or holds anything but what the model accepts: one line for
        each fault, with file and line.
    """
    text = _read(path, what)
    document = _parse(path, text)
    places = Places(str(path), text)
    try:
        return model.model_validate(document), places
    except ValidationError as error:
        raise FaultsError(_faults(error.errors(include_url=False), model), places) from None


def locate(
    name_or_path: str | FilePath, shelf: catalogs.Shelf, what: str, beside: FilePath | None
) -> FilePath:
    """Find a file that the user named.

    Parameters
    ----------
    name_or_path
        A shipped file's name, or a path: anything that has a folder or the suffix ``.toml``.
    shelf
        Where the shipped ones are.
    what
        What the file is, for messages.
    beside
        Folder that a relative path starts from; the working directory if None.

    Returns
    -------
    pathlib.Path
        The file; a path that the user gave need not exist yet.

    Raises
    ------
    CapmusterError
        If it is a name and nothing shipped has it; the message lists what is shipped.
    """
    path = FilePath(name_or_path)
    if path.suffix == ".toml" or len(path.parts) > 1:
        return beside / path if beside else path
    shipped = catalogs.find(shelf, str(name_or_path))
    if shipped is None:
        known = ", ".join(catalogs.names(shelf))
        near = difflib.get_close_matches(str(name_or_path), catalogs.names(shelf), n=1)
        hint = f"; did you mean {near[0]!r}?" if near else ""
        raise CapmusterError(
            f"unknown {what} {str(name_or_path)!r}{hint}", accepted=f"{known}, or the path of a .toml file"
        )
    return shipped


def _read(path: FilePath, what: str) -> str:
    try:
        content = path.read_bytes()
    except OSError as error:
        raise CapmusterError(
            f"{what} {str(path)!r} cannot be read: {error.strerror}", accepted="a TOML file"
        ) from None
    try:
        return content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        raise CapmusterError("not UTF-8 text", accepted="a TOML file", place=f"{path}:{line}") from None


def _parse(path: FilePath, text: str) -> dict[str, Any]:
    # Numbers stay decimal, so that 0.1 in a file is one tenth.
    try:
        return tomllib.loads(text, parse_float=_decimal)
    except tomllib.TOMLDecodeError as error:
        message = str(error)
        found = re.search(r" \(at line (\d+), column \d+\)$", message)
        line = int(found[1]) if found else text.count("\n") + 1
        problem = re.sub(r" \(at [^)]*\)$", "", message)
        raise CapmusterError(
            f"not valid TOML: {problem}", accepted='lines such as minimum = "3.0 V"', place=f"{path}:{line}"
        ) from None
    except (ValueError, RecursionError):  # an integer of thousands of digits, lists a thousand deep
        raise CapmusterError(f"{str(path)!r} is too deep or holds too long a number") from None


def _decimal(text: str) -> Decimal:
    try:
        return Decimal(text)
    except InvalidOperation:  # an exponent beyond all bounds
        return Decimal("inf")


def _faults(errors: list[ErrorDetails], model: type[Section]) -> list[Fault]:
    """Translate validation errors; a misspelt field hides the message that the right one is missing."""
    fields = dict(_fields(model))
    unknown = [
        _unknown_field(error["loc"], tuple(fields)) for error in errors if error["type"] == "extra_forbidden"
    ]
    meant = {path for _, path in unknown}
    rest = [error for error in errors if error["type"] != "extra_forbidden" and error["loc"] not in meant]
    return [fault for fault, _ in unknown] + [fault for error in rest for fault in _translated(error, fields)]


def _translated(error: ErrorDetails, fields: dict[Keys, FieldInfo]) -> list[Fault]:
    path, shown = error["loc"], show_value(error["input"])
    cause = error.get("ctx", {}).get("error")
    if isinstance(cause, FaultsError):
        return cause.below(path)
    if isinstance(cause, CapmusterError):
        return [Fault(path, cause.problem, cause.accepted)]
    match error["type"]:
        case "missing":
            accepted = _accepted(path, fields[_keys_of(path)])
            return [Fault(path, f"missing field {path[-1]!r}", accepted, named=True)]
        case "model_type":
            return [Fault(path, f"value {shown} is not a table", f"[{path[0]}] and its fields")]
        case "tuple_type" | "too_short":
            return [Fault(path, "needs one table or more", f"[[{path[0]}]] and its fields")]
    return [Fault(path, f"value {shown}: {error['msg']}")]


def _accepted(path: Path, field: FieldInfo) -> str:
    """Say what a missing field should hold: its validator knows, and says so when it is given nothing."""
    for check in field.metadata:
        if isinstance(check, BeforeValidator):
            try:
                cast("Callable[[object], object]", check.func)(None)
            except CapmusterError as error:
                return error.accepted or ""
    table = f"[{path[-1]}]"
    return f"{f'[{table}]' if get_origin(field.annotation) is tuple else table} and its fields"


def _unknown_field(path: Path, fields: tuple[Keys, ...]) -> tuple[Fault, Path]:
    """Say that a field does not exist, and give the path of the field that was probably meant."""
    name, table = str(path[-1]), _keys_of(path[:-1])
    siblings = [known[-1] for known in fields if known[:-1] == table]
    problem = f"unknown field {name!r}"
    for near in difflib.get_close_matches(name, siblings, n=1):
        return Fault(path, f"{problem}; did you mean {near!r}?", named=True), (*path[:-1], near)
    for known in fields:
        if known[-1] == name:
            home = (
                f"[{field_name(known[:-1])}]" if len(known) > 1 else "the top of the file, above all tables"
            )
            return Fault(path, f"{problem}; it belongs to {home}", named=True), known
    return Fault(path, problem, ", ".join(siblings), named=True), ()


def _keys_of(path: Path) -> Keys:
    return tuple(part for part in path if isinstance(part, str))


def _fields(model: type[Section], above: Keys = ()) -> Iterator[tuple[Keys, FieldInfo]]:
    """Every field that a file of this model can have, by its path without list positions."""
    for name, field in model.model_fields.items():
        yield (*above, name), field
        for kind in (field.annotation, *get_args(field.annotation)):
            if isinstance(kind, type) and issubclass(kind, Section):
                yield from _fields(kind, (*above, name))
