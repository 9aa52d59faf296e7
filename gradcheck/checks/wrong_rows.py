"""The story of products H·v that are wrong in many entries: which, by what factor, and what single entries show."""

from collections.abc import Sequence

import numpy as np

from gradcheck.checks.curvature import WrongRows
from gradcheck.checks.identities import Contradiction
from gradcheck.claims.desk import Examined
from gradcheck.records.report import Diagnosis
from gradcheck.records.verdict import DiagnosisCode, Verdict
from gradcheck.wording import count, listed, number

#: Wrong entries of H·v that are named.
NAMED = 8


def wrong_rows(
    wrong: WrongRows, examples: Examined | None, names: tuple[str, ...], found: Sequence[Contradiction]
) -> Diagnosis:
    """The diagnosis; `names` are those of the wrong second derivatives among the examples."""
    which = f" ({listed(wrong.names)})" if wrong.many <= NAMED else ""
    verb = "is" if wrong.many == 1 else "are"
    text = f"{wrong.many:,} of {count(wrong.of, 'entry', 'entries')} of H·v {verb} wrong{which}"
    code = DiagnosisCode.UNKNOWN
    if np.isfinite(wrong.ratio):
        flipped = abs(wrong.ratio + 1) < 1e-6
        mend = "look for a lost minus" if flipped else f"look for a missing factor {number(1 / wrong.ratio)}"
        text += f", and all of them are {number(wrong.ratio, 6)} times the product with the second derivatives; {mend}"
        code = DiagnosisCode.SIGN_FLIPPED if flipped else DiagnosisCode.CONSTANT_FACTOR
    text += "".join(f"; a Hessian is symmetric, and this is not: {_sides(each)}" for each in found)
    if examples is None:
        return Diagnosis(code=code, text=f"{text}.", entries=names or wrong.names)
    off = np.asarray(examples.verdict == Verdict.REFUTED)
    zero = bool((examples.claim[off] == 0).all())
    told = listed(names, limit=4)
    if zero and code == DiagnosisCode.UNKNOWN:
        code = DiagnosisCode.ZERO_ENTRY
        text += f". Unit vectors show that {told} {'is' if off.sum() == 1 else 'are'} claimed to be zero and not: look "
        text += "for a term that was left out, or stands on one side of the diagonal only"
    else:
        text += f". Unit vectors show it in {told}"
    return Diagnosis(code=code, text=f"{text}.", entries=names)


def _sides(found: Contradiction) -> str:
    return f"{found.name} fails, {number(found.broken.left)} against {number(found.broken.right)}"
