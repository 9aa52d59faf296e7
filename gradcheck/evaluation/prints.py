"""Keeps what a model prints away from the report: while it runs, its standard output is the error output."""

import ctypes
import os
import sys
from collections.abc import Iterator
from contextlib import contextmanager, redirect_stdout, suppress


@contextmanager
def prints_kept_apart() -> Iterator[None]:
    """While it lasts, everything written to standard output arrives at standard error.

    Holds for Python's ``sys.stdout`` as well as for file descriptor 1, and so for compiled code and for programs that
    the model starts.
    """
    sys.stdout.flush()
    with _descriptor_moved(), redirect_stdout(sys.stderr):
        try:
            yield
        finally:
            flush_all()


def abandon_stdout() -> None:
    """Whatever is printed from now on, until the process has ended, goes to standard error.

    For code of the model that runs at exit: a report on standard output is then already complete.
    """
    flush_all()
    with suppress(OSError):
        os.dup2(2, 1)


def flush_all() -> None:
    """Write out what Python and the C library still hold back, before a descriptor changes its meaning."""
    for stream in (sys.stdout, sys.stderr, sys.__stdout__):
        if stream is not None:
            with suppress(OSError, ValueError):  # closed, or its reader has gone
                stream.flush()
    with suppress(OSError, AttributeError, TypeError):  # no C library by this way: nothing it could hold back
        ctypes.CDLL(None).fflush(None)


@contextmanager
def _descriptor_moved() -> Iterator[None]:
    try:
        own = os.dup(1)
    except OSError:  # no standard output at all
        yield
        return
    try:
        with suppress(OSError):
            os.dup2(2, 1)
        yield
    finally:
        flush_all()
        os.dup2(own, 1)
        os.close(own)
