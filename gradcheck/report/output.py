"""Where a report goes: standard output, a file (JSON, SVG), and one line on the error output if something failed."""

import os
import sys
from pathlib import Path

import click

from gradcheck.errors import UsageError


def print_report(text: str) -> None:
    """The text on standard output; a terminal shows its first line in bold unless NO_COLOR is set."""
    encoding = getattr(sys.stdout, "encoding", None) or "utf-8"
    try:
        text.encode(encoding)
    except UnicodeEncodeError:  # an old terminal or a log in ASCII
        text = text.replace("±", "+/-").encode(encoding, "replace").decode(encoding)
    first, newline, rest = text.partition("\n")
    if sys.stdout.isatty() and not os.environ.get("NO_COLOR") and os.environ.get("TERM") != "dumb":
        first = click.style(first, bold=True)
    _to_stdout(first + newline + rest + "\n")


def write_document(document: str, target: str) -> None:
    """A document (JSON, SVG) as UTF-8 to a file, or to standard output if `target` is ``-``.

    Raises
    ------
    UsageError
        If the file cannot be written.
    """
    content = document.encode("utf-8", "replace")
    if target == "-":
        _to_stdout(content)
        return
    try:
        Path(target).write_bytes(content)
    except OSError as error:
        raise UsageError(f"{target!r} cannot be written: {error.strerror or error}") from None


def refuse_unwritable(target: str | None) -> None:
    """Complain before hours of evaluations, not after.

    Raises
    ------
    UsageError
        If `target` is empty or a folder, or lies in one that does not exist.
    """
    if target is None or target == "-":
        return
    if not target:
        raise UsageError("the name of the file to write is empty; give one, or - for standard output")
    path = Path(target)
    if path.is_dir():
        raise UsageError(f"{target!r} is a folder; give the name of a file")
    if not path.absolute().parent.is_dir():
        raise UsageError(f"{target!r} cannot be written: there is no folder {str(path.absolute().parent)!r}")


def complain(message: str) -> None:
    """One line on the error output."""
    click.echo(f"gradcheck: {' '.join(message.split())}", err=True)


def _to_stdout(text: str | bytes) -> None:
    try:
        click.echo(text, nl=False)
    except BrokenPipeError:
        # Whoever reads has seen enough; the exit status still tells the verdict.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
