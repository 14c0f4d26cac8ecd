"""The house: which room stands on which floor, and that every import goes downstairs.

A reader who follows one waveform from the job file to the AWG never comes back up. Read from the
source, so that an import inside a function counts as well.
"""

import ast
import sys
from pathlib import Path

import shaper

ROOT = Path(shaper.__file__).parent

# A room may import from the floors below its own, and from itself; from no neighbor.
FLOORS = (
    {"errors", "units", "rotation", "readable"},  # what everything may know
    {"target"},  # what the pulse must do
    {"physics"},  # what the drive does to the qubit
    {"drive"},  # what stands between the numbers and the qubit
    {"job"},  # the job file
    {"bench", "pulse"},  # the job as numbers; the record that all later rooms speak of
    {"wiring"},  # the pulse through mixer and line
    {"composite"},  # published sequences
    {"search", "evidence"},  # looking for the waveform; judging it
    {"store", "figures"},  # files and pictures
    {"awg", "report"},  # the instrument; the page
    {"workflow"},  # the jobs, joined once
    {"cli"},  # arguments, printing, exit codes
    {"__main__"},
)

# Libraries that only some rooms may know; NumPy is everywhere but in cli.
LIBRARIES = {
    "jax": {"physics", "drive", "search"},
    "jaxlib": {"search"},
    "optax": {"search"},
    "h5py": {"store"},
    "matplotlib": {"figures"},
    "scipy": {"physics", "drive", "bench", "composite", "search", "evidence", "workflow"},
    "pydantic": {"job", "awg"},
    "pyvisa": {"awg"},
    "skrf": {"drive"},
    "pydantic_core": {"job"},
    "socket": {"awg", "store"},  # store asks for the machine's name, no more
    "numpy": set().union(*FLOORS) - {"cli", "__main__", "errors", "units"},
}
# Nothing else is imported from outside the standard library.
MOST_LINES = 400

MODULES = {
    ".".join(path.relative_to(ROOT.parent).with_suffix("").parts).removesuffix(".__init__"): path
    for path in sorted(ROOT.rglob("*.py"))
}


def floor_of(room):
    return next(number for number, rooms in enumerate(FLOORS) if room in rooms)


def room_of(module):
    """``shaper.physics.two_level`` lives in ``physics``; the package itself in no room."""
    parts = module.split(".")
    return parts[1] if len(parts) > 1 else None


def imported(nodes):
    """Full names of the modules (of this package: as deep as they are modules)."""
    for node in nodes:
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, "imports are written out in full"
            for alias in node.names:
                deeper = f"{node.module}.{alias.name}"
                yield deeper if deeper in MODULES else node.module


def imports(module, everywhere=True):
    tree = ast.parse(MODULES[module].read_text(encoding="utf-8"))
    return sorted(set(imported(ast.walk(tree) if everywhere else tree.body)))


def test_the_reader_of_imports_sees_them_all():
    """The check itself: known imports at the top, inside a function, and of a whole module."""
    assert "shaper.physics.two_level" in imports("shaper.search.objective")
    assert "jax" in imports("shaper.search.compiler")
    assert "jax" not in imports("shaper.search.compiler", everywhere=False)
    assert "shaper.awg.block" in imports("shaper.awg.plan")
    assert len(MODULES) > 80


def test_every_room_has_its_floor():
    rooms = {room_of(module) for module in MODULES} - {None}
    standing = [room for floor in FLOORS for room in floor]
    assert sorted(standing) == sorted(rooms)


def test_imports_go_downstairs():
    upstairs = []
    for module in MODULES:
        room = room_of(module)
        for name in imports(module):
            other = room_of(name) if name.split(".")[0] == "shaper" else None
            if name == "shaper":  # the package itself holds the version, and leads to public names
                allowed = room in {"cli", "workflow", "awg"}
            elif other is None or other == room:
                allowed = True
            else:
                allowed = room is not None and floor_of(other) < floor_of(room)
            if not allowed:
                upstairs.append(f"{module} imports {name}")
    assert upstairs == []


def test_libraries_stay_in_their_rooms():
    astray = []
    for module in MODULES:
        for name in imports(module):
            library = name.split(".")[0]
            if library in LIBRARIES:
                allowed = room_of(module) in LIBRARIES[library]
            else:
                allowed = library == "shaper" or library in sys.stdlib_module_names
            if not allowed:
                astray.append(f"{module} imports {name}")
    assert astray == []


def test_no_two_modules_wait_for_each_other():
    """Within a room too: no circle among the imports that run when a module is loaded."""
    graph = {m: {n for n in imports(m, everywhere=False) if n in MODULES} for m in MODULES}
    loaded: set[str] = set()
    while len(loaded) < len(graph):
        ready = {m for m in graph if m not in loaded and graph[m] - {m} <= loaded}
        assert ready, f"in a circle: {sorted(set(graph) - loaded)}"
        loaded |= ready


def test_nothing_is_switched_on_by_importing():
    """64-bit mode and the like are set in one place, inside a function."""
    for module, path in MODULES.items():
        tree = ast.parse(path.read_text(encoding="utf-8"))
        calls = [ast.unparse(node.func) for node in ast.walk(tree) if isinstance(node, ast.Call)]
        if any(name.endswith("config.update") for name in calls):
            assert module == "shaper.search.compiler"
        for line in tree.body:
            if isinstance(line, ast.Expr) and isinstance(line.value, ast.Call):
                # giving a function its adjoint changes nothing for anybody else
                assert ast.unparse(line.value.func).endswith(".defvjp"), (module, line.lineno)


def test_a_room_is_split_before_it_grows_too_large():
    lines = {module: path.read_text("utf-8").count("\n") for module, path in MODULES.items()}
    assert {module: count for module, count in lines.items() if count > MOST_LINES} == {}
