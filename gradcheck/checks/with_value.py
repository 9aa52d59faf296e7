"""The value that a claim of value and gradient gives, held against the model's own."""

from dataclasses import replace

import numpy as np

from gradcheck.checks.measure import measure_of
from gradcheck.checks.parts import appended, entries_from
from gradcheck.claims.policy import Rules
from gradcheck.claims.rule import Tolerance
from gradcheck.claims.second_examination import judged
from gradcheck.evaluation.pipeline import Session
from gradcheck.records.arrays import Array
from gradcheck.records.report import CheckReport, Diagnosis
from gradcheck.records.verdict import DiagnosisCode, Verdict
from gradcheck.wording import number

#: The index of a value among the entries of a gradient: it is none of them.
NO_ENTRY = -1
MODEL = "the model's own value"


def with_value(session: Session, function: str, centre: Array, rules: Rules, report: CheckReport) -> CheckReport:
    """The report on a gradient, with an entry ``value`` for the value that came with it.

    Where the claim raised, or came from an AD library that evaluates the model itself, there is none.
    """
    value = session.ledger.claimed_values.get(function)
    if value is None:
        return report
    measure = measure_of(session, function, "value_and_gradient", rules)
    rounding = measure.unit_roundoff * np.abs(centre)
    # What was evaluated twice may have been summed in another order: half a dozen units in the last place.
    tolerance = Tolerance(rel_tol=measure.rel_tol, abs_tol=measure.abs_tol, rounding=rounding)
    examined = judged(value, centre, rounding, tolerance, np.full(value.shape, "", dtype=object), MODEL)
    outputs = np.arange(centre.size)
    scalar = report.entries.index.ndim == 1
    index = np.array([NO_ENTRY]) if scalar else np.stack([outputs, np.full(centre.size, NO_ENTRY)], axis=1)
    names = ["value"] if centre.size == 1 else [f"value[{i}]" for i in outputs]
    entries = appended(entries_from(examined, index, names), report.entries)
    wrong = [i for i in outputs.tolist() if examined.verdict[i] == Verdict.REFUTED]
    diagnoses = report.diagnoses
    if wrong:
        diagnoses = (
            _wrong_value(float(value[wrong[0]]), float(centre[wrong[0]]), [names[i] for i in wrong]),
            *diagnoses,
        )
    return replace(
        report,
        verdict=Verdict.overall([report.verdict, *examined.verdict.tolist()]),
        entries=entries,
        diagnoses=diagnoses,
        text="",
    )


def _wrong_value(claim: float, model: float, names: list[str]) -> Diagnosis:
    ratio = claim / model if model else float("nan")
    code = DiagnosisCode.UNKNOWN
    if np.isfinite(ratio) and abs(ratio + 1) < 1e-9:
        code, hint = DiagnosisCode.SIGN_FLIPPED, "its sign is flipped: is one maximized and the other minimized?"
    elif np.isfinite(ratio) and abs(ratio) < 1e6 and abs(ratio * 12 - round(ratio * 12)) < 1e-7 and round(ratio * 12):
        code, hint = DiagnosisCode.CONSTANT_FACTOR, f"it is {number(ratio)} times the model's: a mean for a sum?"
    elif not np.isfinite(claim):
        hint = "look for an overflow, log(0) or 0/0 in it"
    else:
        hint = f"it is off by {number(claim - model)}: a term or a constant that only one of the two has?"
    text = f"the value that comes with the gradient is {number(claim, 8)}, the model returns {number(model, 8)}; {hint}"
    return Diagnosis(code=code, text=text, entries=tuple(names))
