"""`gradcheck.audit`: what it finds, what it leaves alone, and what it says about itself."""

import functools
import json
import math
import zlib
from collections import Counter
from dataclasses import dataclass, field

import numpy as np
import pytest
from scipy.interpolate import CubicSpline

import gradcheck
from gradcheck import Function, Output, Problem, Severity, UsageError, Variable, Verdict

SIN, COS = math.sin, math.cos


def codes(report):
    return {str(finding.code) for finding in report.findings}


def of(report, code):
    """The findings of one code."""
    return [finding for finding in report.findings if finding.code == code]


# --- one model that shows a finding, and a look-alike that does not --------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class Pair:
    """Two models of x (n,) within bounds: `shows` has the finding, `like` only looks like it."""

    shows: object
    like: object
    at: list = field(default_factory=lambda: [0.7])
    bounds: list = field(default_factory=lambda: [(0.0, 2.0)])
    options: dict = field(default_factory=dict)
    like_options: dict = field(default_factory=dict)


def hashed(x):
    """A number in [-1/2, 1/2] that is the same at the same x and else like random."""
    return zlib.crc32(np.float64(x).tobytes()) / 2**32 - 0.5


def restless():
    random = np.random.default_rng(5)
    return lambda x: SIN(x[0]) + 1e-9 * random.standard_normal()


def with_a_warm_start():
    """An inner iteration that goes on from the result of the call before."""
    state = [0.0]

    def model(x):
        state[0] = (state[0] + 1e-3 * x[0]) / (1 + 1e-3)
        return SIN(x[0]) + 1e-3 * state[0]

    return model


def with_a_memory():
    """State between calls that changes no value."""
    known = {}

    def model(x):
        return known.setdefault(float(x[0]), SIN(x[0]))

    return model


def writes(x):
    value = SIN(x[0])
    x[0] = 0.0
    return value


def writes_into_a_copy(x):
    x = np.array(x)
    x[0] += 1.0
    return SIN(x[0] - 1.0)


def raises_beyond(x):
    if x[0] > 1.8:
        raise ValueError("no steady state")
    return SIN(x[0])


def catches_its_own(x):
    try:
        return raises_beyond(x)
    except ValueError:
        return SIN(x[0])


PAIRS = {
    "claim-refuted": Pair(
        shows=lambda x: SIN(x[0]),
        like=lambda x: SIN(x[0]),
        options={"gradient": lambda x: [-COS(x[0])]},
        like_options={"gradient": lambda x: [COS(x[0])]},
    ),
    "claim-undecided": Pair(
        shows=lambda x: SIN(x[0]) + 1e-6 * hashed(x[0]),
        like=lambda x: SIN(x[0]) + 1e-15 * hashed(x[0]),
        options={"gradient": lambda x: [COS(x[0])]},
        like_options={"gradient": lambda x: [COS(x[0])]},
    ),
    "kink": Pair(
        shows=lambda x: SIN(x[0]) + 0.5 * abs(x[0] - 1.3),
        like=lambda x: SIN(x[0]) + 0.5 * math.sqrt((x[0] - 1.3) ** 2 + 1e-6),
    ),
    "jump": Pair(
        shows=lambda x: SIN(x[0]) + (0.1 if x[0] > 1.3 else 0.0),
        like=lambda x: SIN(x[0]) + 0.1 * math.tanh(400.0 * (x[0] - 1.3)),
    ),
    "staircase": Pair(
        shows=lambda x: math.floor(20.0 * x[0]) / 20.0,
        like=lambda x: x[0] + SIN(40.0 * math.pi * x[0]) / (40.0 * math.pi),
    ),
    "curvature-break": Pair(
        shows=lambda x: SIN(x[0]) + max(x[0] - 1.3, 0.0) ** 2,
        like=lambda x: SIN(x[0]) + max(x[0] - 1.3, 0.0) ** 5,
    ),
    "noise": Pair(
        shows=lambda x: SIN(x[0]) + 1e-8 * hashed(x[0]),
        like=lambda x: 1e12 + SIN(x[0]),
    ),
    "low-precision": Pair(
        shows=lambda x: float(np.float32(SIN(np.float32(x[0])))),
        like=lambda x: 1e7 + SIN(x[0]),
    ),
    "coarse-output": Pair(
        shows=lambda x: float(f"{5.0 + SIN(x[0]):.5e}"),
        like=lambda x: 0.25 * x[0] + 3.0,
    ),
    "unrepeatable": Pair(shows=restless(), like=lambda x: SIN(x[0]) + 1e-9 * hashed(x[0])),
    "non-finite": Pair(
        shows=lambda x: float(np.log(np.float64(x[0]) - 0.3)),
        like=lambda x: float(np.log(np.float64(x[0]) + 0.01)),
    ),
    "crash": Pair(shows=raises_beyond, like=catches_its_own),
    "dead-variable": Pair(
        shows=lambda x: SIN(x[0]),
        like=lambda x: SIN(x[0]) + max(x[1] - 1.9, 0.0) ** 4,
        at=[0.7, 1.0],
        bounds=[(0.0, 2.0), (0.0, 2.0)],
    ),
    "scale-spread": Pair(
        shows=lambda x: SIN(1e6 * x[0]) + SIN(1e-3 * x[1]),
        like=lambda x: SIN(3.0 * x[0]) + SIN(0.5 * x[1]),
        at=[0.7e-6, 1e3],
        bounds=[(0.5e-6, 0.9e-6), (5e2, 1.5e3)],
    ),
    "integer-arithmetic": Pair(
        shows=lambda x: int(100.0 * SIN(x[0])),
        like=lambda x: float(np.float64(100.0)) * SIN(x[0]),
    ),
    "mutates-input": Pair(
        shows=writes,
        like=writes_into_a_copy,
        options={"gradient": lambda x: [COS(x[0])]},
        like_options={"gradient": lambda x: [COS(x[0])]},
    ),
    "complex-unsafe": Pair(shows=lambda x: np.abs(x[0]) ** 2, like=lambda x: x[0] ** 2),
}


@functools.cache
def report_on(code, which):
    pair = PAIRS[code]
    options = pair.options if which == "shows" else pair.like_options
    return gradcheck.audit(getattr(pair, which), at=pair.at, bounds=pair.bounds, **options)


@pytest.mark.parametrize("code", PAIRS)
def test_the_finding_is_made_where_it_is_shown(code):
    assert code in codes(report_on(code, "shows"))


@pytest.mark.parametrize("code", PAIRS)
def test_the_finding_is_not_made_of_a_look_alike(code):
    assert code not in codes(report_on(code, "like"))


@pytest.mark.parametrize("code", PAIRS)
def test_every_finding_says_what_where_and_what_to_do(code):
    for finding in of(report_on(code, "shows"), code):
        assert len(finding.text) > 20
        assert finding.remedy.endswith(".")
        assert finding.where.point.shape == (len(PAIRS[code].at),)
        assert finding.code in str(report_on(code, "shows"))


ROUGH = {"kink", "jump", "staircase", "curvature-break", "noise", "low-precision", "coarse-output", "unrepeatable"}
TABLE = np.linspace(0.0, 2.0, 6), np.cos(np.linspace(0.0, 2.0, 6))
SPLINE = CubicSpline(*TABLE)


@pytest.mark.parametrize(
    "model",
    [
        lambda x: math.tanh(400.0 * (x[0] - 1.1)),
        lambda x: math.sqrt((x[0] - 1.1) ** 2 + 1e-8),
        lambda x: SIN(300.0 * x[0]),
        lambda x: float(SPLINE(x[0])),
        lambda x: 1e12 + SIN(x[0]),
        lambda x: 1.0 / (1e-3 + (x[0] - 1.1) ** 2),
        lambda x: math.exp(-20.0 * x[0]),
        lambda x: (x[0] - 1.0) ** 7,
    ],
    ids=["steep step", "rounded kink", "fast wave", "spline", "large offset", "peak", "boundary layer", "flat power"],
)
def test_a_smooth_model_that_looks_rough_is_not_called_rough(model):
    assert codes(gradcheck.audit(model, at=[0.7], bounds=[(0.0, 2.0)])).isdisjoint(ROUGH)


@pytest.mark.parametrize(
    ("model", "expected"),
    [
        (lambda x: SIN(x[0]) + 1e-3 * abs(x[0] - 1.1), "kink"),
        (lambda x: SIN(x[0]) + (1e-4 if x[0] > 1.1 else 0.0), "jump"),
        (lambda x: float(np.interp(x[0], *TABLE)), "kink"),
    ],
    ids=["small kink", "small jump", "table"],
)
def test_a_rough_model_that_looks_smooth_is_called_rough(model, expected):
    assert expected in codes(gradcheck.audit(model, at=[0.7], bounds=[(0.0, 2.0)]))


@pytest.mark.parametrize("code", ["kink", "jump", "curvature-break"])
def test_a_break_is_bracketed_where_it_is(code):
    found = of(report_on(code, "shows"), code)

    assert any(
        f.where.lower - 1e-5 <= 1.3 <= f.where.upper + 1e-5 and f.where.upper - f.where.lower < 1e-3 for f in found
    )


def test_the_slopes_on_both_sides_of_a_kink_are_told():
    (kink,) = of(report_on("kink", "shows"), "kink")

    assert kink.evidence["left_slope"] == pytest.approx(COS(1.3) - 0.5, rel=1e-3)
    assert kink.evidence["right_slope"] == pytest.approx(COS(1.3) + 0.5, rel=1e-3)


def test_the_height_of_a_jump_is_told():
    (jump,) = of(report_on("jump", "shows"), "jump")

    assert jump.evidence["height"] == pytest.approx(0.1, rel=1e-3)


def test_the_size_of_the_noise_is_told():
    (noise,) = of(report_on("noise", "shows"), "noise")

    assert noise.evidence["size"] == pytest.approx(1e-8 / math.sqrt(12), rel=1.0)


def test_a_model_with_deterministic_noise_is_noisy_and_not_unrepeatable():
    assert codes(report_on("noise", "shows")).isdisjoint({"unrepeatable", "jump", "kink"})


@pytest.mark.parametrize("code", ["claim-refuted", "unrepeatable"])
def test_what_wastes_a_run_is_a_blocker(code):
    report = report_on(code, "shows")

    assert {f.severity for f in of(report, code)} == {Severity.BLOCKER}
    assert not report.ready


def test_a_state_that_survives_between_calls_is_found():
    report = gradcheck.audit(with_a_warm_start(), at=[0.7], bounds=[(0.0, 2.0)])

    (finding,) = of(report, "unrepeatable")
    assert finding.evidence["after_others"] > 0


def test_a_state_that_changes_no_value_is_no_finding():
    assert "unrepeatable" not in codes(gradcheck.audit(with_a_memory(), at=[0.7], bounds=[(0.0, 2.0)]))


def test_a_model_without_claims_that_writes_into_its_input_is_told_too():
    assert "mutates-input" in codes(gradcheck.audit(writes, at=[0.7], bounds=[(0.0, 2.0)]))


def test_a_smooth_model_has_no_finding_and_is_ready():
    report = gradcheck.audit(
        lambda x: np.exp(x[0]) * x[1],
        at=[0.3, 1.2],
        bounds=[(0, 1), (0, 2)],
        gradient=lambda x: np.exp(x[0]) * np.array([x[1], 1]),
    )

    assert report.findings == ()
    assert report.ready
    assert report.complete
    assert report.evaluable


def test_a_variable_at_its_optimum_is_not_called_dead():
    report = gradcheck.audit(lambda x: x[0] + (x[1] - 1.0) ** 2, at=[0.7, 1.0], bounds=[(0.0, 2.0), (0.0, 2.0)])

    assert "dead-variable" not in codes(report)


def test_a_dead_variable_is_named():
    (finding,) = of(report_on("dead-variable", "shows"), "dead-variable")

    assert finding.variable == "x[1]"


def test_a_variable_that_moves_only_a_constraint_is_not_dead():
    problem = Problem(
        variables=[Variable("a", 0.7, lower=0, upper=2), Variable("b", 1.0, lower=0, upper=2)],
        objective=lambda x: SIN(x[0]),
        constraints={"limit": Function(lambda x: x[1] ** 2, upper=3.0)},
    )

    assert "dead-variable" not in codes(gradcheck.audit(problem))


def test_a_whole_number_variable_is_told_and_its_entries_are_not_judged():
    def problem(integer):
        return Problem(
            variables=[
                Variable("span", 0.7, lower=0, upper=2),
                Variable("plies", 4, lower=1, upper=9, integer=integer),
            ],
            objective=Function(lambda x: SIN(x[0]) * x[1], gradient=lambda x: [COS(x[0]) * x[1], 77.0]),
        )

    whole, real = gradcheck.audit(problem(integer=True)), gradcheck.audit(problem(integer=False))

    assert [f.variable for f in of(whole, "integer-variable")] == ["plies"]
    assert of(real, "integer-variable") == []
    assert whole.claims[0].entries.name == ("span",)
    assert (whole.claims[0].verdict, real.claims[0].verdict) == (Verdict.CONFIRMED, Verdict.REFUTED)


def test_findings_stand_worst_first():
    def model(x):
        return SIN(x[0]) + 0.5 * abs(x[0] - 1.3)

    report = gradcheck.audit(model, at=[0.7], bounds=[(0.0, 2.0)], gradient=[3.0])
    ranks = [list(Severity).index(finding.severity) for finding in report.findings]

    assert len(ranks) >= 2
    assert ranks == sorted(ranks)


# --- a start that fails ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("model", "code"), [(lambda x: math.nan, "non-finite"), (lambda x: 1 / 0, "crash")], ids=["NaN", "raises"]
)
def test_a_model_that_fails_at_its_start_point_is_one_blocker_and_nothing_else(model, code):
    report = gradcheck.audit(model, at=[0.7], gradient=[1.0])

    assert not report.evaluable
    assert not report.ready
    assert [(str(f.code), f.severity) for f in report.findings] == [(code, Severity.BLOCKER)]
    assert report.claims == report.witnesses == report.steps == ()


def test_the_last_words_of_a_failing_model_are_told():
    def model(x):
        raise RuntimeError("the mesh collapsed")

    assert "the mesh collapsed" in str(gradcheck.audit(model, at=[0.7]))


# --- budget ----------------------------------------------------------------------------------------------------------


class Counted:
    """A model that keeps every point it is called at."""

    def __init__(self, function=lambda x: SIN(x[0]) * x[1]):
        self.function = function
        self.points = []

    def __call__(self, x):
        self.points.append(tuple(x.tolist()))
        return self.function(x)

    @property
    def calls(self):
        return len(self.points)


BOX = {"at": [0.7, 1.2], "bounds": [(0.0, 2.0), (0.5, 3.0)]}


@pytest.mark.parametrize("budget", [1, 7, 20, 60])
def test_the_budget_is_never_exceeded_and_what_is_missing_is_told(budget):
    model = Counted()
    report = gradcheck.audit(model, **BOX, gradient=lambda x: [COS(x[0]) * x[1], SIN(x[0])], budget=budget)

    assert model.calls <= budget
    assert not report.complete
    assert "budget" in report.not_looked_at[0]
    assert report.not_looked_at[0] in " ".join(str(report).split())


def test_a_budget_that_is_large_enough_leaves_nothing_out():
    report = gradcheck.audit(Counted(), **BOX, budget=5000)

    assert report.complete
    assert report.not_looked_at == ()


def test_a_claim_that_the_budget_left_undecided_is_not_ready():
    report = gradcheck.audit(Counted(), **BOX, gradient=lambda x: [COS(x[0]) * x[1], SIN(x[0])], budget=5)

    assert report.claims[0].verdict == Verdict.UNDECIDED
    assert not report.ready


def test_every_call_of_the_model_is_told():
    model = Counted()
    report = gradcheck.audit(model, **BOX, gradient=lambda x: [COS(x[0]) * x[1], SIN(x[0])])

    assert report.evaluations == model.calls


def test_the_model_is_never_called_outside_its_bounds():
    model = Counted()
    gradcheck.audit(model, at=[0.0, 3.0], bounds=BOX["bounds"], gradient=[1.0, 2.0], samples=3)

    real = np.real(model.points)
    low, high = real.min(axis=0), real.max(axis=0)
    assert np.all(low >= [0.0, 0.5])
    assert np.all(high <= [2.0, 3.0])


# --- one run that gives all outputs ----------------------------------------------------------------------------------


def one_run(run, **options):
    return Problem(
        variables=[Variable("span", 0.7, lower=0.0, upper=2.0), Variable("load", 1.2, lower=0.5, upper=3.0)],
        model=run,
        objective=Output("cost", gradient=lambda x: [COS(x[0]) * x[1], SIN(x[0])]),
        constraints={
            "stress": Output("stress", jacobian=lambda x: [[1.0, 2 * x[1]], [0.0, 1.0]], upper=[5.0, 2.0]),
            "mass": Output("mass", upper=9.0),
        },
        **options,
    )


def outputs(x):
    return {"cost": SIN(x[0]) * x[1], "stress": np.array([x[0] + x[1] ** 2, x[1]]), "mass": math.exp(x[0])}


def test_the_outputs_of_one_run_are_each_checked():
    report = gradcheck.audit(one_run(outputs))

    assert [(claim.function, str(claim.verdict)) for claim in report.claims] == [
        ("objective", "confirmed"),
        ("stress", "confirmed"),
    ]
    assert {record.function for record in report.witnesses} == {"objective", "stress", "mass"}


def test_one_run_is_evaluated_once_a_point_whatever_asks():
    """Only the questions about repeatability repeat: the start point, and points of each line."""
    run = Counted(outputs)
    report = gradcheck.audit(one_run(run))
    times = Counter(run.points)

    start = times.pop((0.7, 1.2))
    assert report.evaluations == run.calls
    assert start <= 1 + 2 * 3
    assert sum(count - 1 for count in times.values()) <= 3 * (2 + 2 * 2)
    assert sum(count == 1 for count in times.values()) >= 0.9 * len(times)


def test_three_outputs_of_one_run_cost_less_than_three_functions():
    run = Counted(outputs)
    gradcheck.audit(one_run(run))
    apart = [Counted(lambda x, key=key: outputs(x)[key]) for key in ("cost", "stress", "mass")]
    gradcheck.audit(
        Problem(
            variables=one_run(run).variables,
            objective=Function(apart[0], gradient=lambda x: [COS(x[0]) * x[1], SIN(x[0])]),
            constraints={
                "stress": Function(apart[1], jacobian=lambda x: [[1.0, 2 * x[1]], [0.0, 1.0]]),
                "mass": Function(apart[2]),
            },
        )
    )

    assert run.calls < 0.7 * sum(each.calls for each in apart)


def test_an_output_that_the_run_does_not_give_is_told_with_its_name():
    problem = Problem(
        variables=[Variable("span", 0.7)], model=lambda x: {"cost": x[0]}, objective=Output("price"), constraints={}
    )
    report = gradcheck.audit(problem)

    assert not report.evaluable
    assert "price" in report.findings[0].text


def test_a_run_may_give_its_outputs_by_place():
    problem = Problem(
        variables=[Variable("span", 0.7, lower=0, upper=2)],
        model=lambda x: (SIN(x[0]), x[0] ** 2),
        objective=Output(0, gradient=lambda x: [COS(x[0])]),
        constraints={"limit": Output(1, jacobian=lambda x: [2 * x[0]])},
    )

    assert {str(claim.verdict) for claim in gradcheck.audit(problem).claims} == {"confirmed"}


# --- more points -----------------------------------------------------------------------------------------------------


def only_left_of_one(x):
    """A gradient that is right for x < 1."""
    return [COS(x[0]) if x[0] < 1 else 0.9 * COS(x[0])]


def test_samples_are_checked_within_the_bounds():
    report = gradcheck.audit(lambda x: SIN(x[0]), at=[0.7], bounds=[(0.0, 0.9)], gradient=only_left_of_one, samples=5)

    assert len(report.claims) == 6
    assert all(0.0 <= claim.point[0] <= 0.9 for claim in report.claims)
    assert len({claim.point[0] for claim in report.claims}) == 6


def test_a_claim_that_is_wrong_elsewhere_only_is_found_by_samples():
    options = {"at": [0.7], "bounds": [(0.0, 2.0)], "gradient": only_left_of_one}

    assert gradcheck.audit(lambda x: SIN(x[0]), **options).ready
    assert not gradcheck.audit(lambda x: SIN(x[0]), **options, samples=8).ready


def test_the_seed_chooses_the_samples():
    def points(seed):
        report = gradcheck.audit(lambda x: SIN(x[0]), at=[0.7], bounds=[(0, 2)], gradient=[1.0], samples=2, seed=seed)
        return [claim.point.tolist() for claim in report.claims]

    assert points(1) == points(1)
    assert points(1) != points(2)


@pytest.mark.parametrize("points", [[[1.5]], np.array([[1.5]]), gradcheck.points([1.5])])
def test_given_points_are_checked(points):
    report = gradcheck.audit(lambda x: SIN(x[0]), at=[0.7], gradient=only_left_of_one, points=points)

    assert [str(claim.verdict) for claim in report.claims] == ["confirmed", "refuted"]
    assert report.claims[1].point.tolist() == [1.5]


def test_a_point_where_the_model_fails_does_not_end_the_audit():
    report = gradcheck.audit(raises_beyond, at=[0.7], gradient=lambda x: [COS(x[0])], points=[[1.9], [1.0]])

    assert report.evaluable
    assert [str(claim.verdict) for claim in report.claims] == ["confirmed", "confirmed"]
    assert any("no steady state" in f.text for f in of(report, "crash"))


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"points": [[1.0, 2.0]]}, "point 0 of points has 2 entries"),
        ({"points": [[math.nan]]}, "0 of them finite"),
        ({"points": [[5.0]]}, "point 0 of points lies outside the bounds"),
        ({"samples": -1}, "samples is -1"),
        ({"samples": 1.5}, "samples is 1.5"),
        ({"samples": "many"}, "samples is 'many'; give a whole number >= 0"),
        ({"samples": math.nan}, "samples is nan"),
        ({"seed": -1}, "seed is -1; give a whole number >= 0"),
        ({"seed": "a"}, "seed is 'a'"),
        ({"seed": 1.5}, "seed is 1.5"),
        ({"points": "iterates"}, "points is 'iterates'; give a list of points"),
        ({"points": [["a", "b"]]}, "point 0 of points is .*; an array of real numbers is needed"),
        ({"budget": 0}, "budget is 0"),
        ({"time_limit": "soon"}, "time_limit is 'soon'"),
        ({"at": None}, "the point is missing"),
        ({"bounds": [(1.0, 2.0)]}, "outside its bounds"),
        ({"gradient": "calculus"}, "names no derivative source"),
    ],
)
def test_what_makes_no_sense_is_refused(options, words):
    with pytest.raises(UsageError, match=words):
        gradcheck.audit(lambda x: SIN(x[0]), **({"at": [0.7], "bounds": [(0.0, 2.0)]} | options))


def test_a_problem_brings_its_own_options():
    with pytest.raises(UsageError, match="at cannot be given with a Problem; its description says it"):
        gradcheck.audit(one_run(outputs), at=[0.7, 1.2])


# --- findings accepted knowingly -------------------------------------------------------------------------------------


KINKED = {"at": [0.7], "bounds": [(0.0, 2.0)]}


def kinked(x):
    return SIN(x[0]) + 0.5 * abs(x[0] - 1.3)


@pytest.mark.parametrize("key", ["kink", "kink:kinked", "kink:kinked:x[0]"])
def test_an_accepted_finding_leaves_the_list_and_its_reason_is_shown(key):
    report = gradcheck.audit(kinked, **KINKED, accept={key: "a known regime change"})

    assert "kink" not in codes(report)
    assert [(a["code"], a["reason"]) for a in report.accepted] == [("kink", "a known regime change")]
    assert "a known regime change" in str(report)


@pytest.mark.parametrize("key", ["kink:other", "kink:kinked:x[1]", "jump"])
def test_what_was_accepted_elsewhere_stays(key):
    report = gradcheck.audit(kinked, **KINKED, accept={key: "a known regime change"})

    assert "kink" in codes(report)
    assert report.accepted == ()


def test_an_accepted_blocker_blocks_no_more():
    restless_model = restless()
    options = {"at": [0.7], "bounds": [(0.0, 2.0)], "accept": {"unrepeatable": "Monte Carlo, averaged by the solver"}}

    assert "unrepeatable" not in codes(gradcheck.audit(restless_model, **options))


@pytest.mark.parametrize(
    ("accept", "words"),
    [
        ({"ugly": "so what"}, "accept names 'ugly', which is no finding"),
        ({"claim-refuted": "I know better"}, "a refuted claim cannot be accepted"),
        ({"kink": "  "}, r"accept\['kink'\] has no reason"),
    ],
)
def test_not_everything_can_be_accepted(accept, words):
    with pytest.raises(UsageError, match=words):
        gradcheck.audit(kinked, **KINKED, accept=accept)


def test_a_wrong_key_of_accept_is_told_before_the_model_is_called():
    model = Counted(kinked)

    with pytest.raises(UsageError):
        gradcheck.audit(model, **KINKED, accept={"ugly": "so what"})
    assert model.calls == 0


# --- the report ------------------------------------------------------------------------------------------------------


@functools.cache
def whole_report():
    return gradcheck.audit(one_run(outputs, name="beam"))


def test_every_function_has_its_steps_for_every_variable():
    steps = whole_report().steps

    assert [each.function for each in steps] == ["objective", "stress", "mass"]
    assert all(each.names == ("span", "load") for each in steps)
    assert all(np.all(each.forward > 0) and np.all(each.central >= each.forward) for each in steps)


def test_the_steps_leave_about_the_error_that_is_told():
    (steps,) = gradcheck.audit(lambda x: math.exp(x[0]), at=[0.7], bounds=[(0.0, 2.0)]).steps
    h, k = steps.forward[0], steps.central[0]

    forward = abs((math.exp(0.7 + h) - math.exp(0.7)) / h - math.exp(0.7))
    central = abs((math.exp(0.7 + k) - math.exp(0.7 - k)) / (2 * k) - math.exp(0.7))
    assert forward <= 10 * steps.forward_error[0] < 1e-6
    assert central <= 10 * steps.central_error[0] < 1e-8


def test_the_sources_that_work_are_told_with_bound_and_cost():
    records = {r.source: r for r in gradcheck.audit(lambda x: x[0] ** 3, at=[0.7], bounds=[(0.0, 2.0)]).witnesses}

    for source in ("finite difference", "complex step"):
        assert records[source].works
        assert records[source].bound < 1e-10
        assert records[source].evaluations > 0


def test_the_advice_for_a_smooth_model_with_a_confirmed_gradient_is_a_gradient_method():
    advice = whole_report().advice

    assert advice.family == "gradient-based"
    assert advice.reasons


def test_the_advice_for_an_unrepeatable_or_stepped_model_is_not_a_gradient_method():
    assert report_on("staircase", "shows").advice.family == "gradient-free"


def test_the_settings_of_the_run_are_told():
    environment = whole_report().environment

    assert environment["seed"] == 0
    assert environment["numpy"] == np.__version__


def test_two_audits_with_the_same_seed_find_the_same():
    def told(seed):
        report = gradcheck.audit(kinked, **KINKED, gradient=[3.0], samples=2, seed=seed).to_dict()
        return json.dumps([report["findings"], [claim["entries"] for claim in report["claims"]]])

    assert told(3) == told(3)


def test_the_report_is_made_of_plain_things_on_request():
    told = json.loads(json.dumps(whole_report().to_dict(), allow_nan=False))

    assert (told["format"], told["version"], told["name"]) == ("gradcheck-audit", 1, "beam")


def test_progress_is_told_line_by_line():
    lines = []
    gradcheck.audit(lambda x: SIN(x[0]), at=[0.7], bounds=[(0.0, 2.0)], progress=lines.append)

    assert len(lines) >= 3
    assert all(isinstance(line, str) and "\n" not in line for line in lines)


def test_nothing_is_printed(capsys):
    gradcheck.audit(lambda x: SIN(x[0]), at=[0.7], bounds=[(0.0, 2.0)])

    assert capsys.readouterr() == ("", "")


def test_a_described_model_brings_its_point_and_its_claim():
    described = gradcheck.model(at=[0.7], bounds=[(0.0, 2.0)], gradient=lambda x: [COS(x[0])])(lambda x: SIN(x[0]))

    assert gradcheck.audit(described).claims[0].verdict == Verdict.CONFIRMED
