"""The order of modules, and one door for each library."""

import ast
import subprocess
import sys
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parent.parent / "tonesim"

# A module may import only from a lower rank.
RANKS: dict[str, int] = {
    "errors": 0,
    "units": 0,
    "kernel.jit": 1,
    "kernel.bracket": 2,
    "kernel.devices": 2,
    "kernel.driver": 2,
    "kernel.fir": 2,
    "kernel.excitation": 2,
    "kernel.front": 2,
    "kernel.load": 2,
    "kernel.measured": 2,
    "kernel.rails": 2,
    "kernel.half": 3,
    "kernel.surface": 3,
    "kernel.amplifier": 4,
    "kernel.follower": 4,
    "kernel.static": 4,
    "kernel.probe": 5,
    "pool": 1,
    "signals": 1,
    "harmonics": 2,
    "record": 4,
    "readings": 6,
    "windows": 10,
    "explanation": 11,
    "catalogue": 5,
    "measured": 5,
    "design": 6,
    "staticlaw": 6,
    "limits": 7,
    "thermal": 7,
    "designfile": 8,
    "tolerance": 9,
    "circuit": 8,
    "loop": 8,
    "margins": 8,
    "curve": 9,
    "front": 9,
    "oversample": 9,
    "smallsignal": 9,
    "stage": 10,
    "check": 11,
    "match": 2,
    "ranks": 2,
    "probe": 11,
    "twin": 11,
    "processor": 11,
    "stability": 11,
    "wav": 11,
    "level": 11,
    "cabinet": 11,
    "exposure": 1,
    "ear": 9,
    "framing": 10,
    "nmr": 10,
    "roex": 10,
    "masking": 11,
    "verdict": 12,
    "audibility": 13,
    "playback": 13,
    "bench": 12,
    "distortion": 13,
    "idle": 13,
    "power": 13,
    "response": 13,
    "transient": 13,
    "clipping": 13,
    "heat": 14,
    "figures": 13,
    "spread": 14,
    "variants": 13,
    "against": 14,
    "sheet": 15,
    "tables": 16,
    "paper": 12,
    "pictures": 14,
    "plot_sines": 15,
    "plot": 16,
    "report": 12,
    "render": 13,
    "audition": 14,
    "settle": 15,
    "demo": 14,
    "show": 18,
    "showspread": 19,
    "hearing": 17,
    "command": 19,
    "cliaudible": 20,
    "clibench": 20,
    "cli": 21,
    "__main__": 22,
}
# Which modules may import a library; "kernel" stands for everything in that folder.
DOORS: dict[str, set[str]] = {
    "numba": {"kernel"},
    "pydantic": {"record", "catalogue", "design", "designfile"},
    "tomllib": {"record", "designfile"},
    "soundfile": {"wav"},
    "sounddevice": {"live"},
    "pyloudnorm": set(),  # cannot stream; the tests hold `level` against it
    "matplotlib": {"paper"},
    "rich": {"show"},
    "click": {"cli", "cliaudible", "clibench", "command", "__main__"},
    "scipy": {
        "bench",
        "cabinet",
        "clipping",
        "curve",
        "explanation",
        "framing",
        "idle",
        "level",
        "margins",
        "match",
        "oversample",
        "power",
        "response",
        "ranks",
        "staticlaw",
        "spread",
        "thermal",
        "twin",
        "variants",
    },
}
BANNED_NAMES = {"util", "utils", "helpers", "common", "misc", "base"}


def modules() -> dict[str, Path]:
    found = {}
    for path in sorted(PACKAGE.rglob("*.py")):
        name = ".".join(path.relative_to(PACKAGE).with_suffix("").parts)
        if path.name != "__init__.py":
            found[name] = path
    return found


def imports(path: Path) -> list[str]:
    """Every module a file imports, anywhere in it."""
    names = []
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.Import):
            names += [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path.name}: relative import"
            module = node.module or ""
            if module in ("tonesim", "tonesim.kernel"):
                names += [f"{module}.{alias.name}" for alias in node.names]
            else:
                names.append(module)
    return names


def test_every_module_has_a_rank():
    assert set(modules()) == set(RANKS)


@pytest.mark.parametrize("name", sorted(RANKS))
def test_a_module_imports_only_from_lower_ranks(name):
    for target in imports(modules()[name]):
        if not target.startswith("tonesim.") or target == "tonesim.__version__":
            continue
        other = target.removeprefix("tonesim.")
        assert RANKS[other] < RANKS[name], f"{name} imports {other}"


@pytest.mark.parametrize("name", sorted(RANKS))
def test_a_library_is_imported_only_through_its_door(name):
    owner = name.split(".")[0]
    for target in imports(modules()[name]):
        library = target.split(".")[0]
        assert owner in DOORS.get(library, {owner}), f"{name} imports {library}"


def test_the_kernel_imports_nothing_of_ours_and_raises_nothing():
    for name, path in modules().items():
        if not name.startswith("kernel."):
            continue
        for target in imports(path):
            assert not target.startswith("tonesim.") or target.startswith("tonesim.kernel")
        assert not any(isinstance(n, ast.Raise) for n in ast.walk(ast.parse(path.read_text())))


def test_no_module_is_a_junk_drawer():
    assert not {n.split(".")[-1] for n in modules()} & BANNED_NAMES


def test_heavy_libraries_wait_until_they_are_needed():
    code = (
        "import sys, tonesim.cli; "
        "print(*sorted({'numpy', 'numba', 'scipy', 'pydantic', 'soundfile', 'rich',"
        " 'matplotlib'}"
        " & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.split() == []


def test_every_module_imports_alone():
    """Each with none of ours loaded before it, warnings as errors; libraries stay loaded."""
    names = sorted(set(RANKS) - {"__main__"})
    code = (
        "import importlib, sys\n"
        f"for name in {names}:\n"
        "    for old in [m for m in sys.modules if m.partition('.')[0] == 'tonesim']:\n"
        "        del sys.modules[old]\n"
        "    importlib.import_module(f'tonesim.{name}')\n"
        "    print(name)\n"
    )
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", code], capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
    assert done.stdout.split() == names
