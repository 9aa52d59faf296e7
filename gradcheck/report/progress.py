"""One line on the error output that says what is being done, for people who wait at a terminal."""

import os
import shutil
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager

from gradcheck.wording import clean, shortened


@contextmanager
def progress_line(*, wanted: bool = True) -> Iterator[Callable[[str], None] | None]:
    """A callable that shows a text in place of the one before; None where nobody would see it.

    Nothing is left behind at the end, so that a report below it starts on a clean line.
    """
    stream = sys.stderr
    if not (wanted and stream.isatty() and os.environ.get("TERM") != "dumb"):
        yield None
        return
    width = shutil.get_terminal_size().columns - 1

    def show(text: str) -> None:
        stream.write("\r" + shortened(clean(text), width).ljust(width))
        stream.flush()

    try:
        yield show
    finally:
        stream.write("\r" + " " * width + "\r")
        stream.flush()
