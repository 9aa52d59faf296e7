"""The file with every report of a run, written where the run is steered, whoever did the work."""

import json
from pathlib import Path
from typing import Any

import pytest

FORMAT = "gradcheck-pytest"
FORMAT_VERSION = 1

#: Worst first.
_VERDICTS = ("refuted", "undecided", "confirmed")


class JsonRecord:
    """Gathers what the test reports carry; they come alike from this process and from workers."""

    def __init__(self, file: str) -> None:
        if file == "-":
            raise pytest.UsageError("--gradcheck-json - would mix with pytest's own output; name a file")
        self.path = Path(file).absolute()
        if self.path.is_dir():
            raise pytest.UsageError(f"--gradcheck-json {file} is a directory; name a file in it")
        self.items: dict[str, dict[str, Any]] = {}

    def pytest_runtest_logreport(self, report: pytest.TestReport) -> None:
        carried = getattr(report, "gradcheck", None)
        if carried is None:
            return
        verdicts = [each["verdict"] for each in carried["reports"]]
        self.items[report.nodeid] = {
            "nodeid": report.nodeid,
            "outcome": _outcome(report),
            "verdict": next((verdict for verdict in _VERDICTS if verdict in verdicts), None),
            "message": carried["message"],
            "reports": carried["reports"],
        }

    def pytest_sessionfinish(self, exitstatus: int) -> None:
        # By node id: with workers, the order in which items end is chance.
        items = [self.items[nodeid] for nodeid in sorted(self.items)]
        # With the exit status, because few or no items may mean that the run ended early.
        document = {"format": FORMAT, "version": FORMAT_VERSION, "exit_status": int(exitstatus), "items": items}
        self.path.parent.mkdir(parents=True, exist_ok=True)
        text = json.dumps(document, indent=2, allow_nan=False, ensure_ascii=False)
        self.path.write_text(text + "\n", encoding="utf-8")

    def pytest_terminal_summary(self, terminalreporter: Any) -> None:
        terminalreporter.write_sep("-", f"gradcheck: {len(self.items)} items reported in {self.path}")


def _outcome(report: pytest.TestReport) -> str:
    """The word of pytest for how the item ended, with expected failures told apart from skipped items."""
    if hasattr(report, "wasxfail"):
        return "xfailed" if report.skipped else "xpassed"
    if report.when != "call" and report.failed:
        return "error"
    return str(report.outcome)
