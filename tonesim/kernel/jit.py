"""The one place that says how kernel code is compiled.

No fast-maths: results must not depend on how a block was cut, and NaN must stay visible.
"""

from contextlib import suppress
from pathlib import Path

from numba import njit

kernel = njit(cache=True, nogil=True, error_model="numpy")


def drop_stale_cache(folder: Path) -> int:
    """Remove compiled code older than any source here; return how many entries went.

    The compiler's cache watches only the file a function stands in, not those of the functions
    it calls, so that an edited law would go on in its old form inside the sample loop.
    """
    newest = max(path.stat().st_mtime for path in folder.glob("*.py"))
    dropped = 0
    for index in (folder / "__pycache__").glob("*.nbi"):
        with suppress(OSError):
            if index.stat().st_mtime < newest:
                index.unlink()
                dropped += 1
    return dropped


drop_stale_cache(Path(__file__).parent)
