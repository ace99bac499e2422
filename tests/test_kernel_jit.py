"""The compiler's cache follows every source of the folder."""

import os
from pathlib import Path

from tonesim.kernel.jit import drop_stale_cache


def entry(path: Path, age_s: float) -> Path:
    path.parent.mkdir(exist_ok=True)
    path.write_text("")
    os.utime(path, (1e9 - age_s, 1e9 - age_s))
    return path


def test_compiled_code_older_than_any_source_goes(tmp_path):
    entry(tmp_path / "law.py", 100.0)
    entry(tmp_path / "loop.py", 500.0)
    stale = entry(tmp_path / "__pycache__" / "loop.run-1.py311.nbi", 200.0)
    fresh = entry(tmp_path / "__pycache__" / "law.junction-1.py311.nbi", 50.0)
    assert drop_stale_cache(tmp_path) == 1
    assert not stale.exists()
    assert fresh.exists()
    assert drop_stale_cache(tmp_path) == 0
