"""The rooms of the house and the direction of their imports, read from the source text of every module."""

from __future__ import annotations

import ast
import json
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import pytest

import watcher

HOUSE = Path(watcher.__file__).parent
FLOORS = (
    ("cli",),
    ("daemon", "checking"),
    ("assembly", "rehearsal"),
    ("web",),
    ("look", "replay", "drafting", "explanation"),
    ("sources", "ledger", "notices", "report", "metrics", "settings"),
    ("verdict", "book"),
    ("judging", "diagnosis"),
    ("path", "arriving", "wording", "answer", "demo"),
    ("records",),
    ("errors", "bounds", "buckets", "text"),
)
"""The rooms from the roof down; a room imports only from lower floors. `demo` holds data for commands alone."""
ROOMS = {room: -floor for floor, rooms in enumerate(FLOORS) for room in rooms}
NOT_BUILT: set[str] = set()
"""Rooms that later work furnishes; whoever builds one takes it off this list, and from then on it must exist."""
FACE = "__init__"
"""The face for a notebook: `watcher/__init__.py`, which shows `bounds` and nothing else."""
ABOVE_DEMO = {"cli", "daemon"}
CLOCK_READERS = {"cli", "daemon"}
HEAVY = ("pandas", "scipy.stats", "vl_convert", "weasyprint")
"""What a process that only starts children must not load."""
IN_BOUNDS = {
    "__future__", "collections", "dataclasses", "decimal", "enum", "fractions", "functools", "itertools", "math",
    "numpy", "operator", "scipy", "typing",
}  # fmt: skip


@dataclass(frozen=True)
class Module:
    """One source file: its dotted name, its room, and its syntax tree."""

    name: str
    room: str
    tree: ast.Module

    @property
    def imports(self) -> list[str]:
        """Dotted names of everything imported, also inside functions; `from a import b` counts as a.b."""
        found = []
        for node in ast.walk(self.tree):
            if isinstance(node, ast.Import):
                found += [alias.name for alias in node.names]
            elif isinstance(node, ast.ImportFrom):
                assert node.level == 0, f"{self.name}, line {node.lineno}: relative import"
                found += [f"{node.module}.{alias.name}" for alias in node.names]
        return found

    @property
    def attributes(self) -> list[str]:
        """Every dotted expression, such as `datetime.now`."""
        return [ast.unparse(node) for node in ast.walk(self.tree) if isinstance(node, ast.Attribute)]


def read(path: Path) -> Module:
    """A module of the house."""
    parts = path.relative_to(HOUSE).with_suffix("").parts
    name = ".".join(("watcher", *(part for part in parts if part != "__init__")))
    return Module(name, parts[0], ast.parse(path.read_text(encoding="utf-8")))


MODULES = [read(path) for path in sorted(HOUSE.rglob("*.py"))]
BUILT = {module.room for module in MODULES} - {FACE}


def test_every_room_is_on_the_plan_and_every_built_one_stands():
    """A room that is not on the plan, a planned one that vanished, and one built but still listed as missing all show."""
    assert set(ROOMS) - NOT_BUILT == BUILT


def wrong_imports(module: Module) -> list[str]:
    """The imports of a module that do not point down."""
    found = []
    for imported in module.imports:
        words = imported.split(".")
        if words[0] != "watcher" or len(words) == 1:
            continue
        room = words[1]
        if room == module.room:
            continue
        if module.room == FACE:
            allowed = room == "bounds"
        elif room == "demo":
            allowed = module.room in ABOVE_DEMO
        else:
            allowed = room in ROOMS and ROOMS[room] < ROOMS[module.room]
        if not allowed:
            found.append(f"{module.name} imports {imported}")
    return found


@pytest.mark.parametrize("module", MODULES, ids=lambda module: module.name)
def test_imports_point_down(module):
    """A module imports from lower rooms only, never sideways and never up."""
    assert wrong_imports(module) == []


def test_an_import_that_points_up_or_sideways_is_found():
    """The rule itself refuses a core that reaches for a shell, a neighbour, an unknown room, and the demo."""
    text = "from watcher.ledger import store\nimport watcher.book\nfrom watcher import attic\nimport watcher.demo.scenario\n"
    module = Module("watcher.verdict", "verdict", ast.parse(text))

    assert wrong_imports(module) == [
        "watcher.verdict imports watcher.ledger.store",
        "watcher.verdict imports watcher.book",
        "watcher.verdict imports watcher.attic",
        "watcher.verdict imports watcher.demo.scenario",
    ]


@pytest.mark.parametrize("module", [m for m in MODULES if m.room == "bounds"], ids=lambda module: module.name)
def test_the_formulas_know_numpy_and_scipy_only(module):
    """`bounds` imports nothing that could read a file, a clock or a log."""
    outside = {name.split(".")[0] for name in module.imports if not name.startswith("watcher.bounds")}

    assert outside <= IN_BOUNDS


@pytest.mark.parametrize("module", [m for m in MODULES if m.room == "verdict"], ids=lambda module: module.name)
def test_the_decision_knows_formulas_and_records_only(module):
    """`verdict` imports formulas, records, the order of evidence and the judgement of one cell: no source, no ledger, no diagnostics."""
    rooms = {name.split(".")[1] for name in module.imports if name.startswith("watcher.")}

    assert rooms - {"verdict"} <= {"bounds", "records", "path", "judging"}


CLOCKS = (
    "datetime.now",
    "datetime.utcnow",
    "datetime.today",
    "date.today",
    "time.time",
    "time.time_ns",
    "time.localtime",
)


@pytest.mark.parametrize("module", [m for m in MODULES if m.room not in CLOCK_READERS], ids=lambda module: module.name)
def test_only_commands_and_daemon_read_the_wall_clock(module):
    """Everywhere else the time is an argument; a default clock may be named there, never called."""
    called = [ast.unparse(node.func) for node in ast.walk(module.tree) if isinstance(node, ast.Call)]

    assert [name for name in called if name.endswith(CLOCKS)] == []


@pytest.mark.parametrize("module", [m for m in MODULES if m.room != "settings"], ids=lambda module: module.name)
def test_only_settings_reads_the_environment(module):
    """Environment variables are read in one place, so that secrets are looked after in one place."""
    read_here = [
        n for n in (*module.attributes, *module.imports) if n.endswith(("os.environ", "os.getenv", "os.environb"))
    ]

    assert read_here == []


IMPORT_ALL = """
import importlib, json, sys
heavy, rooms = json.loads(sys.argv[1])
found = {}
for room in rooms:
    importlib.import_module(room)
    found[room] = [name for name in heavy if name in sys.modules]
print(json.dumps(found))
"""


def heavy_after(rooms):
    """What of `HEAVY` a fresh interpreter holds after importing each of the rooms, one after the other."""
    command = [sys.executable, "-c", IMPORT_ALL, json.dumps([HEAVY, rooms])]
    done = subprocess.run(command, capture_output=True, text=True, check=True, timeout=300)
    return json.loads(done.stdout)


def test_no_room_loads_what_only_children_need():
    """Importing every room, the daemon's process included, brings in no table, chart, page or distribution library."""
    rooms = [f"watcher.{room}" for room in sorted(BUILT, key=lambda room: ROOMS[room])]

    assert heavy_after(rooms) == {room: [] for room in rooms}


@pytest.mark.parametrize("name", ["scipy.stats", "pandas"])
def test_a_heavy_import_would_be_seen(name):
    """The look into a fresh interpreter does find the library where it is imported."""
    assert name in heavy_after([name])[name]
