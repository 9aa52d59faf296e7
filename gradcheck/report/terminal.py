"""The one door to everything that turns a record into plain text for a terminal, a log or a failure message."""

from gradcheck.report.audit_text import audit_text
from gradcheck.report.check_text import check_text
from gradcheck.report.estimate_text import estimate_text
from gradcheck.report.scan_text import scan_text

__all__ = ["audit_text", "check_text", "estimate_text", "scan_text"]
