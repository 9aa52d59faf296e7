"""What happened while the model was evaluated: counts, seconds, failures and other facts."""

from collections import Counter, defaultdict
from collections.abc import Callable
from dataclasses import dataclass, field

from gradcheck.evaluation.protocol import Status
from gradcheck.records.arrays import Array

#: Failures beyond this many are counted, not kept: a model that always fails must not fill the memory.
FAILURES_KEPT = 200


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Failure:
    """One evaluation that gave no finite value: where, what kind, and the model's own last words."""

    function: str
    point: Array
    status: Status
    message: str


@dataclass(slots=True)
class Ledger:
    """Mutable account of one session of evaluations; written in one place only, the evaluator.

    Attributes
    ----------
    calls, seconds : counters
        Number of calls and time spent, by ``"model"``, ``"complex"``, ``"jax"``, ``"autograd"``, ``"claim"``; and
        ``"slope"``, a claim asked as a function of its own.
    failures : list of Failure
    failed : int
        How many evaluations failed, kept or not.
    mutated : set of str
        Functions that wrote into their input.
    last_words : dict of (function, source) -> str
        What the last failing call of a source said: the message of a claim or an AD library.
    claim_error : exception or None
        The first that a claim raised at the point.
    failed_vectors : dict of (function, kind of claim) -> dict of int -> str
        The vectors, by number, for which a claimed product raised, and its own last words.
    claimed_values : dict of function -> ndarray, shape (m,)
        The value at the point itself, as a claim of value and gradient told it first.
    claim_kinds : dict of (function, kind of claim) -> str
        The dtype of what a claim returned.
    output_kinds : dict of function -> str
        The dtype of what the model returned: ``"float64"``, ``"float32"``, ``"int64"`` ...
    """

    calls: Counter[str] = field(default_factory=Counter)
    seconds: defaultdict[str, float] = field(default_factory=lambda: defaultdict(float))
    failures: list[Failure] = field(default_factory=list)
    failed: int = 0
    mutated: set[str] = field(default_factory=set)
    output_kinds: dict[str, str] = field(default_factory=dict)
    claim_kinds: dict[tuple[str, str], str] = field(default_factory=dict)
    failed_vectors: dict[tuple[str, str], dict[int, str]] = field(default_factory=dict)
    claimed_values: dict[str, Array] = field(default_factory=dict)
    notices: list[str] = field(default_factory=list)
    refused: int = 0
    last_words: dict[tuple[str, str], str] = field(default_factory=dict)
    claim_error: BaseException | None = None

    @property
    def evaluations(self) -> int:
        """Calls of the user's model, in real and complex numbers."""
        return self.calls["model"] + self.calls["complex"]

    def begin_point(self) -> None:
        """Forget the values that claims told at the point before: they are held against nothing at another one."""
        self.claimed_values.clear()

    def fail(self, function: str, point: Callable[[], Array], status: Status, message: str) -> None:
        """Record a failed evaluation; `point` makes the point where it is kept."""
        self.failed += 1
        if len(self.failures) < FAILURES_KEPT:
            self.failures.append(Failure(function=function, point=point(), status=status, message=message))
