"""The two reports that users receive."""

import json
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.records.advice import Advice
from gradcheck.records.arrays import Array, frozen
from gradcheck.records.finding import Finding
from gradcheck.records.noise import NoiseKind
from gradcheck.records.plain import plain
from gradcheck.records.rendering import RenderedWhenRead
from gradcheck.records.sparsity import SparsityChecks
from gradcheck.records.verdict import DiagnosisCode, Verdict

FORMAT_VERSION = 1
#: The source of an entry that shows an identity broken: the claim contradicts itself, and no witness was needed.
IDENTITY = "identity"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Entries:
    """The entries of a claim that were looked at, as parallel arrays of length k.

    Attributes
    ----------
    index : ndarray of int
        ``(k,)`` flat indices for a vector, ``(k, 2)`` (row, column) for a matrix. Products of a derivative with vectors
        are (output, vector) for ``jvp``, (vector, variable) for ``vjp`` and (variable, vector) for ``hvp``; unit
        vectors have the number of their one, other vectors follow. The value of ``value_and_gradient`` has -1.
    name : sequence of str
        Readable name of each entry; of many entries they are made when they are read.
    claim, witness, bound : ndarray, shape (k,)
        Claimed value, witness value, and the witness's absolute error bound.
    digits : ndarray, shape (k,)
        Decimal digits to which claim and witness are seen to agree.
    verdict : tuple of Verdict
    source : tuple of str
        Which witness decided; ``"identity"`` where the claim contradicts itself.
    reason : tuple of str
        Why an entry is undecided or was not judged by the plain rule; empty where there is nothing to say.
    """

    index: NDArray[np.intp]
    name: Sequence[str]
    claim: Array
    witness: Array
    bound: Array
    digits: Array
    verdict: tuple[Verdict, ...]
    source: tuple[str, ...]
    reason: tuple[str, ...]

    def __post_init__(self) -> None:
        object.__setattr__(self, "index", frozen(self.index, dtype=np.intp))
        for name in ("claim", "witness", "bound", "digits"):
            object.__setattr__(self, name, frozen(getattr(self, name)))

    def __len__(self) -> int:
        return len(self.name)


@dataclass(frozen=True, slots=True, kw_only=True)
class Coverage:
    """How well random directions cover some of the entries: what a single error must be to be surely seen.

    Attributes
    ----------
    what : str
        Which entries, in words.
    entries : int
        How many.
    share : float
        Smallest single error that is surely seen, as a share of the claimed value; NaN where that depends on the entry.
    over_size : float
        The same as an error of the derivative times the size of its variable, so in units of the function; NaN where
        `share` tells it.
    """

    what: str
    entries: int
    share: float = float("nan")
    over_size: float = float("nan")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class DirectionChecks:
    """Directional derivatives that were compared instead of single entries, as parallel arrays of length d.

    Attributes
    ----------
    claim, witness, bound : ndarray, shape (d,)
        The claim along each direction, and the witness ± bound.
    verdict : tuple of Verdict
    smallest_visible : float
        The smallest error of a single entry that is surely seen, as a share of its claimed value, in the entries that
        are covered in full; NaN if there are none.
    coverage : tuple of Coverage
        The same for each kind of entries, also for those that are covered less well.
    left_out : int
        Entries that no direction moves.
    left_out_names : tuple of str
        The first of them.
    reason : tuple of str
        Why a direction is undecided.
    """

    claim: Array
    witness: Array
    bound: Array
    verdict: tuple[Verdict, ...]
    smallest_visible: float = float("nan")
    coverage: tuple[Coverage, ...] = ()
    left_out: int = 0
    left_out_names: tuple[str, ...] = ()
    reason: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        for name in ("claim", "witness", "bound"):
            object.__setattr__(self, name, frozen(getattr(self, name)))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Diagnosis:
    """A likely mistake: its code, one sentence with the evidence and the mend, and the names of the entries."""

    code: DiagnosisCode
    text: str
    entries: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False, repr=False)
class CheckReport(RenderedWhenRead):
    """What `check` found out about one claim.

    Attributes
    ----------
    verdict : Verdict
    kind : str
        ``"gradient"``, ``"jacobian"``, ``"hessian"``, ``"jvp"``, ``"vjp"``, ``"hvp"`` or ``"value_and_gradient"``.
    function : str
        Name of the model or output whose derivative is claimed.
    point : ndarray, shape (n,)
    entries : Entries
    directions : DirectionChecks or None
    diagnoses : tuple of Diagnosis
    findings : tuple of Finding
    notices : tuple of str
        What was changed on the way to the model (integers made floats, and the like).
    evaluations : int
        Model evaluations spent.
    seconds : float
    parts : tuple of CheckReport
        Where several claims were checked in one call: the report on each, in the order of the arguments of `check`.
        The report that holds them is that on the decisive one (the first refuted, else the first undecided, else the
        first), with the overall verdict and the evaluations of all. Empty for a single claim.
    sparsity : SparsityChecks or None
        For a Jacobian that is sparse or has many columns: counts, and the lists of faults. `entries` then holds those
        that are not confirmed, and of the confirmed ones only a few where there are many.
    renderer : callable, optional
        Makes the text when it is first read; `check` hands it over, because records import nothing that renders.
    """

    verdict: Verdict
    kind: str
    function: str
    point: Array
    entries: Entries
    directions: DirectionChecks | None = None
    diagnoses: tuple[Diagnosis, ...] = ()
    findings: tuple[Finding, ...] = ()
    notices: tuple[str, ...] = ()
    evaluations: int = 0
    seconds: float = 0.0
    parts: tuple["CheckReport", ...] = ()
    renderer: Callable[["CheckReport"], str] | None = None
    text: str = ""
    sparsity: SparsityChecks | None = None

    def __post_init__(self) -> None:
        object.__setattr__(self, "point", frozen(self.point))
        self._await_reader()

    def __repr__(self) -> str:
        return f"<CheckReport: {self.text.partition(chr(10))[0] or 'not rendered'}>"

    def __str__(self) -> str:
        return self.text

    @property
    def verdicts(self) -> tuple[Verdict, ...]:
        """Verdicts on all that was looked at: entries, random directions, and those of the parts.

        Of a sparse claim the confirmed entries are counted, not listed: one stands for all of them.
        """
        found = [verdict for part in self.parts for verdict in part.verdicts]
        if not self.parts:
            found += [*self.entries.verdict, *(self.directions.verdict if self.directions else ())]
            if self.sparsity is not None and self.sparsity.confirmed + self.sparsity.whole_rows_confirmed:
                found.append(Verdict.CONFIRMED)
        return tuple(found)

    def to_dict(self) -> dict[str, Any]:
        """The report in builtin types; NaN and infinities as strings."""
        return {"format": "gradcheck-check", "version": FORMAT_VERSION} | plain(self)  # type: ignore[no-any-return]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class WitnessRecord:
    """How one derivative source fares on one function of this model.

    Attributes
    ----------
    works : bool
    bound : float
        Median of bound/|value| over the entries; NaN if it does not work.
    evaluations : int
        Model evaluations (or AD passes) for one full derivative.
    seconds : float
    reason : str
        Why it does not work, or a restriction.
    """

    function: str
    source: str
    works: bool
    bound: float
    evaluations: int
    seconds: float
    reason: str = ""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Steps:
    """Best steps for the user's own solver, per variable, and the derivative error that each leaves.

    All arrays have shape (n,); steps in units of the variable, errors in units of the function per unit of the
    variable. NaN where differences approximate no derivative (a jump, a plateau).

    Attributes
    ----------
    function : str
    names : tuple of str
        The variables; those of whole numbers are left out.
    forward, central : ndarray
        Steps of a difference of two values at x and x + h, and at x - h and x + h.
    forward_error, central_error : ndarray
        The error that each step leaves: truncation and noise, and never less than what was seen when it was tried. For
        several outputs the largest; their steps are a compromise.
    forward_side : ndarray
        1; or -1 where the bounds leave room for a step down only.
    central_side : ndarray
        0; or 1 or -1 where a bound is so near that the step is meant for three values above or below: x, x ± h, x ± 2h.
    noise : float
        Noise level of the function; of several outputs the largest.
    noise_kind : NoiseKind
        Where that noise comes from.
    """

    function: str
    names: tuple[str, ...]
    forward: Array
    forward_error: Array
    central: Array
    central_error: Array
    noise: float
    forward_side: Array = field(default_factory=lambda: np.empty(0))
    central_side: Array = field(default_factory=lambda: np.empty(0))
    noise_kind: NoiseKind = NoiseKind.NOT_EXAMINED

    def __post_init__(self) -> None:
        for name, usual in (("forward_side", 1.0), ("central_side", 0.0)):
            if np.size(getattr(self, name)) == 0:
                object.__setattr__(self, name, np.full(len(self.names), usual))
        for name in ("forward", "forward_error", "forward_side", "central", "central_error", "central_side"):
            object.__setattr__(self, name, frozen(getattr(self, name)))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Scaling:
    """Suggested divisor of each variable, shape (n,), and the spread of |typical × derivative| it evens out."""

    names: tuple[str, ...]
    variables: Array
    spread: float

    def __post_init__(self) -> None:
        object.__setattr__(self, "variables", frozen(self.variables))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False, repr=False)
class AuditReport:
    """What `audit` found out about a problem.

    Attributes
    ----------
    name : str
    ready : bool
        No blocker, nothing refuted, not everything undecided.
    claims : tuple of CheckReport
    witnesses : tuple of WitnessRecord
    findings : tuple of Finding
        Worst first.
    accepted : tuple of dict
        Findings silenced knowingly, each with its reason.
    steps : tuple of Steps
    scaling : Scaling or None
    advice : Advice
    environment : dict
        Versions, seed, settings, threads.
    complete : bool
        False where budget or time cut the audit short; `not_looked_at` says what is missing.
    evaluable : bool
        False if the model could not be evaluated at its start point; nothing else was looked at then.
    """

    name: str
    ready: bool
    claims: tuple[CheckReport, ...]
    witnesses: tuple[WitnessRecord, ...]
    findings: tuple[Finding, ...]
    steps: tuple[Steps, ...]
    scaling: Scaling | None
    advice: Advice
    environment: dict[str, Any]
    evaluations: int
    seconds: float
    complete: bool
    evaluable: bool = True
    accepted: tuple[dict[str, str], ...] = ()
    not_looked_at: tuple[str, ...] = ()
    notices: tuple[str, ...] = ()
    variables: tuple[dict[str, Any], ...] = ()
    text: str = field(default="")

    def __repr__(self) -> str:
        return f"<AuditReport: {self.text.partition(chr(10))[0] or 'not rendered'}>"

    def __str__(self) -> str:
        return self.text

    def to_dict(self) -> dict[str, Any]:
        """The report in builtin types, with its format name and version; NaN and infinities as strings."""
        return {"format": "gradcheck-audit", "version": FORMAT_VERSION} | plain(self)  # type: ignore[no-any-return]

    def write_json(self, path: str | Path) -> None:
        """Write the report as one JSON document (UTF-8) that holds to the schema in the package."""
        text = json.dumps(self.to_dict(), indent=2, allow_nan=False, ensure_ascii=False)
        Path(path).write_text(text + "\n", encoding="utf-8")
