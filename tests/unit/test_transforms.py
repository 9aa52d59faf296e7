"""What breaks under a transformation has a name, and what holds under all of them is silent: with sweeps by hand."""

from collections.abc import Callable

import numpy as np
import pytest

from gradcheck.claims.transforms import LARGE, Scaling, trials
from gradcheck.evaluation.conduct import conduct_one
from gradcheck.evaluation.protocol import Reply, Request, Status
from gradcheck.problem.domain import domain_of

N, M = 3, 2
BASE = np.array([0.3, -0.7, 1.1])


def value(x):
    return np.array([np.sin(x[0]) * x[1] + x[2] ** 2, np.exp(x[0] * x[1])])


def jacobian(x):
    inner = np.exp(x[0] * x[1])
    return np.array([[np.cos(x[0]) * x[1], np.sin(x[0]), 2 * x[2]], [inner * x[1], inner * x[0], 0.0]])


def hessian(x, w):
    inner = np.exp(x[0] * x[1])
    first = np.array([[-np.sin(x[0]) * x[1], np.cos(x[0]), 0], [np.cos(x[0]), 0, 0], [0, 0, 2.0]])
    mixed = inner * (1 + x[0] * x[1])
    second = np.array([[inner * x[1] ** 2, mixed, 0], [mixed, inner * x[0] ** 2, 0], [0, 0, 0]])
    return w[0] * first + w[1] * second


def reverse(row):
    return np.concatenate([value(row[:N]), row[N:] @ jacobian(row[:N])])


def forward(row):
    return np.concatenate([value(row[:N]), jacobian(row[:N]) @ row[N:]])


def second(row):
    return hessian(row[:N], row[N:-N]) @ row[-N:]


def plainly(way, rows):
    """What honest sweeps give."""
    if way == "forward":
        return [forward(row) for row in rows]
    if way.startswith("second"):
        return [second(row) for row in rows]
    at_first = [np.concatenate([rows[0, :N], row[N:]]) for row in rows]
    if way == "vmap":
        return [reverse(row) for row in [*rows, *at_first]]
    return [reverse(row) for row in (at_first if way == "vmap cotangents" else rows)]


class Sweeps:
    """A gate that answers honestly, but for the ways given with what becomes of their rows; None raises."""

    def __init__(self, **spoilt: Callable | None) -> None:
        self.spoilt = {name.replace("_", " "): change for name, change in spoilt.items()}
        self.asked: list[str] = []
        self.rows: list[np.ndarray] = []
        self.left = 10**6

    def __call__(self, requests: list[Request]) -> list[Reply]:
        return [self.reply(request) for request in requests]

    def reply(self, request: Request) -> Reply:
        way, rows = request.arithmetic, request.directions
        self.asked.append(way)
        self.rows.append(rows)
        status, self.left = Status.OK if self.left > 0 else Status.REFUSED, self.left - 1
        changes = [change for name, change in self.spoilt.items() if name in way.split(" ") or name == way]
        if None in changes:
            status = Status.CRASH
        found = np.array(plainly(way.removeprefix("jit "), rows))
        for change in changes:
            found = change(found, rows) if change else found
        return Reply(values=found[:, None, :], status=np.full((len(found), 1), status, np.int8), spent=1)


def tried_with(gate, *, claim=None, bounds=None, **options):
    inquiry = trials(
        BASE, jacobian(BASE) if claim is None else claim, value(BASE), domain_of(BASE, bounds=bounds), "jax", **options
    )
    return conduct_one(inquiry, gate)


def doubled(found, rows):
    return 2 * found


def test_what_holds_everywhere_is_silent_and_says_what_was_tried():
    gate = Sweeps()

    tried = tried_with(gate, single=True)

    assert (tried.broken, tried.raised, tried.second, tried.single, tried.complete) == ([], [], None, None, True)
    assert {"reverse", "jit reverse", "jit vmap", "jit scan checkpoint", "jit second", "jit single"} <= set(gate.asked)
    assert tried.sweeps >= 30


def test_without_transformations_only_the_two_modes_are_asked():
    gate = Sweeps()

    tried_with(gate, transforms=False)

    assert set(gate.asked) == {"reverse", "forward"}


@pytest.mark.parametrize(
    ("spoilt", "ways"),
    [
        ("jit", ["jit"]),
        ("vmap", ["vmap points", "vmap cotangents"]),
        ("scan", ["scan"]),
        ("checkpoint", ["checkpoint"]),
        ("forward", ["forward"]),
    ],
)
def test_the_way_that_breaks_is_named(spoilt, ways):
    tried = tried_with(Sweeps(**{spoilt: doubled}))

    assert [broken.way for broken in tried.broken] == ways
    assert all(broken.got == pytest.approx(2 * broken.due) for broken in tried.broken)


def test_what_is_wrong_while_compiled_is_tried_on_without_being_compiled():
    gate = Sweeps(jit=doubled)

    tried_with(gate)

    assert "vmap" in gate.asked
    assert "jit vmap" not in gate.asked


@pytest.mark.parametrize(
    ("rule", "scaling", "power"),
    [
        (np.ones_like, Scaling.CONSTANT, 0.0),
        (np.square, Scaling.POWER, 2.0),
        (np.sign, Scaling.POWER, 0.0),
        (lambda w: np.clip(w, -1, 1), Scaling.OTHER, 1.0),
        (lambda w: w + 0.1, Scaling.OTHER, 1.0),
    ],
    ids=["ignored", "squared", "only its sign", "clipped", "shifted"],
)
def test_a_cotangent_that_is_mistreated_is_told_with_what_becomes_of_it(rule, scaling, power):
    def change(found, rows):
        return np.concatenate([found[:, :M], [rule(row[N:]) @ jacobian(row[:N]) for row in rows]], axis=1)

    tried = tried_with(Sweeps(reverse=change, apart=change))

    (broken,) = tried.broken
    assert (broken.way, broken.scaling) == ("reverse", scaling)
    assert broken.power == pytest.approx(power, abs=0.3)


def test_only_a_backward_pass_that_uses_another_forward_pass_is_told_as_such():
    def last_point(found, rows):
        return np.array([reverse(np.concatenate([rows[-1, :N], row[N:]])) for row in rows])

    gate = Sweeps()
    gate.spoilt = {"reverse": lambda found, rows: last_point(found, rows) if len(rows) == 8 else found}

    assert [broken.way for broken in tried_with(gate).broken] == ["between"]


def test_a_cotangent_of_zero_must_give_exactly_zero():
    def almost(found, rows):
        return np.where((rows[:, N:] == 0).all(axis=1)[:, None], 1e-300, found)

    (broken,) = tried_with(Sweeps(reverse=almost, apart=almost)).broken

    assert (broken.got, broken.due) == (1e-300, 0)


def test_the_wrong_entries_of_a_matrix_are_found_one_by_one():
    def one_entry(found, rows):
        found = found.copy()
        found[:, M + 1] += (np.abs(rows[:, N]) - rows[:, N]) * jacobian(BASE)[0, 1]
        return found

    (broken,) = tried_with(Sweeps(reverse=one_entry, apart=one_entry)).broken

    assert np.argwhere(broken.wrong).tolist() == [[0, 1]]


def test_a_forward_mode_that_the_witnesses_confirm_makes_reverse_mode_the_wrong_one():
    claim = jacobian(BASE)
    claim[0, 1] *= -1

    def wrong(found, rows):
        return np.concatenate([found[:, :M], rows[:, N:] @ claim], axis=1)

    gate = Sweeps(reverse=wrong, apart=wrong)
    tried = tried_with(gate, claim=claim, right=jacobian(BASE), transforms=False)

    assert [(broken.way, np.argwhere(broken.wrong).tolist()) for broken in tried.broken] == [("reverse", [[0, 1]])]


def test_a_claim_and_a_forward_mode_that_agree_are_one_mistake_and_not_two():
    claim = jacobian(BASE)
    claim[0, 1] *= -1

    def change(found, rows):
        return np.concatenate([found[:, :M], rows[:, N:] @ claim], axis=1)

    def push(found, rows):
        return np.concatenate([found[:, :M], rows[:, N:] @ claim.T], axis=1)

    gate = Sweeps(reverse=change, apart=change, forward=push)

    assert tried_with(gate, claim=claim, right=jacobian(BASE), transforms=False).broken == []


def test_a_wrong_second_derivative_is_no_wrong_gradient():
    tried = tried_with(Sweeps(second=lambda found, rows: 0 * found))

    assert tried.broken == []
    assert tried.second.got == 0
    assert abs(tried.second.due) > 1e6 * tried.second.bound


def test_second_derivatives_are_not_looked_at_where_something_else_is_wrong():
    gate = Sweeps(vmap=doubled)

    tried_with(gate)

    assert not any("second" in way for way in gate.asked)


@pytest.mark.parametrize("bad", [np.nan, np.inf])
def test_what_is_not_finite_in_single_precision_is_told(bad):
    def overflows(found, rows):
        return np.where(np.arange(found.shape[1]) == M, bad, found)

    tried = tried_with(Sweeps(single=overflows), single=True)

    assert tried.single.column == 0
    assert not np.isfinite(tried.single.got)


def test_the_rounding_of_single_precision_is_not_told():
    tried = tried_with(Sweeps(single=lambda found, rows: found.astype(np.float32).astype(float)), single=True)

    assert tried.single is None


def test_few_digits_in_single_precision_are_told():
    tried = tried_with(Sweeps(single=lambda found, rows: 1.01 * found), single=True)

    assert tried.single.got == pytest.approx(1.01 * tried.single.due)


def test_a_rule_that_gives_single_precision_is_recognised_where_the_values_are_double():
    def short(found, rows):
        return np.concatenate([found[:, :M], found[:, M:].astype(np.float32)], axis=1)

    tried = tried_with(Sweeps(reverse=short))

    assert tried.short.tolist() == [True, True, True]
    assert tried.broken == []


@pytest.mark.parametrize("spoilt", ["jit", "forward", "vmap", "second"])
def test_what_raises_is_a_restriction_and_no_mistake(spoilt):
    tried = tried_with(Sweeps(**{spoilt: None}))

    assert tried.broken == []
    assert {way.partition(" ")[0] for way in tried.raised} == {spoilt}


def test_noise_of_the_sweeps_is_no_mistake():
    rng = np.random.default_rng(3)
    gate = Sweeps()
    honest = gate.reply

    def noisy(request):
        reply = honest(request)
        shaken = reply.values * (1 + 1e-7 * rng.normal(size=reply.values.shape))
        return Reply(values=shaken, status=reply.status, spent=1)

    gate.reply = noisy

    assert tried_with(gate).broken == []


def test_entries_that_are_not_finite_are_not_compared():
    claim = jacobian(BASE)
    claim[0, 0] = np.nan

    def spoilt(found, rows):
        return np.where(np.arange(found.shape[1]) == M, np.nan, found)

    gate = Sweeps(reverse=spoilt, jit=spoilt, vmap=spoilt, scan=spoilt, apart=spoilt)
    gate.spoilt["forward"] = lambda found, rows: np.where(np.arange(found.shape[1]) == M, np.nan, found)

    assert tried_with(gate, claim=claim).broken == []


def test_an_overflow_with_a_large_cotangent_is_not_held_against_the_rule():
    def overflows(found, rows):
        large = np.abs(rows[:, N:]).max(axis=1, keepdims=True) > 100
        return np.where(large, np.inf, found)

    assert tried_with(Sweeps(reverse=overflows, apart=overflows)).broken == []


def test_no_point_leaves_the_bounds_and_variables_of_whole_numbers_stay():
    gate = Sweeps()
    bounds = [(0.3, 0.31), (-0.7, -0.7), (1.0, 1.1)]

    tried_with(gate, bounds=bounds, single=True)

    points = np.vstack([rows[:, :N] for rows in gate.rows])
    assert (points >= np.array(bounds)[:, 0]).all()
    assert (points <= np.array(bounds)[:, 1]).all()


@pytest.mark.parametrize("left", range(12))
def test_a_budget_that_ends_leaves_no_accusation(left):
    gate = Sweeps()
    gate.left = left

    tried = tried_with(gate, single=True)

    assert (tried.broken, tried.raised, tried.complete) == ([], [], False)


def test_many_variables_get_few_sweeps_and_no_batches():
    asked = []

    def gate(requests):
        replies = []
        for request in requests:
            way, rows = request.arithmetic, request.directions
            asked.append((way, len(rows)))
            points, others = rows[:, :LARGE], rows[:, LARGE:]
            slopes = others * 2 * points if others.shape[1] == 1 else (2 * points * others).sum(axis=1, keepdims=True)
            found = np.concatenate([(points**2).sum(axis=1, keepdims=True), slopes], axis=1)
            status = np.zeros((len(rows), 1), np.int8)
            replies.append(Reply(values=found[:, None, :], status=status, spent=1))
        return replies

    x = np.linspace(0.5, 1.5, LARGE)
    inquiry = trials(x, 2 * x[None], np.array([(x**2).sum()]), domain_of(x), "jax", single=True)
    tried = conduct_one(inquiry, gate)

    assert tried.broken == []
    assert sum(rows for _, rows in asked) <= 8
    assert not any("vmap" in way or "second" in way for way, _ in asked)


def test_the_same_seed_asks_the_same():
    first, again, other = Sweeps(), Sweeps(), Sweeps()

    tried_with(first)
    tried_with(again)
    tried_with(other, seed=1)

    assert all(np.array_equal(a, b) for a, b in zip(first.rows, again.rows, strict=True))
    assert not np.array_equal(first.rows[0], other.rows[0])
