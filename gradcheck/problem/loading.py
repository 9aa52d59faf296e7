"""From the address of a model, ``package.module:attribute`` or ``path/to/file.py:attribute``, to the object itself."""

import difflib
import hashlib
import importlib
import importlib.util
import os
import pkgutil
import sys
import traceback
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from types import ModuleType
from typing import Any

from gradcheck.errors import ModelNotFound

#: Names that are offered when the one that was asked for does not exist.
_OFFERED = 6


def load(address: str) -> Any:
    """The object at `address`.

    Parameters
    ----------
    address : str
        ``package.module:attribute`` or ``path/to/file.py:attribute``; the attribute may be dotted. What stands before
        the last colon is the module, so a drive letter does no harm.

    Returns
    -------
    object
        Whatever stands there; a file's module is imported once, under a name that depends on its path only.

    Raises
    ------
    ModelNotFound
        If the address does not lead to an object, or importing the module fails: which address, why (the module's own
        last words), and close names.

    Notes
    -----
    The working directory, and a file's own folder, are on ``sys.path`` during the import only; `importable` keeps them
    there for longer.

    Examples
    --------
    >>> load("math:hypot")(3.0, 4.0)
    5.0
    """
    place, attribute = split_address(address)
    with importable(address):
        module = _module_of_file(address, Path(place)) if _is_file(place) else _module_by_name(address, place)
        return _attribute(address, module, attribute)


def split_address(address: str) -> tuple[str, str]:
    """Module or file, and attribute, of an address.

    Raises
    ------
    ModelNotFound
        If one of the two is missing.

    Examples
    --------
    >>> split_address(r"C:\\models\\wing.py:drag")
    ('C:\\\\models\\\\wing.py', 'drag')
    """
    place, _, attribute = address.strip().rpartition(":")
    if place and attribute and all(part.isidentifier() for part in attribute.split(".")):
        return place, attribute
    written = address.strip().rstrip(":")
    example = f"{written}:name" if written and not place else "package.module:name or path/to/file.py:name"
    raise ModelNotFound(
        f"model address {address!r} names no attribute; write {example}, where name is a function or a "
        "gradcheck.Problem in it"
    )


@contextmanager
def importable(address: str) -> Iterator[None]:
    """While it lasts, imports find what lies in the working directory and beside the addressed file.

    A model that imports its neighbours inside its functions needs this while it is evaluated.
    """
    place = address.strip().rpartition(":")[0]
    folders = [os.getcwd()]
    if _is_file(place):
        folders.insert(0, str(Path(place).resolve().parent))
    added = [folder for folder in dict.fromkeys(folders) if folder not in sys.path]
    sys.path[:0] = added
    importlib.invalidate_caches()
    try:
        yield
    finally:
        for folder in added:
            if folder in sys.path:  # the module may have tidied up itself
                sys.path.remove(folder)


def _is_file(place: str) -> bool:
    return place.endswith(".py") or "/" in place or os.sep in place


def _module_of_file(address: str, path: Path) -> ModuleType:
    if not path.is_file():
        raise ModelNotFound(
            f"model {address!r}: there is no file {str(path)!r}{_close(path.name, _files_beside(path))}"
        )
    resolved = path.resolve()
    # Stable, so that what is pickled by reference finds its way back; from the whole path, so that two files of one
    # name do not meet.
    name = f"gradcheck_model_{resolved.stem}_{hashlib.sha256(os.fsencode(resolved)).hexdigest()[:12]}"
    if name in sys.modules:
        return sys.modules[name]
    spec = importlib.util.spec_from_file_location(name, resolved)
    if spec is None or spec.loader is None:
        raise ModelNotFound(f"model {address!r}: {path.name!r} is no Python file; its name must end in .py")
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    try:
        spec.loader.exec_module(module)
    except (Exception, SystemExit) as error:
        del sys.modules[name]
        raise _import_failed(address, error) from error
    except BaseException:
        del sys.modules[name]
        raise
    return module


def _module_by_name(address: str, name: str) -> ModuleType:
    if not all(part.isidentifier() for part in name.split(".")):
        raise ModelNotFound(
            f"model {address!r}: {name!r} is neither a module name nor a Python file; write package.module:name or "
            "path/to/file.py:name"
        )
    try:
        return importlib.import_module(name)
    except (Exception, SystemExit) as error:
        if isinstance(error, ModuleNotFoundError) and error.name and f"{name}.".startswith(f"{error.name}."):
            parent, _, last = error.name.rpartition(".")
            raise ModelNotFound(
                f"model {address!r}: there is no module {error.name!r}{_close(last, _modules_in(parent))}"
            ) from None
        raise _import_failed(address, error) from error


def _attribute(address: str, module: ModuleType, attribute: str) -> Any:
    found: Any = module
    so_far = "it"
    for part in attribute.split("."):
        try:
            found = getattr(found, part)
        except AttributeError:
            raise ModelNotFound(
                f"model {address!r}: {so_far} has no attribute {part!r}{_close(part, _public_names(found))}"
            ) from None
        so_far = repr(part)
    return found


def _import_failed(address: str, error: BaseException) -> ModelNotFound:
    """The module's own last words, with the user's line; a hint where the cause is a known one."""
    text = " ".join(str(error).split())
    words = f"{type(error).__name__}: {text}" if text else type(error).__name__
    frames = [frame for frame in traceback.extract_tb(error.__traceback__) if not _is_machinery(frame.filename)]
    if frames and not isinstance(error, SyntaxError):  # a syntax error names its line itself
        words += f" ({Path(frames[-1].filename).name}, line {frames[-1].lineno})"
    hint = ""
    if isinstance(error, SystemExit):
        hint = '; it runs as a script: guard that part with `if __name__ == "__main__":`'
    elif "no known parent package" in text:
        hint = "; a file inside a package is addressed as package.module:name"
    return ModelNotFound(f"model {address!r}: importing it failed with {words}{hint}")


def _is_machinery(filename: str) -> bool:
    return filename == __file__ or filename == importlib.__file__ or filename.startswith("<frozen")


def _close(name: str, known: list[str]) -> str:
    """The close ones among the known names; failing these, the known names if they are few."""
    near = difflib.get_close_matches(name, known, n=_OFFERED, cutoff=0.5)
    if near:
        return f"; did you mean {' or '.join(near)}?"
    return f"; there are {', '.join(known)}" if 0 < len(known) <= _OFFERED else ""


def _public_names(thing: Any) -> list[str]:
    """Names that could be a model, in order of the alphabet."""
    return sorted(
        name
        for name in dir(thing)
        if not name.startswith("_") and not isinstance(getattr(thing, name, None), ModuleType)
    )


def _files_beside(path: Path) -> list[str]:
    return sorted(each.name for each in path.parent.glob("*.py")) if path.parent.is_dir() else []


def _modules_in(parent: str) -> list[str]:
    """Modules of a package, or those that lie in the working directory."""
    package = sys.modules.get(parent) if parent else None
    places = list(getattr(package, "__path__", [])) if parent else [os.getcwd()]
    return sorted(module.name for module in pkgutil.iter_modules(places))
