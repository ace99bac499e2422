"""What every command shares: the group, its errors and exit codes, options, the way to a design.

Whatever takes time to import is imported where it is used.
"""

from __future__ import annotations

import json
import os
import sys
import traceback
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

from tonesim import __version__
from tonesim.errors import OutputError, TonesimError, UsageError

if TYPE_CHECKING:
    from tonesim.catalogue import Catalogue
    from tonesim.design import Design

INTERRUPTED = 130  # 128 + SIGINT, as shells count
BROKEN_PIPE = 141  # 128 + SIGPIPE
COMPILE_S = 12  # on one core of a machine of 2024
KINDS = ("transistors", "diodes", "opamps", "loudspeakers", "cabinets")
F = TypeVar("F", bound=Callable[..., Any])


def say(text: str) -> None:
    """Write to standard error; nothing in it may steer a terminal."""
    shown = "".join(c if c.isprintable() or c == "\n" else "?" for c in text)
    click.echo(shown, err=True)


class Commands(click.Group):
    """A group that turns every error into one sentence and an exit code."""

    def main(self, args: Sequence[str] | None = None, **extra: Any) -> Any:  # type: ignore[override]
        """Run a command and leave with its exit code."""
        given = list(sys.argv[1:] if args is None else args)
        before = given[: given.index("--")] if "--" in given else given
        debug = "--debug" in before
        if debug:  # it may stand anywhere
            given.remove("--debug")
        for stream in (sys.stdout, sys.stderr):
            if hasattr(stream, "reconfigure"):  # a letter the terminal lacks is no reason to stop
                stream.reconfigure(errors="replace")
        extra.pop("standalone_mode", None)
        sys.exit(self._run(given, debug, extra))

    def _run(self, args: list[str], debug: bool, extra: dict[str, Any]) -> int:
        try:
            code = super().main(args=args, standalone_mode=False, **extra)
            sys.stdout.flush()
            return code if isinstance(code, int) else 0
        except BrokenPipeError:
            # What Python still flushes at exit must not meet the closed pipe again.
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
            return BROKEN_PIPE
        except (KeyboardInterrupt, click.Abort):
            say("tonesim: interrupted, unfinished files are removed")
            return INTERRUPTED
        except click.ClickException as error:
            say(f"tonesim: {_sentence(error)}")
            return error.exit_code
        except TonesimError as error:
            if debug:
                say(traceback.format_exc())
            say("\n".join(f"tonesim: {line}" for line in str(error).split("\n")))
            return error.exit_code
        except Exception as error:
            if debug:
                say(traceback.format_exc())
            say(
                f"tonesim: a fault in tonesim itself ({type(error).__name__}: {error}); please "
                "report it with what --debug prints"
            )
            return 1


def _sentence(error: click.ClickException) -> str:
    text = error.format_message()
    context = getattr(error, "ctx", None)
    hint = f" (see {context.command_path} --help)" if context is not None else ""
    return f"{text.rstrip('.')}{hint}"


@click.group(
    cls=Commands,
    context_settings={"max_content_width": 100},
    epilog="\b\nBegin here:\n  tonesim demo\n  tonesim render low_riff -d full-chain --match -20",
)
@click.version_option(__version__, prog_name="tonesim", message="%(prog)s %(version)s")
@click.option("--debug", is_flag=True, expose_value=False, help="Show where an error comes from.")
def commands() -> None:
    """Hear a small solid-state guitar amplifier's output stage before it is built."""


def design_options(function: F) -> F:
    """Options of every command that takes a design."""
    function = click.option(
        "--parts",
        "parts_file",
        metavar="FILE",
        help="A part file of your own, on top of the parts shipped.",
    )(function)
    return click.option(
        "--set",
        "changes",
        metavar="KEY=VALUE",
        multiple=True,
        help="Change a value of the design, as in bias.feed_ohm=4k7; may be repeated.",
    )(function)


def played_options(function: F) -> F:
    """Options of every command that plays a recording: drive and cabinet (see `played`)."""
    function = click.option(
        "--gain", metavar="DB", help="Clean gain before the stage, on top of the design's."
    )(function)
    function = click.option(
        "--full-scale", metavar="VOLTS", help="Peak volts at the jack that 0 dBFS stands for."
    )(function)
    return click.option(
        "--cabinet",
        metavar="CABINET",
        help="A cabinet of the catalogue, an impulse response file, or none; by default the "
        "design's.",
    )(function)


as_json_option = click.option("--json", "as_json", is_flag=True, help="Print JSON instead of text.")


def load(source: str, changes: Sequence[str], parts_file: str | None) -> tuple[Design, Catalogue]:
    """Design with its changes, and the catalogue its parts come from."""
    from tonesim.catalogue import load_catalogue
    from tonesim.designfile import load_design

    catalogue = load_catalogue(None if parts_file is None else Path(parts_file))
    return load_design(source, changes, catalogue), catalogue


def warn_of_compiling() -> None:
    """Say that the first run takes longer, if it will."""
    from tonesim.render import compiled

    if not compiled():
        say(f"tonesim: compiling the circuit solver, once, about {COMPILE_S} s")


def print_json(data: object) -> None:
    """Print plain values for machines."""
    click.echo(json.dumps(data, indent=2, allow_nan=False))


def find_recording(name: str) -> Path:
    """Path of a recording; the shipped ones are known by their names."""
    from tonesim.designfile import demo_audio_folder

    shipped = demo_audio_folder() / f"{name}.wav"
    bare = Path(name).name == name and not Path(name).exists()
    return shipped if bare and shipped.is_file() else Path(name)


def quantity(option: str, text: str, unit: str) -> float:
    """Value of an option as builders write it.

    Raises
    ------
    UsageError
        If it is none.
    """
    from tonesim.units import parse_quantity

    try:
        return parse_quantity(text, unit)
    except ValueError as fault:
        raise UsageError(f"{option}: {fault}") from None


def played(design: Design, catalogue: Catalogue, given: dict[str, Any]) -> Design:
    """Put what the options say about drive and cabinet into the design, so that it is recorded."""
    from tonesim.designfile import replace

    changed: dict[str, Any] = {}
    if given["full_scale"] is not None:
        changed["input.full_scale_v"] = quantity("--full-scale", given["full_scale"], "V")
    if given["gain"] is not None:
        more = quantity("--gain", given["gain"], "dB")
        changed["input.gain_db"] = design.input.gain_db + more
    cabinet = given["cabinet"]
    if cabinet is not None and cabinet.lower() == "none":
        changed["cabinet"] = None
    elif cabinet is not None:
        known = {name.lower(): name for name in catalogue.cabinets}
        if cabinet.lower() not in known and Path(cabinet).is_file():
            changed["cabinet"] = {"file": str(Path(cabinet).resolve())}
        else:
            changed["cabinet"] = {"part": catalogue.cabinet(cabinet).name}
    return replace(design, catalogue=catalogue, **changed) if changed else design


def check_text_output(path: str, inputs: Sequence[str | None]) -> None:
    """Refuse, before the work begins, a place that cannot be written or holds an input."""
    from tonesim.wav import refuse_same_file

    folder = Path(os.path.realpath(path)).parent
    if not folder.is_dir():
        raise OutputError(f"{path} cannot be written: the folder {folder} does not exist")
    refuse_same_file(path, [name for name in inputs if name is not None])


@contextmanager
def new_folder(path: Path) -> Iterator[None]:
    """Make a folder, and take it away again if nothing came of it."""
    made = not path.exists()
    try:
        path.mkdir(parents=True, exist_ok=True)
    except OSError as failure:
        raise OutputError(f"the folder {path} cannot be made: {failure.strerror}") from None
    try:
        yield
    except BaseException:
        if made and not any(path.iterdir()):
            path.rmdir()
        raise
