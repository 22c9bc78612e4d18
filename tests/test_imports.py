"""Imports point one way, every outside library has its room, and the command line starts light."""

import ast
import graphlib
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest

import timbre_match

PACKAGE = Path(timbre_match.__file__).parent
ROOMS = (
    ("errors",),
    ("units",),
    ("threads",),
    ("intake",),
    ("measure",),
    ("compare",),
    ("advise",),
    ("hear",),
    ("keep",),
    ("show",),
    ("panel", "demo"),
    ("pipeline",),
    ("cli",),
)
"""From the first room to the last; a room imports from those before it, and rooms side by side not from each other."""

HOMES = {
    "joblib": {"measure"},
    "json": {"keep", "cli"},
    "matplotlib": {"show"},
    "pickle": set[str](),
    "platformdirs": {"keep"},
    "pydantic": {"keep"},
    "random": set[str](),
    "rich": {"show", "cli"},
    "soundfile": {"intake", "keep", "demo"},
    "sqlite3": {"keep"},
    "threadpoolctl": {"threads"},
    "typer": {"cli"},
}
"""Who may import what at run time. The command line prints JSON; the demo writes the recordings that it renders."""

DRAWS = {"timbre_match.demo.draws"}
"""The demo's own source of chance; in the product proper chance is the room `compare`'s."""

NAMED_IN_THE_DESIGN = {"timbre_match.measure.profile"}
"""Called so because the record is; the standard library's profiler is never imported here."""

HEAVY = ("joblib", "matplotlib", "numpy", "pydantic", "scipy", "soundfile")


@dataclass(frozen=True, kw_only=True, slots=True)
class Import:
    """One import: what for, and whether only type checkers follow it or only a function's call."""

    target: str
    line: int
    types_only: bool
    in_function: bool


def modules() -> dict[str, Path]:
    found = {}
    for path in sorted(PACKAGE.rglob("*.py")):
        parts = path.relative_to(PACKAGE.parent).with_suffix("").parts
        found[".".join(parts[:-1] if parts[-1] == "__init__" else parts)] = path
    return found


MODULES = modules()


def imports_of(module: str) -> list[Import]:
    tree = ast.parse(MODULES[module].read_text(encoding="utf-8"))
    is_package = MODULES[module].name == "__init__.py"
    return list(_walk(tree, module, is_package, types_only=False, in_function=False))


def _walk(node: ast.AST, module: str, is_package: bool, *, types_only: bool, in_function: bool) -> Iterator[Import]:
    if isinstance(node, ast.Import | ast.ImportFrom):
        for target in _targets(node, module, is_package):
            yield Import(target=target, line=node.lineno, types_only=types_only, in_function=in_function)
    in_function = in_function or isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda)
    guarded = isinstance(node, ast.If) and ast.unparse(node.test) in ("TYPE_CHECKING", "typing.TYPE_CHECKING")
    for name, value in ast.iter_fields(node):
        for child in value if isinstance(value, list) else [value]:
            if isinstance(child, ast.AST):
                inside = types_only or (guarded and name == "body")
                yield from _walk(child, module, is_package, types_only=inside, in_function=in_function)


def _targets(node: ast.Import | ast.ImportFrom, module: str, is_package: bool) -> list[str]:
    if isinstance(node, ast.Import):
        return [alias.name for alias in node.names]
    origin = node.module or ""
    if node.level:
        above = module.split(".")[: len(module.split(".")) - node.level + is_package]
        origin = ".".join([*above, *([origin] if origin else [])])
    named = [f"{origin}.{alias.name}" for alias in node.names]
    # What is imported from a package may be a module of it, or a name that stands in it.
    return sorted({name if name in MODULES else origin for name in named})


def room_of(module: str) -> str:
    return module.split(".")[1] if "." in module else ""


def rank_of(room: str) -> int:
    return next(rank for rank, rooms in enumerate(ROOMS) if room in rooms)


def own(target: str) -> bool:
    return target == "timbre_match" or target.startswith("timbre_match.")


IMPORTS = {module: imports_of(module) for module in MODULES}
INNER = [module for module in MODULES if module != "timbre_match"]
COMMAND_LINE = [module for module in INNER if module.split(".")[1] == "cli"]


def test_the_walk_sees_what_python_imports() -> None:
    seen = {(entry.target, entry.types_only, entry.in_function) for module in COMMAND_LINE for entry in IMPORTS[module]}
    assert ("typer", False, False) in seen
    assert ("timbre_match.measure.takes", True, False) in seen
    assert ("timbre_match.pipeline", False, True) in seen
    assert ("timbre_match.units", False, False) in {
        (entry.target, entry.types_only, entry.in_function) for entry in IMPORTS["timbre_match.intake.notes"]
    }


@pytest.mark.parametrize("module", INNER)
def test_every_module_is_in_a_known_room(module: str) -> None:
    assert room_of(module) in {room for rooms in ROOMS for room in rooms}


@pytest.mark.parametrize("module", INNER)
def test_imports_point_back(module: str) -> None:
    room = room_of(module)
    wrong = [
        f"line {entry.line}: {entry.target}"
        for entry in IMPORTS[module]
        if own(entry.target)
        and room_of(entry.target) != room
        and not (entry.target != "timbre_match" and rank_of(room_of(entry.target)) < rank_of(room))
    ]
    assert not wrong


def test_no_circles_lazy_imports_included() -> None:
    graph = {module: {entry.target for entry in IMPORTS[module] if own(entry.target)} - {module} for module in INNER}
    graphlib.TopologicalSorter(graph).prepare()  # raises CycleError, which names the circle


@pytest.mark.parametrize("module", INNER)
def test_outside_libraries_stay_in_their_rooms(module: str) -> None:
    wrong = [
        f"line {entry.line}: {entry.target}"
        for entry in IMPORTS[module]
        if not entry.types_only and room_of(module) not in HOMES.get(entry.target.partition(".")[0], {room_of(module)})
    ]
    assert not wrong


def test_plotting_is_imported_where_it_is_used() -> None:
    at_top = [
        f"{module} line {entry.line}"
        for module in INNER
        for entry in IMPORTS[module]
        if entry.target.partition(".")[0] == "matplotlib" and not (entry.types_only or entry.in_function)
    ]
    assert not at_top


def test_the_command_line_writes_json_and_reads_none() -> None:
    used = {
        node.attr
        for module in COMMAND_LINE
        for node in ast.walk(ast.parse(MODULES[module].read_text(encoding="utf-8")))
        if isinstance(node, ast.Attribute) and isinstance(node.value, ast.Name) and node.value.id == "json"
    }
    assert used == {"dumps"}


@pytest.mark.parametrize("module", INNER)
def test_chance_is_the_comparison_s_alone(module: str) -> None:
    if room_of(module) == "compare" or module in DRAWS:
        return
    tree = ast.parse(MODULES[module].read_text(encoding="utf-8"))
    lines = [
        node.lineno
        for node in ast.walk(tree)
        if isinstance(node, ast.Attribute)
        and node.attr == "random"
        and isinstance(node.value, ast.Name)
        and node.value.id in ("np", "numpy")
    ]
    lines += [entry.line for entry in IMPORTS[module] if entry.target.startswith("numpy.random")]
    assert not lines


def test_chance_is_seeded() -> None:
    made = [
        (module, call.lineno, bool(call.args))
        for module in INNER
        for call in ast.walk(ast.parse(MODULES[module].read_text(encoding="utf-8")))
        if isinstance(call, ast.Call) and ast.unparse(call.func).endswith((".default_rng", ".SeedSequence"))
    ]
    assert made
    assert all(seeded for _, _, seeded in made), made


@pytest.mark.parametrize("module", INNER)
def test_no_name_of_the_standard_library(module: str) -> None:
    if module not in NAMED_IN_THE_DESIGN:
        assert module.rpartition(".")[2] not in sys.stdlib_module_names


def test_the_package_itself_opens_rooms_when_asked() -> None:
    at_top = {
        entry.target
        for entry in IMPORTS["timbre_match"]
        if own(entry.target) and not (entry.types_only or entry.in_function)
    }
    assert at_top == {"timbre_match.compare"}
    at_door = [entry for entry in IMPORTS["timbre_match.compare"] if not (entry.types_only or entry.in_function)]
    assert {entry.target for entry in at_door} == {"typing"}


def modules_after(code: str) -> set[str]:
    """Names of top-level modules that a fresh interpreter has loaded after running `code`."""
    report = "import sys; print('loaded:', *sorted({name.partition('.')[0] for name in sys.modules}))"
    done = subprocess.run(
        [sys.executable, "-c", f"{code}\n{report}"],
        capture_output=True,
        text=True,
        check=True,
        timeout=60,
        cwd=PACKAGE.parent,
    )
    return set(done.stdout.rpartition("loaded:")[2].split())


def test_importing_the_package_loads_nothing_heavy() -> None:
    loaded = modules_after("import timbre_match")
    assert "timbre_match" in loaded
    assert not loaded.intersection(HEAVY)


@pytest.mark.parametrize("arguments", [["--help"], ["measure", "--help"]])
def test_help_loads_nothing_heavy(arguments: list[str]) -> None:
    loaded = modules_after(
        "import sys\n"
        "from timbre_match.cli import main\n"
        f"sys.argv = ['timbre-match', *{arguments!r}]\n"
        "try:\n    main()\nexcept SystemExit as end:\n    assert not end.code, end.code\n"
    )
    assert "typer" in loaded
    # Newer typers open pydantic by themselves as soon as a command has options.
    excused = {"pydantic"} if len(arguments) > 1 else set()
    assert not loaded.intersection(HEAVY) - excused


def test_measuring_loads_no_plotting() -> None:
    assert "matplotlib" not in modules_after("import timbre_match.pipeline, timbre_match.show.tables")


def test_tests_lean_on_no_benchmark() -> None:
    # Benchmarks may use what the tests share, so the way back must stay closed.
    trees = {path: ast.parse(path.read_text(encoding="utf-8")) for path in Path(__file__).parent.rglob("*.py")}
    leaning = [
        path.name
        for path, tree in trees.items()
        for entry in _walk(tree, "tests", False, types_only=False, in_function=False)
        if entry.target.split(".")[0] == "benchmarks"
    ]
    assert len(trees) > len(ROOMS)
    assert leaning == []
