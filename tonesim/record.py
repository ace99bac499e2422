"""Tables of a file as frozen models, and what is wrong with one in plain sentences.

Numbers are read by the unit their key carries; unknown keys are refused with the nearest known.
"""

import difflib
import itertools
import tomllib
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Annotated, Any, get_args

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, ValidationError, ValidationInfo

from tonesim.errors import DesignError
from tonesim.units import parse_quantity

_LARGEST_FILE = 1_000_000  # bytes; a part or design file is a few thousand
_UNIT_OF_SUFFIX = {
    "ohm": "ohm",
    "v": "V",
    "f": "F",
    "h": "H",
    "a": "A",
    "w": "W",
    "hz": "Hz",
    "db": "dB",
    "c": "°C",
}


def unit_of(key: str) -> str:
    """Return the unit a key carries as its suffix, empty where it carries none known."""
    return "" if "_per_" in key else _UNIT_OF_SUFFIX.get(key.rsplit("_", 1)[-1], "")


def nearest(name: str, known: Iterable[str], most: int = 3) -> list[str]:
    """Known names most like the one given, best first; capitals do not count."""
    wanted = name.lower()[:80]
    by_lower = {candidate.lower(): candidate for candidate in known}
    close = difflib.get_close_matches(wanted, by_lower, n=20, cutoff=0.5)

    def likeness(candidate: str) -> tuple[float, int]:
        ratio = difflib.SequenceMatcher(None, candidate, wanted).ratio()
        same = itertools.takewhile(
            lambda pair: pair[0] == pair[1], zip(candidate, wanted, strict=False)
        )
        return round(ratio, 2), len(list(same))

    return [by_lower[candidate] for candidate in sorted(close, key=likeness, reverse=True)[:most]]


def _read_number(value: object, info: ValidationInfo) -> object:
    """Read a quantity by the unit its key carries."""
    if isinstance(value, str | int | float):
        return parse_quantity(value, unit_of(info.field_name or ""))
    return value


# Every number of a file: a number, or a text as builders write it.
Number = Annotated[float, BeforeValidator(_read_number)]
Positive = Annotated[Number, Field(gt=0)]
NotNegative = Annotated[Number, Field(ge=0)]


class Record(BaseModel):
    """Frozen table of a file: unknown keys are refused, numbers are finite."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)


def read_text(path: Path, expected: str) -> str:
    """Read a text file of ours; `expected` says what it should have been.

    Raises
    ------
    DesignError
        If the file cannot be read, is larger than 1 MB or is not UTF-8.
    """
    if path.is_dir():
        raise DesignError(f"{path} is a folder, expected {expected}")
    try:
        with path.open("rb") as file:
            raw = file.read(_LARGEST_FILE + 1)
    except FileNotFoundError:
        raise DesignError(f"{path} does not exist") from None
    except (OSError, ValueError) as failure:
        reason = getattr(failure, "strerror", None) or failure
        raise DesignError(f"{path} cannot be read: {reason}") from None
    if len(raw) > _LARGEST_FILE:
        raise DesignError(f"{path} is larger than 1 MB, expected a text of a few kilobytes")
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError as failure:
        raise DesignError(f"{path} is not UTF-8 text (byte {failure.start})") from None


def read_toml(path: Path) -> dict[str, Any]:
    """Read a TOML file of ours.

    Raises
    ------
    DesignError
        If the file cannot be read, is larger than 1 MB, is not UTF-8 or not TOML.
    """
    text = read_text(path, "a TOML file")
    try:
        return tomllib.loads(text)
    except RecursionError:
        raise DesignError(f"{path} nests its tables too deeply") from None
    except ValueError as failure:
        reason = str(failure).partition(";")[0]
        raise DesignError(f"{path} is not valid TOML: {reason}") from None


def problems(error: ValidationError, model: type[Record], within: str = "") -> list[str]:
    """Turn a validation error into our own sentences, one a problem, each with its dotted key.

    Parameters
    ----------
    error : ValidationError
    model : type of Record
        The model that was validated.
    within : str
        Dotted key of the model's own place in its file.
    """
    sentences: list[str] = []
    missing: dict[str, tuple[int, list[str]]] = {}
    for fault in error.errors(include_url=False):
        path, table = _place(model, fault["loc"], within)
        if fault["type"] == "missing":
            stem, _, key = path.rpartition(".")
            missing.setdefault(stem, (len(sentences), []))[1].append(key)
            if len(missing[stem][1]) > 1:
                continue
        sentences += _sentence(fault, path, table)
    for stem, (place, keys) in missing.items():
        verb = "is missing" if len(keys) == 1 else "are missing"
        listed = ", ".join(f"{stem}.{key}" if stem else key for key in keys)
        sentences[place] = f"{listed} {verb}"
    return sentences


def _place(model: type[Record], loc: Sequence[int | str], within: str) -> tuple[str, type[Record]]:
    """Dotted key of an error and the model of the table it stands in."""
    path, table, records = within, model, [model]
    for step in loc:
        if isinstance(step, int):
            path += f", part {step + 1}"
        elif len(records) > 1:
            # A choice between tables: this step is its tag, which is no key of the file.
            records = [record for record in records if step in _kinds(record)]
        else:
            table = records[0] if records else table
            path = f"{path}.{step}" if path else step
            records = _records_of(table, step)
    return path, table


def _records_of(table: type[Record], key: str) -> list[type[Record]]:
    known = table.model_fields.get(key)
    return _records(known.annotation) if known else []


def _kinds(record: type[Record]) -> tuple[Any, ...]:
    known = record.model_fields.get("kind")
    return get_args(known.annotation) if known else ()


def _records(annotation: object) -> list[type[Record]]:
    """Models found in an annotation such as ``tuple[Diode, ...] | None``."""
    if isinstance(annotation, type) and issubclass(annotation, Record):
        return [annotation]
    return [record for inner in get_args(annotation) for record in _records(inner)]


def _sentence(fault: Mapping[str, Any], path: str, table: type[Record]) -> list[str]:
    kind, value, context = fault["type"], fault["input"], fault.get("ctx", {})
    key = str(fault["loc"][-1]) if fault["loc"] else ""
    if kind == "value_error":
        return [f"{path}: {line}" if path else line for line in str(context["error"]).split("\n")]
    if kind == "missing":
        return [f"{path} is missing"]  # `problems` joins all of a table into one sentence
    if kind == "extra_forbidden":
        known = [name for name in table.model_fields if name != key]
        close = nearest(key, known)
        stem = path[: len(path) - len(key)]
        offer = "nearest known: " if close else "known: "
        return [f"{path} is no known key, {offer}{', '.join(stem + n for n in close or known)}"]
    if kind == "union_tag_not_found":
        choices = [tag for record in _records_of(table, key) for tag in _kinds(record)]
        return [f"{path}.kind is missing, expected {', '.join(map(repr, choices))}"]
    if kind == "union_tag_invalid":
        return [f"{path}.kind is {shown(context.get('tag'))}, expected {context['expected_tags']}"]
    return [f"{path} is {shown(value)}, expected {_expectation(kind, context, fault['msg'])}"]


def _expectation(kind: str, context: Mapping[str, Any], fallback: str) -> str:
    limits = {
        "greater_than": "more than {gt:g}",
        "greater_than_equal": "{ge:g} or more",
        "less_than": "less than {lt:g}",
        "less_than_equal": "{le:g} or less",
        "literal_error": "{expected}",
        "string_too_short": "a text that is not empty",
        "string_too_long": "a text of {max_length} characters or fewer",
    }
    if kind in limits:
        return limits[kind].format(**context)
    if kind.startswith(("float", "int")):
        return 'a number, or a text such as "4k7"'
    if kind.startswith("string"):
        return "a text"
    if kind.startswith(("model", "dict")):
        return "a table"
    if kind.startswith(("tuple", "too_", "missing_")):
        return f"a list ({fallback[0].lower()}{fallback[1:]})"
    return fallback[0].lower() + fallback[1:]


def shown(value: object) -> str:
    """Short form of a value found, for a sentence; its unit is in the key."""
    text = f"{value:g}" if isinstance(value, float) else repr(value)
    return text if len(text) <= 60 else text[:57] + "..."
