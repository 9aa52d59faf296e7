"""Models outside the tests: the modules that ``gradcheck_modules`` names, collected without touching their tests."""

import sys
from collections.abc import Generator, Iterator
from importlib import import_module
from importlib.util import find_spec
from pathlib import Path
from typing import Any

import pytest

from gradcheck.plugin.collecting import COLLECTED_ELSEWHERE, home_of, model_items
from gradcheck.plugin.marks import is_described
from gradcheck.plugin.problems import claim_items
from gradcheck.problem.problem import Problem

#: Problems that already have their items: an import of one into another model module is not a second one.
_SEEN_PROBLEMS = pytest.StashKey[list[Problem]]()


class ModelModule(pytest.File):
    """A model module; unlike a test module it is imported by its name, and nothing in it is a test or a fixture."""

    def __init__(self, *, module: str, **kwargs: Any) -> None:
        super().__init__(**kwargs)
        self.module = module

    def collect(self) -> Iterator[pytest.Item]:
        found = {name: obj for name, obj in list(vars(self._imported()).items()) if _is_checkable(obj)}
        self._refuse_empty(found)
        for name, obj in found.items():
            if isinstance(obj, Problem):
                yield from self._claims_of(name, obj)
            elif home_of(obj, self.module) == self.module:
                yield from model_items(self, name, obj)

    def _imported(self) -> Any:
        try:
            return import_module(self.module)
        except Exception as error:
            shown = pytest.ExceptionInfo.from_exception(error).getrepr(style="short")
            raise self.CollectError(f"model module {self.module!r} cannot be imported:\n{shown}") from error

    def _refuse_empty(self, found: dict[str, Any]) -> None:
        """A module on the list without anything to check is a mistake that would otherwise pass for success."""
        homes = {home_of(obj, self.module) for obj in found.values()}
        listed = self.config.getini("gradcheck_modules")
        if homes & set(listed):
            return
        text = f"gradcheck_modules names {self.module!r}, but nothing in it can be checked: "
        if homes:
            raise self.CollectError(f"{text}its models are only imported; name {', '.join(sorted(homes))} instead")
        raise self.CollectError(
            f"{text}decorate a model with @gradcheck.model(at=..., gradient=...), describe a gradcheck.Problem, "
            "or take the name off the list"
        )

    def _claims_of(self, name: str, problem: Problem) -> Iterator[pytest.Item]:
        seen = self.config.stash.setdefault(_SEEN_PROBLEMS, [])
        if not any(problem is known for known in seen):
            seen.append(problem)
            yield from claim_items(self, name, problem)


class ModelModules:
    """The hooks that are needed only where ``gradcheck_modules`` names something."""

    def __init__(self) -> None:
        self.files: dict[Path, str] = {}

    def pytest_report_header(self, config: pytest.Config) -> str:
        names = ", ".join(config.getini("gradcheck_modules"))
        return f"gradcheck: models of {names}" + (
            " left out, because the arguments name other files" if _is_narrowed(config) else ""
        )

    @pytest.hookimpl(tryfirst=True)
    def pytest_collection(self, session: pytest.Session) -> None:
        self.files = {_file_of(name, session.config): name for name in session.config.getini("gradcheck_modules")}
        if not _is_narrowed(session.config):
            session.config.stash[COLLECTED_ELSEWHERE] = frozenset(self.files)

    @pytest.hookimpl(wrapper=True)
    def pytest_make_collect_report(
        self, collector: pytest.Collector
    ) -> Generator[None, pytest.CollectReport, pytest.CollectReport]:
        """Model modules stand beside what the arguments name: they may lie anywhere, also where nothing is searched."""
        report = yield
        if isinstance(collector, pytest.Session) and report.passed and not _is_narrowed(collector.config):
            given = {node.path for node in report.result if isinstance(node, ModelModule)}
            report.result += [
                self._module(collector, path)
                for path in self.files
                if path not in given and not _is_ignored(path, collector.config)
            ]
        return report

    @pytest.hookimpl(tryfirst=True)
    def pytest_pycollect_makemodule(self, module_path: Path, parent: pytest.Collector) -> ModelModule | None:
        """A model module that an argument names (``models.py::drag[gradcheck]``) is no test module either."""
        if module_path not in self.files or _is_test_file(module_path, parent.config):
            return None
        return self._module(parent, module_path)

    def _module(self, parent: pytest.Collector, path: Path) -> ModelModule:
        return ModelModule.from_parent(parent, path=path, module=self.files[path])


def _is_checkable(obj: object) -> bool:
    return isinstance(obj, Problem) or is_described(obj)


def _is_narrowed(config: pytest.Config) -> bool:
    """Whether every argument is a file or something in one: whoever names those wants nothing else."""
    if config.args_source is not pytest.Config.ArgsSource.ARGS:
        return False
    start = config.invocation_params.dir
    return all((start / argument.partition("::")[0]).is_file() for argument in config.args)


def _is_ignored(path: Path, config: pytest.Config) -> bool:
    return bool(config.hook.pytest_ignore_collect(collection_path=path, config=config))


def _is_test_file(path: Path, config: pytest.Config) -> bool:
    return any(path.match(pattern) for pattern in config.getini("python_files"))


def _file_of(name: str, config: pytest.Config) -> Path:
    """Where a module stands; its packages are imported for that, itself not yet."""
    try:
        origin = _origin(name)
        if origin is None and str(config.rootpath) not in sys.path:
            # The plain `pytest` command, unlike `python -m pytest`, leaves the project's own directory out.
            sys.path.append(str(config.rootpath))
            origin = _origin(name)
    except Exception as error:
        raise pytest.UsageError(
            f"gradcheck_modules names {name!r}, but importing its package failed: {type(error).__name__}: {error}"
        ) from error
    if origin is None:
        raise pytest.UsageError(
            f"gradcheck_modules names {name!r}, but there is no such module; give the name that an `import` statement "
            "would use, and make its directory known, for example by pythonpath = src"
        )
    return Path(origin).absolute()


def _origin(name: str) -> str | None:
    try:
        spec = find_spec(name)
    except ModuleNotFoundError as error:
        if error.name is None or not name.startswith(error.name):
            raise  # the package is there, but something that it imports is not
        return None
    return spec.origin if spec is not None and spec.has_location else None
