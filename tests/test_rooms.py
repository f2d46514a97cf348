"""The rooms and their arrows are those of the design."""

from __future__ import annotations

import ast
import importlib
import pkgutil
import subprocess
import sys
from pathlib import Path

import pytest

PACKAGES = ("physics", "calibration", "tracker")
ROOT = Path(importlib.import_module("tracker").__file__).parent.parent

# Room -> prefixes of ours that it may import, besides itself. Rooms that join wings are not listed.
ALLOWED = {
    "physics": (),
    "calibration": ("physics",),
    "tracker.records": (),
    "tracker.errors": ("physics.errors",),
    "tracker.bench": ("physics", "calibration", "tracker.errors", "tracker.records", "tracker.benchfile"),
    "tracker.benchfile": ("calibration", "tracker.errors", "tracker.records", "tracker.benchshape"),
    "tracker.benchshape": (),
    "tracker.settings": ("tracker.errors", "tracker.records"),
    "tracker.seeing": ("physics", "calibration", "tracker.errors", "tracker.records", "tracker.bench"),
    "tracker.motion": ("physics", "calibration", "tracker.errors", "tracker.records", "tracker.bench"),
    "tracker.keeping": ("physics", "calibration", "tracker.errors", "tracker.records", "tracker.bench",
                        "tracker.motion.verdict"),
    "tracker.showing": ("physics", "calibration", "tracker.errors", "tracker.records", "tracker.bench",
                        "tracker.keeping", "tracker.motion"),
    "tracker.simulate": ("physics", "calibration", "tracker.errors", "tracker.records"),
}  # fmt: skip


def modules() -> list[tuple[str, Path]]:
    """Every module of ours with its file."""
    found = []
    for package in PACKAGES:
        for path in sorted((ROOT / package).rglob("*.py")):
            parts = path.relative_to(ROOT).with_suffix("").parts
            found.append((".".join(part for part in parts if part != "__init__"), path))
    return found


def imports(name: str, path: Path) -> set[str]:
    """Dotted names of ours that a module imports, at the top or later, for running or for types."""
    found = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            package = name if path.name == "__init__.py" else name.rpartition(".")[0]
            base = node.module or ""
            if node.level:
                above = package.split(".")[: len(package.split(".")) - node.level + 1]
                base = ".".join([*above, base]).rstrip(".")
            found |= {f"{base}.{alias.name}" for alias in node.names} | {base}
    return {item for item in found if item.split(".")[0] in PACKAGES}


def room_of(name: str) -> str | None:
    """The listed room that a module lies in."""
    rooms = [room for room in ALLOWED if name == room or name.startswith(f"{room}.")]
    return max(rooms, key=len) if rooms else None


@pytest.mark.parametrize(
    ("name", "path"), modules(), ids=lambda value: value if isinstance(value, str) else ""
)
def test_arrows_run_one_way(name, path):
    """A room imports only the rooms that lie below it."""
    room = room_of(name)
    if room is None:  # cli, measure, evaluate, export, term, page and planning join wings
        assert name.startswith("tracker")
        return
    allowed = (room, *ALLOWED[room])
    wrong = [i for i in imports(name, path) if not any(i == a or i.startswith(f"{a}.") for a in allowed)]
    # `from tracker import x` names the package itself; what counts is x.
    wrong = [i for i in wrong if i not in PACKAGES]
    assert not wrong, f"{name} imports {wrong}"


@pytest.mark.parametrize("package", PACKAGES)
def test_public_names_are_sorted_and_importable(package):
    """`__all__` lists the public names, sorted, and each can be had."""
    module = importlib.import_module(package)
    assert list(module.__all__) == sorted(module.__all__)
    for name in module.__all__:
        assert getattr(module, name) is not None


def test_importing_a_package_loads_no_heavy_library():
    """Importing the packages and the command line loads no video, web, plotting or table library."""
    code = (
        "import sys, physics, calibration, tracker, tracker.cli;"
        "print([m for m in ('av','cv2','matplotlib','pandas','pint','scipy','skimage','starlette','trackpy',"
        "'uvicorn','distributed','pydantic') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_every_module_imports():
    """No module is broken by itself."""
    for package in PACKAGES:
        root = importlib.import_module(package)
        for info in pkgutil.walk_packages(root.__path__, f"{package}."):
            importlib.import_module(info.name)
