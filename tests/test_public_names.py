"""The names that the package offers, and that each says what it does."""

import ast
import importlib
import subprocess
import sys
from pathlib import Path
from types import ModuleType

import pytest

import timbre_match as tm

PACKAGE = Path(tm.__file__).parent
NAMED_IN_THE_DESIGN = ("read_recording", "held_notes", "measure_recipe", "measure_profile", "compare")


def module_names() -> list[str]:
    names = []
    for path in sorted(PACKAGE.rglob("*.py")):
        parts = path.relative_to(PACKAGE.parent).with_suffix("").parts
        names.append(".".join(parts[:-1] if parts[-1] == "__init__" else parts))
    return names


def source_of(name: str) -> ast.Module:
    path = PACKAGE.parent.joinpath(*name.split("."))
    return ast.parse((path / "__init__.py" if path.is_dir() else path.with_suffix(".py")).read_text(encoding="utf-8"))


def promised_to_type_checkers() -> set[str]:
    """Names that `__init__` imports, for run time or for type checkers."""
    return {
        alias.asname or alias.name
        for node in ast.walk(source_of("timbre_match"))
        if isinstance(node, ast.ImportFrom) and (node.module or "").startswith("timbre_match")
        for alias in node.names
    }


def test_all_is_what_type_checkers_see() -> None:
    assert set(tm.__all__) == promised_to_type_checkers()
    assert list(tm.__all__) == sorted(tm.__all__)


@pytest.mark.parametrize("name", tm.__all__)
def test_every_public_name_is_there(name: str) -> None:
    thing = getattr(tm, name)
    assert isinstance(thing, ModuleType) or callable(thing)
    assert thing.__doc__


@pytest.mark.parametrize("name", NAMED_IN_THE_DESIGN)
def test_the_names_that_the_design_promises(name: str) -> None:
    assert name in tm.__all__
    assert callable(getattr(tm, name))


def test_the_equations_are_at_hand() -> None:
    assert callable(tm.dtfs.analyse)
    assert callable(tm.dtfs.synthesise)


def test_an_unknown_name_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match="no attribute 'nothing_of_this_name'"):
        _ = tm.nothing_of_this_name


def test_compare_stays_a_function_when_its_room_is_opened() -> None:
    code = (
        "import timbre_match as tm\n"
        "import timbre_match.compare.records\n"
        "from timbre_match.compare import comparison\n"
        "assert callable(tm.compare) and tm.compare.__name__ == 'compare', tm.compare\n"
        "from timbre_match import compare\n"
        "assert compare is tm.compare\n"
    )
    subprocess.run([sys.executable, "-c", code], check=True, timeout=60, cwd=PACKAGE.parent)


@pytest.mark.parametrize("name", [name for name in module_names() if name != "timbre_match"])
def test_all_of_a_module_holds_names_that_are_in_it(name: str) -> None:
    module = importlib.import_module(name)
    offered = getattr(module, "__all__", [])
    assert len(set(offered)) == len(offered)
    assert all(hasattr(module, one) for one in offered)
    if offered:
        defined = {
            node.name
            for node in source_of(name).body
            if isinstance(node, ast.FunctionDef | ast.ClassDef) and not node.name.startswith("_")
        }
        assert defined <= set(offered)


@pytest.mark.parametrize("name", module_names())
def test_every_public_thing_says_what_it_is(name: str) -> None:
    tree = source_of(name)
    silent = [] if ast.get_docstring(tree) else ["the module"]
    silent += list(_silent(tree.body, ""))
    assert not silent


def _silent(body: list[ast.stmt], inside: str) -> list[str]:
    found = []
    for node in body:
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef | ast.ClassDef) and not node.name.startswith("_"):
            if not ast.get_docstring(node):
                found.append(f"{inside}{node.name} (line {node.lineno})")
            if isinstance(node, ast.ClassDef):
                found += _silent(node.body, f"{node.name}.")
    return found
