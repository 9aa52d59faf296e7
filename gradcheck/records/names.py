"""Names of many entries, each made when it is read: a million names take seconds, and nobody reads them all."""

from collections.abc import Callable, Iterator, Sequence
from typing import Any, overload


class Names(Sequence[str]):
    """A sequence of names that behaves as the tuple of them would.

    Parameters
    ----------
    size : int
    of : callable
        The name at a place from 0 to size − 1.
    """

    __slots__ = ("_of", "_size")

    def __init__(self, size: int, of: Callable[[int], str]) -> None:
        self._size, self._of = size, of

    def __len__(self) -> int:
        return self._size

    @overload
    def __getitem__(self, place: int) -> str: ...
    @overload
    def __getitem__(self, place: slice) -> tuple[str, ...]: ...
    def __getitem__(self, place: int | slice) -> str | tuple[str, ...]:
        if isinstance(place, slice):
            return tuple(self._of(i) for i in range(*place.indices(self._size)))
        i = place.__index__()
        if not -self._size <= i < self._size:
            raise IndexError(f"there are {self._size} names, and none at place {place}")
        return self._of(i % self._size)

    def __iter__(self) -> Iterator[str]:
        return map(self._of, range(self._size))

    def __add__(self, more: Sequence[str]) -> tuple[str, ...]:
        return (*self, *more)

    def __radd__(self, before: Sequence[str]) -> tuple[str, ...]:
        return (*before, *self)

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Names | tuple) and tuple(self) == tuple(other)

    def __hash__(self) -> int:
        return hash(tuple(self))

    def __repr__(self) -> str:
        return repr(tuple(self)) if self._size <= 8 else f"<{self._size} names: {self[0]!r} to {self[-1]!r}>"

    def __reduce__(self) -> tuple[Any, ...]:
        return tuple, (tuple(self),)  # between processes they travel as what they stand for
