"""Entry point of the command ``tonesim`` and of ``python -m tonesim``."""

import signal
from types import FrameType

from tonesim.cli import commands


def _stop(number: int, frame: FrameType | None) -> None:
    """Leave as with Ctrl-C, so that unfinished files are removed."""
    raise KeyboardInterrupt


def main() -> None:
    """Run the command line; SIGTERM and SIGHUP act like Ctrl-C."""
    for name in ("SIGTERM", "SIGHUP"):
        number = getattr(signal, name, None)
        # Where it is ignored (nohup), it stays so.
        if number is not None and signal.getsignal(number) is not signal.SIG_IGN:
            signal.signal(number, _stop)
    commands()


if __name__ == "__main__":
    main()
