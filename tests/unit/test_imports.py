"""Imports go one way: each part of the package imports only from the parts that stand before it.

All imports count, also those inside functions: a deferred import hides a cycle, it does not mend it. Only those for the
type checker do not. The package's own ``__init__`` and ``__main__`` sit on top of everything and load lazily.
"""

import ast
import sys
from collections.abc import Iterator
from functools import cache
from pathlib import Path

import pytest

import gradcheck

PACKAGE = Path(gradcheck.__file__).parent

ORDER = [
    "errors",
    "records",
    "wording",
    "problem",
    "evaluation",
    "witnesses",
    "health",
    "claims",
    "counsel",
    "report",
    "checks",
    "demo",
    "verbs",
    "command_line",
    "plugin",
    "pytest_plugin",
]

VERBS = ("checking", "auditing", "estimating", "scanning", "hunting", "strategies")

ON_TOP = ("gradcheck", "gradcheck.__main__")

#: What `__init__` itself holds, so that asking for it loads nothing else.
OWN_NAMES = ("__version__",)


@cache
def modules() -> dict[str, Path]:
    """Every module of the package by its dotted name."""
    found = {}
    for path in sorted(PACKAGE.rglob("*.py")):
        parts = ("gradcheck", *path.relative_to(PACKAGE).with_suffix("").parts)
        found[".".join(parts[:-1] if parts[-1] == "__init__" else parts)] = path
    return found


def part_of(module: str) -> str:
    name = module.split(".")[1]
    if name.startswith("command_"):
        return "command_line"
    return "verbs" if name in VERBS else name


@cache
def imported_by(module: str) -> frozenset[str]:
    """Modules of the package that `module` imports; ``gradcheck.<name>`` for a public name taken from the top."""
    return frozenset(_imported(_without_type_checking(ast.parse(modules()[module].read_text(encoding="utf-8")))))


def _without_type_checking(tree: ast.Module) -> Iterator[ast.AST]:
    waiting: list[ast.AST] = [tree]
    while waiting:
        node = waiting.pop()
        if isinstance(node, ast.If) and "TYPE_CHECKING" in ast.unparse(node.test):
            waiting += node.orelse
            continue
        yield node
        waiting += ast.iter_child_nodes(node)


def _imported(nodes: Iterator[ast.AST]) -> Iterator[str]:
    for node in nodes:
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names if alias.name.partition(".")[0] == "gradcheck")
        elif isinstance(node, ast.ImportFrom) and (node.module or "").partition(".")[0] == "gradcheck":
            yield from (_home(str(node.module), alias.name) for alias in node.names)
        elif isinstance(node, ast.Call) and ast.unparse(node.func).endswith("import_module") and node.args:
            yield from (arg.value for arg in node.args if isinstance(arg, ast.Constant) and "gradcheck." in arg.value)


def _home(module: str, name: str) -> str:
    """``from package import module`` names a module; ``from module import name`` its module."""
    whole = f"{module}.{name}"
    return whole if whole in modules() or (module == "gradcheck" and name not in OWN_NAMES) else module


def checked_modules() -> list[str]:
    return [module for module in modules() if module not in ON_TOP]


def test_the_reader_of_imports_sees_every_kind_of_import() -> None:
    source = """
import gradcheck.errors
from gradcheck import wording
from gradcheck.problem.problem import Problem
from gradcheck import check
from gradcheck import __version__
if TYPE_CHECKING:
    from gradcheck.claims import rule
def later():
    from gradcheck.checking import check
    import_module("gradcheck.demo.scenario")
"""
    seen = set(_imported(_without_type_checking(ast.parse(source))))

    assert seen == {
        "gradcheck.errors",
        "gradcheck.wording",
        "gradcheck.problem.problem",
        "gradcheck.check",
        "gradcheck",
        "gradcheck.checking",
        "gradcheck.demo.scenario",
    }


@pytest.mark.parametrize("module", checked_modules())
def test_a_module_has_a_place_in_the_order(module: str) -> None:
    assert part_of(module) in ORDER, f"{module} belongs to no part; give {part_of(module)!r} its place in ORDER"


@pytest.mark.parametrize("module", checked_modules())
def test_a_module_imports_only_from_parts_before_its_own(module: str) -> None:
    own = ORDER.index(part_of(module))
    wrong = [
        other
        for other in sorted(imported_by(module))
        if other != "gradcheck" and (other not in modules() or ORDER.index(part_of(other)) > own)
    ]

    assert wrong == []


@pytest.mark.parametrize("module", checked_modules())
def test_no_module_imports_itself_on_a_way_round(module: str) -> None:
    way = shortest_way_back(module)

    assert not way, f"these modules import each other in a ring: {' -> '.join(way)}"


def shortest_way_back(start: str) -> list[str]:
    """The modules on the shortest ring of imports through `start`; empty if there is none."""
    ways = [[start]]
    seen = set()
    while ways:
        way = ways.pop(0)
        for other in sorted(imported_by(way[-1]) & modules().keys() - set(ON_TOP)):
            if other == start:
                return [*way, start]
            if other not in seen:
                seen.add(other)
                ways.append([*way, other])
    return []


@pytest.mark.parametrize("module", sorted(modules()))
def test_imports_are_absolute_and_name_what_they_take(module: str) -> None:
    nodes = ast.walk(ast.parse(modules()[module].read_text(encoding="utf-8")))
    imports = [node for node in nodes if isinstance(node, ast.ImportFrom)]

    assert [ast.unparse(node) for node in imports if node.level or node.names[0].name == "*"] == []


def test_the_pytest_plugin_loads_nothing_but_pytest_and_the_standard_library_at_start() -> None:
    body = ast.parse((PACKAGE / "pytest_plugin.py").read_text(encoding="utf-8")).body
    names = [alias.name for node in body if isinstance(node, ast.Import) for alias in node.names]
    names += [str(node.module) for node in body if isinstance(node, ast.ImportFrom)]

    assert {name.partition(".")[0] for name in names} <= {"pytest"} | sys.stdlib_module_names
