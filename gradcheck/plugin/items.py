"""The items that are no test functions: model functions, claims of problems, and what is wrong with either."""

from collections.abc import Sequence
from pathlib import Path
from typing import Any, Self

import pytest

from gradcheck.plugin.marks import MARK, options_of
from gradcheck.plugin.places import source_of
from gradcheck.plugin.running import run_check


class Marked(pytest.Item):
    """Something in a module that carries a mark or a description and is no test function.

    `source` is what stands in the module, `marks` are those on it, the closest first.
    """

    def __init__(self, *, source: Any, marks: Sequence[pytest.Mark] = (), **kwargs: Any) -> None:
        super().__init__(**kwargs)
        self.source = source
        for mark in marks:
            self.own_markers.append(mark)
            self.keywords[mark.name] = mark

    def reportinfo(self) -> tuple[Path, int | None, str]:
        return source_of(self.source, self)

    @classmethod
    def labelled(cls, parent: pytest.Collector, name: str, label: str, **rest: Any) -> Self:
        """An item ``name[label]``.

        Its node id is given as text, for pytest takes that apart as it takes apart the ids that it remembers
        (``--last-failed``); an id that it put together from the parent and this name would equal none of them.
        """
        full = f"{name}[{label}]"
        return cls.from_parent(parent, name=full, nodeid=f"{parent.nodeid}::{full}", **rest)


class ModelItem(Marked):
    """One model function at one point. Its x is no fixture: only `check` ever calls it."""

    def __init__(self, *, point: Any = None, **kwargs: Any) -> None:
        super().__init__(**kwargs)
        self.point = point

    @property
    def options(self) -> dict[str, Any]:
        """Arguments of `check`, for this point."""
        options = options_of(self)
        return options if self.point is None else options | {"at": self.point}

    def runtest(self) -> None:
        run_check(self, self.source, self.options)


class Fault(Marked):
    """Something marked that cannot be checked: it stands among the collected items only to be told with the others."""

    def __init__(self, *, text: str, **kwargs: Any) -> None:
        super().__init__(**kwargs)
        self.text = text
        self.add_marker(MARK)

    def runtest(self) -> None:
        raise pytest.UsageError(self.text)
