"""Reports as strict JSON, and the JSON Schemas that they are held to."""

import json
from collections.abc import Mapping, Sequence
from importlib import resources
from typing import Any

from gradcheck.errors import UsageError
from gradcheck.records.estimate import Estimate, Scan
from gradcheck.records.report import FORMAT_VERSION, AuditReport, CheckReport
from gradcheck.records.verdict import Verdict

#: Formats that have a schema in the package.
SCHEMAS = ("audit", "check", "error")

#: Records that leave naming their format to this module.
_FORMATS = {Estimate: "gradcheck-estimate", Scan: "gradcheck-scan"}


def document(record: AuditReport | CheckReport | Estimate | Scan | Sequence[CheckReport], **more: Any) -> str:
    """One JSON document, ending in a newline.

    Parameters
    ----------
    record : AuditReport, CheckReport, Estimate, Scan, or a sequence of CheckReports
        A sequence of one is written as that one report.
    **more
        Further members of the document, such as ``status`` and ``error``.

    Returns
    -------
    str
        Strict JSON: NaN and infinities are the strings ``"nan"``, ``"inf"`` and ``"-inf"``.

    Raises
    ------
    ValueError
        If something in it is no plain type, which is an error of this package.
    """
    return _written(content(record) | more)


def error_document(status: int, error: str) -> str:
    """The document of a command that could not be carried out."""
    return _written({"format": "gradcheck-error", "version": FORMAT_VERSION, "status": status, "error": error})


def content(record: AuditReport | CheckReport | Estimate | Scan | Sequence[CheckReport]) -> dict[str, Any]:
    """The document as a dict of plain types."""
    if isinstance(record, Sequence):
        if len(record) == 1:
            return record[0].to_dict()
        return {
            "format": "gradcheck-checks",
            "version": FORMAT_VERSION,
            "verdict": str(Verdict.overall([report.verdict for report in record])),
            "reports": [report.to_dict() for report in record],
        }
    name = _FORMATS.get(type(record))
    return ({"format": name, "version": FORMAT_VERSION} if name else {}) | record.to_dict()


def schema(name: str) -> dict[str, Any]:
    """The JSON Schema (2020-12) of a format.

    Parameters
    ----------
    name : str
        ``"audit"``, ``"check"`` (one report or several), or ``"error"``.

    Raises
    ------
    UsageError
        If there is no such schema.

    Examples
    --------
    >>> schema("audit")["properties"]["format"]["const"]
    'gradcheck-audit'
    """
    if name not in SCHEMAS:
        raise UsageError(f"there is no schema {name!r}; there are {', '.join(SCHEMAS)}")
    text = resources.files("gradcheck.report").joinpath(f"{name}.schema.json").read_text(encoding="utf-8")
    found: dict[str, Any] = json.loads(text)
    return found


def _written(value: Mapping[str, Any]) -> str:
    return json.dumps(value, indent=2, allow_nan=False, ensure_ascii=False) + "\n"
