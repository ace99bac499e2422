"""Design files: TOML, or a shipped preset, to a checked `Design`, and back.

Also overrides from a command line, changed copies, the key a design is known by, and the folders
of what is shipped.
"""

import hashlib
import json
import tomllib
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from tonesim.catalogue import (
    CabinetShape,
    Catalogue,
    Diode,
    Loudspeaker,
    OpAmp,
    Part,
    Transistor,
    load_catalogue,
)
from tonesim.design import Design
from tonesim.errors import DesignError
from tonesim.limits import faults
from tonesim.record import Record, nearest, problems, read_toml

_HERE = Path(__file__).parent
# Besides every key called part: where a name may be opened to change a value inside it.
_NAMED_PARTS = {("output", "upper"), ("output", "lower"), ("output", "catch_diode")}
# Keys that stand for one another: setting one takes the other away.
_RIVALS: dict[tuple[str, str], tuple[str, ...]] = {
    ("load", "ohm"): ("part",),
    ("load", "part"): ("ohm",),
    ("cabinet", "part"): ("file",),
    ("cabinet", "file"): ("part",),
    ("measured", "file"): ("drive_v", "input_v", "output_v"),
    ("measured", "drive_v"): ("file", "input_v"),
    ("measured", "input_v"): ("file", "drive_v"),
}


def build_design(
    data: Mapping[str, Any], where: str = "design", catalogue: Catalogue | None = None
) -> Design:
    """Validate the tables of a design.

    Parameters
    ----------
    data : mapping
        As a TOML reader returns it; parts may be names, tables or models.
    where : str
        What the sentences name as the place, usually the file.
    catalogue : Catalogue, optional

    Raises
    ------
    DesignError
        One sentence a problem, the first problem first, one a line.
    """
    context = {"catalogue": catalogue or load_catalogue()}
    try:
        design = Design.model_validate(dict(data), context=context)
        found = faults(design)
    except ValidationError as error:
        found = problems(error, Design)
    if found:
        raise DesignError("\n".join(f"{where}: {fault}" for fault in found))
    return design


def load_design(
    source: Path | str, overrides: Sequence[str] = (), catalogue: Catalogue | None = None
) -> Design:
    """Load a design file or a shipped preset.

    Parameters
    ----------
    source : Path or str
        A path, or the name of a preset.
    overrides : sequence of str
        "KEY=VALUE" with a dotted key; VALUE is read as TOML if it is TOML, else as a text
        ("bias.feed_ohm=4k7", "bias.upper=1N4148,BAT85"). An empty VALUE takes the key out of
        the file; a TOML table is merged into the table it meets, but for a supply of another
        kind. A key inside a named part ("output.upper.hfe=60") changes that part.
    catalogue : Catalogue, optional

    Raises
    ------
    DesignError
    """
    path = _find(source)
    data = read_toml(path)
    _place_files(data, path.resolve().parent, str(path))
    where = str(path)
    if overrides:
        for override in overrides:
            _override(data, override)
        where += " as changed"
        _place_files(data, Path.cwd(), where)
    return build_design(data, where, catalogue)


def replace(design: Design, *, catalogue: Catalogue | None = None, **changes: Any) -> Design:
    """Return a changed copy, checked again like a file.

    Parameters
    ----------
    design : Design
    catalogue : Catalogue, optional
        Where names of parts are looked up; the shipped one by default.
    **changes
        Sections as mappings, ``bias={"feed_ohm": "4k7"}``, or dotted keys,
        ``**{"bias.feed_ohm": 4700}``. Only what is named changes.

    Raises
    ------
    DesignError
    """
    data = design.model_dump()
    for key, value in changes.items():
        _assign(data, key, value)
    return build_design(data, "the changed design", catalogue)


def presets_folder() -> Path:
    """Folder of the shipped presets, in an installed package or in a checkout."""
    return _shipped_folder("presets")


def demo_audio_folder() -> Path:
    """Folder of the shipped recordings, in an installed package or in a checkout."""
    return _shipped_folder("demo_audio")


def list_presets() -> list[str]:
    """Names of the shipped presets, in alphabetical order."""
    return sorted(path.stem for path in presets_folder().glob("*.toml"))


def _shipped_folder(name: str) -> Path:
    inside = _HERE / name
    return inside if inside.is_dir() else _HERE.parent / name


def _find(source: Path | str) -> Path:
    text = str(source)
    if text in list_presets():
        return presets_folder() / f"{text}.toml"
    path = Path(source)
    try:
        known = path.exists()
    except (OSError, ValueError):
        known = False
    if known:
        return path
    presets = list_presets()
    close = nearest(path.stem, presets)
    offer = f"nearest presets: {', '.join(close)}" if close else f"presets: {', '.join(presets)}"
    shown = text if len(text) <= 200 else text[:197] + "..."
    raise DesignError(f"{shown!r} is neither a file nor a preset; {offer}")


def _place_files(data: Mapping[str, Any], folder: Path, where: str) -> None:
    """Make the paths of impulse response and measured curve absolute: designs travel."""
    for section in ("cabinet", "measured"):
        table = data.get(section)
        if not isinstance(table, dict) or not isinstance(table.get("file"), str):
            continue
        try:
            path = (folder / table["file"]).resolve()
            found = path.is_file()
        except (OSError, ValueError):
            path, found = folder / "?", False
        if not found:
            raise DesignError(
                f"{where}: {section}.file is {table['file']!r}, no such file in {folder}"
            )
        table["file"] = str(path)


def _override(data: dict[str, Any], text: str) -> None:
    key, equals, value = text.partition("=")
    key = key.strip()
    if not equals or not all(key.split(".")):
        raise DesignError(f"{text!r} is no change, expected KEY=VALUE as in bias.feed_ohm=4k7")
    _assign(data, key, _override_value(value.strip()))


def _override_value(text: str) -> object:
    """Value of an override; None takes the key away."""
    if text == "":
        return None
    try:
        read = tomllib.loads(f"value = {text}")
    except (ValueError, RecursionError):
        return text
    value = read["value"]
    plain = isinstance(value, str | int | float | list | dict)
    return value if plain and len(read) == 1 else text


def _assign(data: dict[str, Any], key: str, value: object) -> None:
    """Set a dotted key in nested tables; a mapping is merged into the table it meets."""
    *path, last = key.split(".")
    table = data
    for depth, step in enumerate(path):
        inner = table.get(step)
        if isinstance(inner, str) and (step == "part" or (path[0], step) in _NAMED_PARTS):
            inner = {"like": inner}
        elif inner is None:
            inner = {}
        elif isinstance(inner, Part | Record):
            inner = inner.model_dump()
        elif not isinstance(inner, dict):
            raise DesignError(f"{key} cannot be set, {'.'.join(path[: depth + 1])} is no table")
        table[step] = inner
        table = inner
        _mark_changed(table, ".".join([*path[depth + 1 :], last]))
    met = table.get(last)
    if isinstance(value, Mapping) and isinstance(met, dict) and not _is_other_kind(met, value):
        for inner_key, inner_value in value.items():
            _assign(data, f"{key}.{inner_key}", inner_value)
        return
    rivals = _RIVALS.get((path[-1], last), ()) if path else ()
    for rival in rivals if value is not None else ():
        table.pop(rival, None)
    if value is None:
        table.pop(last, None)
    else:
        table[last] = value


def _is_other_kind(met: Mapping[str, Any], value: Mapping[str, Any]) -> bool:
    """Whether a table is meant to stand in another's place, not to be merged into it."""
    return (
        "like" in value or "name" in value or value.get("kind", met.get("kind")) != met.get("kind")
    )


def _mark_changed(table: dict[str, Any], key: str) -> None:
    """Let a part that is written out say that it is no longer the catalogue's."""
    if "name" in table and "source" in table and not str(table["name"]).endswith(", changed"):
        table["name"] = f"{table['name']}, changed"
        table["source"] = f"{table['source']} Changed in the design: {key}."


def design_key(design: Design) -> str:
    """SHA-256, in hexadecimal, of everything the sound depends on.

    Title and notes do not count; an impulse response counts by its bytes, not by its path.

    Raises
    ------
    DesignError
        If the impulse response cannot be read.
    """
    data = design.model_dump(mode="json", exclude={"title", "notes"})
    for section in ("front", "measured"):
        if data[section] is None:
            del data[section]  # as if there were no such section: older keys stay
    if design.cabinet and design.cabinet.file:
        try:
            content = Path(design.cabinet.file).read_bytes()
        except OSError as failure:
            raise DesignError(
                f"cabinet.file is {design.cabinet.file!r}, it cannot be read: {failure.strerror}"
            ) from None
        data["cabinet"]["file"] = hashlib.sha256(content).hexdigest()
    text = json.dumps(data, sort_keys=True, separators=(",", ":"), allow_nan=False)
    return hashlib.sha256(text.encode()).hexdigest()


def design_to_toml(design: Design) -> str:
    """Write a design as a TOML text that loads to an equal design.

    Parts that equal the shipped ones are written by name, others as tables.
    """
    lines = [f"title = {_toml(design.title)}"]
    if design.notes:
        lines.append(f"notes = {_toml(design.notes)}")
    for key in type(design).model_fields:
        section = getattr(design, key)
        if isinstance(section, Record):
            lines += ["", *_toml_table(key, section)]
    return "\n".join(lines) + "\n"


def _toml_table(path: str, record: Record) -> list[str]:
    lines, tables = [f"[{path}]"], []
    for key in type(record).model_fields:
        value = getattr(record, key)
        name = _shipped_name(value)
        if name is not None:
            lines.append(f"{key} = {_toml(name)}")
        elif isinstance(value, Record):
            tables += ["", *_toml_table(f"{path}.{key}", value)]
        elif value is not None:
            lines.append(f"{key} = {_toml(value)}")
    return lines + tables


def _shipped_name(value: object) -> str | None:
    """Name of a part that the shipped catalogue holds unchanged."""
    catalogue = load_catalogue()
    kinds: dict[type, Mapping[str, Part]] = {
        Transistor: catalogue.transistors,
        Diode: catalogue.diodes,
        OpAmp: catalogue.opamps,
        Loudspeaker: catalogue.loudspeakers,
        CabinetShape: catalogue.cabinets,
    }
    if isinstance(value, Part) and kinds[type(value)].get(value.name) == value:
        return value.name
    return None


def _toml(value: object) -> str:
    if isinstance(value, str):
        # JSON's escapes are TOML's, but for DEL, which TOML wants escaped.
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    if isinstance(value, tuple):
        return f"[{', '.join(_toml(item) for item in value)}]"
    if isinstance(value, Record):
        name = _shipped_name(value)
        if name is not None:
            return _toml(name)
        pairs = [(key, getattr(value, key)) for key in type(value).model_fields]
        return f"{{ {', '.join(f'{k} = {_toml(v)}' for k, v in pairs if v is not None)} }}"
    return "nan" if value is None else repr(value)
