"""The house: imports run one way, each library stays in its rooms, nothing heavy loads early."""

from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parents[1] / "sweep"
MODULES = sorted(PACKAGE.rglob("*.py"))

STANDS_ON = {
    "errors": "",
    "places": "",
    "quantities": "errors",
    "vocabulary": "errors quantities",
    "grid": "errors quantities vocabulary",
    "config": "errors quantities vocabulary grid",
    "identity": "errors quantities vocabulary grid config",
    "loop": "errors quantities vocabulary grid config identity",
    "measures": "errors places quantities vocabulary grid config identity loop",
    "store": "errors quantities vocabulary grid config identity",
    "compute": "errors quantities vocabulary grid config identity loop measures store",
    "query": "errors places quantities vocabulary grid config identity store",
    "views": "errors quantities vocabulary grid config identity store query",
    "cli": "errors quantities vocabulary grid config identity loop measures store compute query "
    "views",
    "__main__": "errors identity cli",
    "__init__": "config compute query",
}
"""Room -> the rooms that it may import from. That query may not import loop, measures or compute is
what makes "an answer never recomputes" a fact of the structure."""

EXCEPTIONS = {("views/progress.py", "compute.progress")}
"""The bar listens to a run, and the events of a run are plain data without imports of their own."""

CONFINED = {
    "zarr": {"store"},
    "numcodecs": {"store"},
    "google_crc32c": {"store"},
    "dask": {"compute"},
    "distributed": {"compute"},
    "matplotlib": {"views"},
    "rich": {"views"},
    "numba": {"measures"},
    "llvmlite": {"measures"},
    "pydantic": {"config"},
    "tomllib": {"config"},
    "xarray": {"store", "query", "views"},
    "scipy": {"loop", "measures", "query"},
    "joblib": {"compute", "query"},
}
"""Library -> the rooms that may know it."""


def room_of(path: Path) -> str:
    return path.relative_to(PACKAGE).parts[0].removesuffix(".py")


def imports_of(path: Path) -> list[str]:
    """Every dotted name that a module imports: at the top, in functions, and for types only."""
    found = []
    package = ("sweep", *path.relative_to(PACKAGE).parent.parts)
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found += [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            base = ".".join(package[: len(package) + 1 - node.level]) if node.level else ""
            name = ".".join(part for part in (base, node.module) if part)
            found += [f"{name}.{alias.name}" for alias in node.names]
    return found


def within(name: str, allowed: str) -> bool:
    return any(name == room or name.startswith(f"{room}.") for room in allowed.split())


def forbidden_imports(path: Path) -> list[str]:
    room = room_of(path)
    inner = [name.removeprefix("sweep.") for name in imports_of(path) if name.startswith("sweep.")]
    place = str(path.relative_to(PACKAGE))
    return [
        name
        for name in inner
        if not within(name, f"{room} {STANDS_ON[room]}")
        and not any(place == file and within(name, allowed) for file, allowed in EXCEPTIONS)
    ]


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_imports_run_one_way(path):
    assert forbidden_imports(path) == []


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_each_library_stays_in_its_rooms(path):
    libraries = {name.partition(".")[0] for name in imports_of(path)}
    strays = [
        name for name in libraries if room_of(path) not in CONFINED.get(name, {room_of(path)})
    ]
    assert strays == []


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_only_the_command_line_prints_or_exits(path):
    calls = [
        node.func
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8")))
        if isinstance(node, ast.Call)
    ]
    names = {call.id for call in calls if isinstance(call, ast.Name)}
    names |= {
        f"{call.value.id}.{call.attr}"
        for call in calls
        if isinstance(call, ast.Attribute) and isinstance(call.value, ast.Name)
    }
    prints = names & {"print", "exit", "quit", "sys.exit", "os._exit", "sys.stdout.write"}
    assert not prints or room_of(path) in {"cli", "__main__"}


def test_every_room_is_in_the_order():
    assert {room_of(path) for path in MODULES} <= set(STANDS_ON)


def test_the_order_has_no_circle():
    order = list(STANDS_ON)
    for room, below in STANDS_ON.items():
        for other in below.split():
            assert other.partition(".")[0] in order
            if room != "__init__":
                lower = other.partition(".")[0]
                assert room not in STANDS_ON[lower].split(), f"{room} and {lower}"


@pytest.mark.parametrize(
    "source",
    [
        "from sweep.loop import response",
        "import sweep.measures.registry",
        "def ask():\n    from sweep.compute import run",
        "from typing import TYPE_CHECKING\nif TYPE_CHECKING:\n    from sweep.loop import response",
        "from ..loop import response",
        "from .. import measures",
    ],
)
def test_the_check_sees_every_kind_of_import(source, tmp_path, monkeypatch):
    monkeypatch.setattr(f"{__name__}.PACKAGE", tmp_path)
    path = tmp_path / "query" / "limits.py"
    path.parent.mkdir()
    path.write_text(source)
    assert forbidden_imports(path) != []


def loaded_after(code: str, names: list[str]) -> list[str]:
    """Which of ``names`` are imported once ``code`` has run in a fresh interpreter."""
    script = f"import sys\n{code}\nprint(*[n for n in {names!r} if n in sys.modules])"
    done = subprocess.run(
        [sys.executable, "-c", script],
        capture_output=True,
        text=True,
        cwd=PACKAGE.parent,
        timeout=60,
    )
    assert done.returncode == 0, done.stderr
    return done.stdout.splitlines()[-1].split()


HEAVY = ["numba", "dask", "distributed", "xarray", "zarr", "scipy", "matplotlib", "pydantic"]


def test_help_loads_no_heavy_library():
    code = "import sweep.__main__ as m\ntry:\n    m.main(['--help'])\nexcept SystemExit:\n    pass"
    assert loaded_after(code, [*HEAVY, "numpy", "rich"]) == []


def test_the_package_itself_loads_nothing_but_names():
    code = "import sweep\nassert 'open_atlas' in dir(sweep)"
    assert loaded_after(code, [*HEAVY, "numpy", "rich"]) == []


def test_opening_and_asking_an_atlas_loads_no_kernel_scheduler_or_figure(tmp_path):
    code = f"""
import numpy as np, sweep
from pathlib import Path
from sweep.config import parse_config
from sweep.store.atlas import create_atlas
config = parse_config('''
title = "lazy"
sample_period = 0.01
[plant]
kind = "integrator"
[controller]
kind = "p"
[axes.kp]
start = 1
stop = 9
step = 1
''', folder=Path({str(tmp_path)!r}), source="test")
create_atlas(Path({str(tmp_path / "lazy.zarr")!r}), config, (9,))
atlas = sweep.open_atlas({str(tmp_path / "lazy.zarr")!r})
atlas.limits("kp")
atlas.point()
"""
    assert loaded_after(code, ["numba", "dask.distributed", "distributed", "matplotlib"]) == []


def test_a_name_that_the_package_lacks_is_an_attribute_error():
    import sweep

    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        _ = sweep.nothing
