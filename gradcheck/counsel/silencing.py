"""Findings accepted knowingly: they leave the list and stand, with their reason, in a list of their own."""

from collections.abc import Mapping, Sequence

from gradcheck.errors import UsageError
from gradcheck.records.finding import Finding, FindingCode


def silenced(
    findings: Sequence[Finding], accept: Mapping[str, str] | None
) -> tuple[list[Finding], tuple[dict[str, str], ...]]:
    """The findings that stay, and those that were accepted.

    Parameters
    ----------
    findings : sequence of Finding
    accept : mapping of str to str, optional
        ``"code"``, ``"code:function"`` or ``"code:function:variable"`` -> reason.

    """
    if not accept:
        return list(findings), ()
    stay, accepted = [], []
    for finding in findings:
        keys = (
            str(finding.code),
            f"{finding.code}:{finding.function}",
            f"{finding.code}:{finding.function}:{finding.variable}",
        )
        matching = [key for key in keys if key in accept]
        if not matching:
            stay.append(finding)
        else:
            accepted.append(
                {
                    "code": str(finding.code),
                    "function": finding.function,
                    "variable": finding.variable or "",
                    "reason": str(accept[matching[0]]),
                }
            )
    return stay, tuple(accepted)


def refuse_unknown(accept: Mapping[str, str] | None) -> None:
    """Refuse what cannot be accepted, before anything is evaluated.

    Raises
    ------
    UsageError
        If a key names no finding code, a refuted claim, or the reason is empty.
    """
    for key, reason in (accept or {}).items():
        code = key.partition(":")[0]
        if code not in set(FindingCode):
            raise UsageError(f"accept names {code!r}, which is no finding; see the codes of a report, such as 'noise'")
        if code == FindingCode.CLAIM_REFUTED:
            raise UsageError("a refuted claim cannot be accepted: mend the derivative, or stop claiming it")
        if not str(reason).strip():
            raise UsageError(f"accept[{key!r}] has no reason; say why it does no harm")
