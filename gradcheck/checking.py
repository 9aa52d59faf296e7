"""The verb `check`: are claimed derivatives right?"""

from dataclasses import replace
from typing import Any

from gradcheck.checks.choosing import checked_claims
from gradcheck.checks.combined import combined
from gradcheck.claims.entries import merged
from gradcheck.claims.policy import Policy, Rules
from gradcheck.errors import UsageError
from gradcheck.evaluation.pipeline import open_session
from gradcheck.problem.keywords import keywords_explained
from gradcheck.problem.problem import SPEC_ATTRIBUTE, ModelSpec, Problem
from gradcheck.problem.sample_points import whole_number
from gradcheck.problem.subject import CLAIM_KINDS, subject_of_problem, subjects_of_function
from gradcheck.records.report import CheckReport

#: Points at which a claim named after an AD library is tried in full: compiling takes longer than all evaluations.
TRIED_MOST = 3


@keywords_explained
def check(
    function: Any,
    at: Any = None,
    *,
    gradient: Any = None,
    jacobian: Any = None,
    hessian: Any = None,
    jvp: Any = None,
    vjp: Any = None,
    hvp: Any = None,
    value_and_gradient: Any = None,
    wrt: Any = None,
    output: Any = None,
    bounds: Any = None,
    names: Any = None,
    typical: Any = None,
    witnesses: Any = None,
    rel_tol: float | None = None,
    abs_tol: float = 0.0,
    directions: int | str | None = None,
    pattern: Any = None,
    batched: bool = False,
    budget: int | None = None,
    time_limit: float | str | None = None,
    seed: int = 0,
    on_refuted: str = "raise",
    on_undecided: str = "warn",
) -> CheckReport:
    """Compare claimed derivatives with independent witnesses: silent, or raises with the story.

    Parameters
    ----------
    function : callable
        The model: takes what `at` holds, returns a number or an array.
    at : float, list, array, nesting, `gradcheck.args(...)` or `gradcheck.points(...)`
        Where to check. A model decorated with `gradcheck.model` brings its own point and options.
    gradient, jacobian : callable, array or str, optional
        A claim: a callable with the model's own signature, its value at `at`, or the name of an AD source (``"jax"``,
        ``"autograd"``). A source is also tried with random cotangents and tangents of other sizes, ``"jax"`` under jit,
        vmap, scan and checkpoint, in second order and in single precision as well (at the first three points). Shapes:
        gradient ``(n,)`` for a model that returns a number, Jacobian ``(m, n)`` for one that returns ``(m,)``.
        A Jacobian may be a scipy.sparse matrix or array of any format; it is never made dense, and the evaluations that
        it takes hardly grow with n.
    hessian : callable, array or str, optional
        Second derivatives: ``(n, n)`` for a model that returns a number, ``(m, n, n)`` for one that returns ``(m,)``; a
        scipy.sparse matrix, or for a nested input a nesting of its structure twice over, as well. Held against
        differences of the gradient where one is claimed in the same call and confirmed, which is cheaper and sharper;
        else against second differences of the values. With more than 50 variables (16 without a gradient) it is looked
        at along random directions; the report says what these would have seen.
    jvp, vjp, hvp : callable or str, optional
        Products: ``jvp(x, v)`` = J·v with the shape of the output, ``vjp(x, w)`` = Jᵀ·w and ``hvp(x, v)`` = H·v with
        that of the input. They take the model's own positional arguments and then the vector: v has the structure of
        the differentiated input (one part alone, or a tuple of parts where several arguments are differentiated), w the
        shape of the output (a number for a model that returns one). Tried for unit vectors where these are few, and
        for random ones of several lengths; linearity in the vector, zero for zero, ⟨J·v, w⟩ = ⟨v, Jᵀ·w⟩ where both are
        claimed and the symmetry of H are held against the claim alone.
    value_and_gradient : callable, optional
        Returns the pair (value, gradient); the value is an entry of its own, ``value``.
    wrt : str, int or list of them, optional
        Which of several arguments to differentiate with respect to, by name or position. Parts of a claim, and the
        variables, stand in this order.
    output : callable, optional
        Picks what is differentiated from what the model returns.
    bounds : list of (lower, upper) pairs or tuple (lower, upper), optional
        The model is never called outside.
    names : list of str, optional
        Names of the variables.
    typical : float or array, optional
        Typical sizes of the variables.
    witnesses : str or list of str, optional
        Among ``"differences"`` and ``"complex step"``; default both, as needed.
    rel_tol, abs_tol : float, optional
        Default 1e-8 (1e-3 for a model that returns single precision) and 0.
    directions : int or "all", optional
        How many random vectors or directions to look along instead of all unit vectors or entries, or that all of them
        are looked at; by default that depends on their number.
    pattern : scipy.sparse matrix, boolean array of shape (m, n), or "detect", optional
        Which entries of a Jacobian may differ from zero; of a sparse matrix all stored entries. Entries outside it on
        which the model depends refute the claim. Without it, the entries that a sparse claim stores are its pattern.
        ``"detect"`` sees from values which outputs change when groups of variables move, for Jacobians of up to 4
        million places.
    batched : bool
        Whether the model takes many points at once: x as ``(k, n)`` (``(k,)`` where `at` is one number), and returns
        ``(k,)`` or ``(k, m)``; `output` then picks from the whole batch. A claim still takes one point ``(n,)``. Every
        point counts as one evaluation; a batch in which the model raises is repeated point by point, and counted once.
    budget : int, optional
        Largest number of evaluations.
    time_limit : float or str, optional
        Seconds, or text such as ``"10min"``; looked at between the calls of the model, a call is never broken off.
    seed : int
        Of the random vectors and directions; the same seed gives the same ones, no verdict should depend on it.
    on_refuted : "raise" or "return"
    on_undecided : "warn", "raise" or "pass"
        Where every entry is undecided it raises unless ``"pass"``.

    Returns
    -------
    CheckReport
        Of several claims, that on the decisive one, with the overall verdict and a report on each in ``parts``.

    Raises
    ------
    DerivativeMismatch
        If a claim is refuted (or undecided where that was asked to raise). Its text is the report.
    UsageError, DerivativeShapeError
        If the call cannot be carried out as it stands.
    ModelFailure
        If the model raises or is not finite at the point.

    Notes
    -----
    A claim that is a callable is called once more at the end, after the model was evaluated elsewhere: one that then
    answers something else is refuted. Where no likely mistake explains what is wrong, it is called at eight more points
    nearby, within the bounds.

    A claim that is NaN where the witness is finite is refuted. Values given as integers, lists or float32 reach the
    model as float64, and the report says so.

    Examples
    --------
    >>> import gradcheck
    >>> def area(x):
    ...     return x[0] * x[1]
    >>> report = gradcheck.check(area, at=[2.0, 3.0], gradient=lambda x: [x[1], x[0]])
    >>> str(report.verdict)
    'confirmed'

    Several claims in one call; the Hessian is held against the gradient, once that is confirmed:

    >>> report = gradcheck.check(
    ...     area, at=[2.0, 3.0], gradient=lambda x: [x[1], x[0]], hessian=lambda x: [[0, 1], [1, 0]]
    ... )
    >>> [(part.kind, str(part.verdict)) for part in report.parts]
    [('gradient', 'confirmed'), ('hessian', 'confirmed')]
    """
    policy = Policy.of(on_refuted, on_undecided)
    whole_number(seed, "seed")
    if isinstance(function, Problem):
        raise UsageError(
            "check takes a function; a Problem is looked at as a whole: gradcheck.audit(problem).claims holds a report "
            "on each claim, and pytest collects them with the ini option gradcheck_modules"
        )
    claims = {"gradient": gradient, "jacobian": jacobian, "hessian": hessian, "jvp": jvp, "vjp": vjp, "hvp": hvp}
    claims |= {"value_and_gradient": value_and_gradient}
    if at is None:
        options = _described_options(function)
        described = {"wrt": wrt, "output": output, "bounds": bounds, "names": names, "typical": typical}
        described |= {"pattern": pattern, "witnesses": witnesses, "rel_tol": rel_tol, "directions": directions} | claims
        if any(claim is not None for claim in claims.values()):
            options = {name: value for name, value in options.items() if name not in CLAIM_KINDS}
        options |= {name: value for name, value in described.items() if value is not None}
        options |= {"batched": batched} if batched else {}
        rest = {"budget": budget, "time_limit": time_limit, "seed": seed, "on_refuted": on_refuted}
        return check(function, **(rest | {"on_undecided": on_undecided} | options))
    if all(claim is None for claim in claims.values()):
        raise UsageError(
            "check needs at least one claim, gradient=... or jacobian=... (or hessian, jvp, vjp, hvp, "
            "value_and_gradient); none was given, so there is nothing to check"
        )
    if isinstance(pattern, str) and pattern != "detect":
        raise UsageError(f"pattern is {pattern!r}; give a scipy.sparse matrix, a boolean array (m, n), or 'detect'")
    if pattern is not None and jacobian is None:
        raise UsageError("pattern=... says which entries of a Jacobian may differ from zero; it needs jacobian=...")
    rules = Rules.of(rel_tol, abs_tol, witnesses, directions=directions, seed=seed)
    subjects = subjects_of_function(
        function,
        at,
        claims=claims,
        wrt=wrt,
        output=output,
        bounds=bounds,
        names=names,
        typical=typical,
        batched=batched,
        pattern=pattern,
    )
    at_points = []
    cause: BaseException | None = None
    for k, subject in enumerate(subjects):
        session = open_session(subject, budget=budget, time_limit=time_limit)
        at_points.append(checked_claims(session, rules if k < TRIED_MOST else replace(rules, trials=False)))
        cause = cause or session.ledger.claim_error
    by_claim = [merged(reports) if len(reports) > 1 else reports[0] for reports in zip(*at_points, strict=True)]
    return policy.carry_out(combined(by_claim), stacklevel=3, cause=cause)


def _described_options(function: Any) -> dict[str, Any]:
    """Point and options of a decorated model.

    Raises
    ------
    UsageError
        If it is not decorated.
    """
    spec = getattr(function, SPEC_ATTRIBUTE, None)
    if not isinstance(spec, ModelSpec):
        raise UsageError("the point is missing: give at=..., or describe the model with @gradcheck.model(at=...)")
    return {"at": spec.at, **spec.options}


def check_described(
    thing: Any,
    *,
    budget: int | None = None,
    time_limit: float | str | None = None,
    seed: int = 0,
    **overrides: Any,
) -> list[CheckReport]:
    """Reports on all claims of a described `Problem` or of a model decorated with `gradcheck.model`; never raises for
    verdicts.

    Raises
    ------
    UsageError
        If there is nothing to check.
    """
    if isinstance(thing, Problem):
        if not any(
            getattr(f, k, None) is not None for f in (thing.objective, *thing.constraints.values()) for k in CLAIM_KINDS
        ):
            raise UsageError(
                "this Problem claims no derivative: give its Functions gradient=... or jacobian=... (or hessian, jvp, "
                "vjp, hvp, value_and_gradient)"
            )
        rules = Rules.of(
            overrides.pop("rel_tol", None), overrides.pop("abs_tol", 0.0), overrides.pop("witnesses", None)
        )
        if overrides:
            raise UsageError(f"{', '.join(sorted(overrides))} cannot be set for a Problem; its description says it")
        session = open_session(subject_of_problem(thing), budget=budget, time_limit=time_limit)
        return checked_claims(session, rules)
    given = {name: value for name, value in overrides.items() if value is not None}
    options = given if "at" in given and not hasattr(thing, SPEC_ATTRIBUTE) else _described_options(thing) | given
    options |= {
        "on_refuted": "return",
        "on_undecided": "pass",
        "budget": budget,
        "time_limit": time_limit,
        "seed": seed,
    }
    return [check(thing, **options)]
