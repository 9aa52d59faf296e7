"""A claim named "jax" or "autograd" is tried with other cotangents and tangents, under transformations, in second order
and in single precision; the report names what breaks, and says nothing where everything holds.
"""

import re
import warnings

import numpy as np
import pytest

import gradcheck

jax = pytest.importorskip("jax")

import jax.numpy as jnp  # noqa: E402
from jax.custom_batching import custom_vmap  # noqa: E402

POINT = [0.3, 0.7, 1.1]


def report_on(model, at=POINT, **options):
    options = {"gradient": "jax"} | options
    return gradcheck.check(model, at=at, on_refuted="return", on_undecided="pass", **options)


def words(report):
    """The text of a report in one line."""
    return " ".join(str(report).split())


def rule(value, pull):
    function = jax.custom_vjp(value)
    function.defvjp(lambda x: (value(x), x), pull)
    return function


ignoring = rule(jnp.sin, lambda x, cotangent: (jnp.cos(x),))
honest = rule(jnp.sin, lambda x, cotangent: (jnp.cos(x) * cotangent,))


@custom_vmap
def slope(x, c):
    return c * jnp.cos(x)


@slope.def_vmap
def _mean_of_the_batch(axis_size, in_batched, x, c):
    each = c * jnp.cos(x)
    return jnp.broadcast_to(each.mean(axis=0), each.shape), True


mixing = rule(jnp.sin, lambda x, cotangent: (slope(x, cotangent),))


class TestCotangents:
    def test_alone_it_is_right_for_the_cotangent_1_and_that_is_said_in_the_first_line(self):
        with pytest.raises(gradcheck.DerivativeMismatch) as raised:
            gradcheck.check(lambda x: ignoring(x).sum(), at=POINT, gradient="jax")

        report = raised.value.report
        assert report.verdict == "refuted"
        assert [diagnosis.code for diagnosis in report.diagnoses] == ["ignores-cotangent"]
        assert report.diagnoses[0].entries == ("x[0]", "x[1]", "x[2]")
        assert np.abs(report.entries.claim - report.entries.witness).max() < 1e-9
        assert re.match(r"gradient of model refuted: x\[\d\] is right for a cotangent of 1, wrong for", str(report))

    def test_inside_a_larger_model_the_witnesses_refute_it_and_the_mistake_has_the_same_name(self):
        report = report_on(lambda x: 5 * ignoring(x).sum())

        assert report.verdict == "refuted"
        assert [diagnosis.code for diagnosis in report.diagnoses] == ["ignores-cotangent"]
        assert "is claimed" in str(report).splitlines()[0]

    def test_only_the_entries_behind_the_rule_are_refuted(self):
        report = report_on(lambda x: ignoring(x[0]) + (x[1:] ** 2).sum())

        assert [str(verdict) for verdict in report.entries.verdict] == ["refuted", "confirmed", "confirmed"]

    def test_what_becomes_of_the_cotangent_is_told_with_both_numbers(self):
        squaring = rule(jnp.sin, lambda x, cotangent: (jnp.cos(x) * cotangent**2,))

        (diagnosis,) = report_on(lambda x: squaring(x).sum()).diagnoses

        got, due = map(float, re.search(r"([-\d.e]+) where ([-\d.e]+) is due", diagnosis.text).groups())
        cotangent = float(re.search(r"wrong for ([-\d.e]+):", diagnosis.text)[1])
        assert got / due == pytest.approx(cotangent, rel=1e-3)
        assert "power 2" in diagnosis.text

    def test_the_wrong_entries_of_a_jacobian_are_found(self):
        report = report_on(lambda x: jnp.stack([ignoring(x[0]), x[1] * x[2]]), jacobian="jax", gradient=None)

        refuted = [n for n, v in zip(report.entries.name, report.entries.verdict, strict=True) if v == "refuted"]
        assert "ignores-cotangent" in [diagnosis.code for diagnosis in report.diagnoses]
        assert "<lambda>[0] by x[0]" in refuted or "model[0] by x[0]" in refuted


class TestTransformations:
    def test_wrong_under_vmap_is_named_and_refuted(self):
        report = report_on(lambda x: mixing(x).sum())

        assert report.verdict == "refuted"
        assert "wrong under vmap" in str(report).splitlines()[0]
        assert "batching rule" in report.diagnoses[0].text

    def test_wrong_under_jit_is_named_and_told_once_for_all_that_is_traced(self):
        def pull(x, cotangent):
            return (cotangent * jnp.cos(x) * (0.5 if isinstance(x, jax.core.Tracer) else 1.0),)

        traced = rule(jnp.sin, pull)

        (diagnosis,) = report_on(lambda x: traced(x).sum()).diagnoses

        assert "right alone, wrong under jit" in diagnosis.text
        assert "under vmap" in diagnosis.text

    def test_residuals_kept_outside_the_rule_are_found(self):
        kept = {}

        @jax.custom_vjp
        def wave(x):
            return jnp.sin(x)

        def forward(x):
            kept["x"] = x
            return jnp.sin(x), None

        wave.defvjp(forward, lambda residue, cotangent: (cotangent * jnp.cos(kept["x"]),))

        assert "if another point is passed forward" in words(report_on(lambda x: wave(x).sum()))

    def test_a_rule_that_cannot_be_compiled_is_a_remark_and_stays_confirmed(self):
        report = report_on(lambda x: (x**2).sum() if x[0] > 0 else x.sum())

        assert report.verdict == "confirmed"
        (finding,) = report.findings
        assert (finding.code, finding.severity) == ("crash", "remark")
        assert "under jit" in finding.text

    def test_a_rule_without_forward_mode_is_a_remark_and_stays_confirmed(self):
        report = report_on(lambda x: honest(x).sum())

        assert report.verdict == "confirmed"
        assert [(finding.severity, "forward mode" in finding.text) for finding in report.findings] == [("remark", True)]

    def test_where_everything_holds_only_the_number_of_sweeps_is_said(self):
        report = report_on(lambda x: jnp.exp(jnp.sin(x) * 3).sum())

        assert (report.verdict, report.findings, report.diagnoses) == ("confirmed", (), ())
        sweeps = re.search(r"also tried with .*vmap.* single precision: (\d+) sweeps$", report.notices[-1])
        assert int(sweeps[1]) >= 30


class TestSecondOrder:
    def test_a_wrong_second_derivative_is_a_hazard_and_no_wrong_gradient(self):
        wave = jax.custom_jvp(jnp.sin)
        wave.defjvp(lambda at, move: (jnp.sin(*at), jax.lax.stop_gradient(jnp.cos(at[0])) * move[0]))

        report = report_on(lambda x: wave(x).sum())

        assert report.verdict == "confirmed"
        (finding,) = report.findings
        assert (finding.code, finding.severity) == ("witness-conflict", "hazard")
        assert "second derivative" in finding.text
        assert "second derivative" in report.notices[-1]
        assert finding.evidence["by_jax"] == 0
        assert abs(finding.evidence["by_differences"]) > 0.1

    def test_a_rule_that_is_not_differentiable_twice_is_a_remark(self):
        wave = jax.custom_jvp(jnp.sin)

        def cosine(x):
            kind = jax.ShapeDtypeStruct(x.shape, x.dtype)
            return jax.pure_callback(lambda x: np.cos(np.asarray(x)), kind, x, vmap_method="sequential")

        wave.defjvp(lambda at, move: (jnp.sin(*at), cosine(*at) * move[0]))

        report = report_on(lambda x: wave(x).sum())

        assert report.verdict == "confirmed"
        assert [(finding.severity, "second order" in finding.text) for finding in report.findings] == [("remark", True)]


class TestForwardMode:
    def test_a_tangent_that_is_squared_is_refuted_although_unit_tangents_are_right(self):
        wave = jax.custom_jvp(jnp.sin)
        wave.defjvp(lambda at, move: (jnp.sin(*at), jnp.cos(at[0]) * move[0] ** 2))

        report = report_on(lambda x: wave(x).sum())

        assert report.verdict == "refuted"
        assert "power 2 of its tangent" in words(report)

    def test_reverse_mode_that_drops_what_forward_mode_keeps_is_the_wrong_one(self):
        report = report_on(lambda x: ((jnp.asarray(x) ** 2)[jnp.asarray([7])] ** 2).sum())

        assert "right in forward mode, wrong in reverse mode" in words(report)


class TestSinglePrecision:
    def test_an_overflow_of_single_precision_alone_is_told_and_no_setting_is_touched(self):
        filters, errors = list(warnings.filters), np.geterr()

        report = report_on(lambda x: jnp.log(1 + jnp.exp(100 * x)).sum())

        assert report.verdict == "confirmed"
        (finding,) = report.findings
        assert (finding.code, finding.severity) == ("non-finite", "hazard")
        assert "single precision" in finding.text
        assert jnp.asarray(1.0).dtype == jnp.float32
        assert list(warnings.filters) == filters
        assert np.geterr() == errors

    def test_a_user_of_double_precision_is_not_told_about_single(self):
        with jax.enable_x64(True):
            assert report_on(lambda x: jnp.log(1 + jnp.exp(100 * x)).sum()).findings == ()

    def test_a_rule_that_returns_single_precision_has_its_own_name(self):
        short = rule(jnp.sin, lambda x, cotangent: ((jnp.cos(x) * cotangent).astype(jnp.float32),))

        report = report_on(lambda x: short(x).sum())

        assert [diagnosis.code for diagnosis in report.diagnoses] == ["single-precision"]

    def test_where_its_digits_are_enough_that_is_a_hazard_only(self):
        short = rule(jnp.sin, lambda x, cotangent: ((jnp.cos(x) * cotangent).astype(jnp.float32),))

        report = report_on(lambda x: short(x).sum(), rel_tol=1e-5)

        assert report.verdict == "confirmed"
        assert [f.code for f in report.findings if f.severity == "hazard"] == ["low-precision"]


class TestInputs:
    def test_trees_with_whole_numbers_and_text_are_named_by_their_leaves(self):
        def model(p):
            return ignoring(p["layer"]["w"]).sum() * p["k"] + p["b"] ** 2

        at = {"layer": {"w": np.array([[0.3, 0.4], [0.5, 0.6]]), "mode": "fast"}, "b": 0.7, "k": 1}
        report = report_on(model, at)

        assert report.diagnoses[0].code == "ignores-cotangent"
        assert report.diagnoses[0].entries[-1] == 'p["layer"]["w"][1, 1]'

    def test_several_arguments_are_put_under_vmap_one_by_one(self):
        def pairs(x, y):
            if x.shape != y.shape:
                return np.broadcast_to(np.sum(x[:1] * y[:1], axis=-1), np.broadcast_shapes(x.shape, y.shape)[:-1])
            return np.sum(x * y, axis=-1)

        def on_host(x, y):
            kind = jax.ShapeDtypeStruct((), x.dtype)
            call = lambda x, y: pairs(np.asarray(x), np.asarray(y)).astype(kind.dtype)  # noqa: E731
            return jax.pure_callback(call, kind, x, y, vmap_method="expand_dims")

        product = jax.custom_vjp(on_host)
        product.defvjp(lambda x, y: (on_host(x, y), (x, y)), lambda xy, c: (c * xy[1], c * xy[0]))
        at = gradcheck.args(np.array([0.3, 0.7]), np.array([1.1, 0.4]))

        report = report_on(lambda a, b: product(a, b) ** 2, at)

        assert "under vmap over a alone" in words(report)

    def test_a_model_of_many_points_at_once_is_tried_as_well(self):
        report = report_on(lambda x: (x**2).sum(axis=1), batched=True)

        assert (report.verdict, report.findings) == ("confirmed", ())
        assert "sweeps" in report.notices[-1]

    def test_no_point_beyond_the_bounds_is_tried(self):
        seen = []

        def model(x):
            jax.debug.callback(lambda x: seen.append(np.asarray(x)), x)
            return (x**2).sum()

        report_on(model, [0.3, 0.5], bounds=[(0.3, 0.4), (0.1, 0.5)])

        points = np.concatenate([np.atleast_2d(x) for x in seen]).reshape(-1, 2)
        assert (points >= np.array([0.3, 0.1])).all()
        assert (points <= np.array([0.4, 0.5])).all()

    def test_a_rule_of_the_wrong_structure_is_told_in_the_words_of_jax(self):
        wrong = rule(lambda x: jnp.sin(x).sum(), lambda x, cotangent: cotangent * jnp.cos(x))

        with pytest.raises(gradcheck.UsageError, match="structure"):
            report_on(lambda x: wrong(x))

    @pytest.mark.parametrize("budget", [3, 22])
    def test_a_budget_that_ends_early_accuses_nobody(self, budget):
        report = report_on(lambda x: honest(x).sum(), budget=budget)

        assert report.verdict != "refuted"
        assert report.diagnoses == ()


class TestNeighbours:
    def test_a_function_compiled_before_is_not_compiled_again(self):
        compiled = jax.jit(lambda x: jnp.sin(x).sum())
        before = compiled(jnp.asarray(POINT))
        times = compiled._cache_size()

        report_on(lambda x: jnp.cos(x).sum())

        assert compiled(jnp.asarray(POINT)) == before
        assert compiled._cache_size() == times


class TestAudit:
    def test_a_rule_that_ignores_its_cotangent_blocks_an_audit(self):
        report = gradcheck.audit(lambda x: ignoring(x).sum(), at=POINT, gradient="jax", bounds=[(0.1, 1.5)] * 3)

        assert not report.ready
        assert report.claims[0].diagnoses[0].code == "ignores-cotangent"


class TestAutograd:
    @pytest.fixture(autouse=True)
    def library(self):
        pytest.importorskip("autograd")

    @staticmethod
    def wave(use):
        from autograd.extend import defvjp, primitive

        wave = primitive(lambda x: np.sin(x))
        defvjp(wave, lambda value, x: lambda cotangent: use(cotangent) * np.cos(x))
        return wave

    @pytest.mark.parametrize("use", [np.ones_like, np.square, np.abs], ids=["ignored", "squared", "without its sign"])
    def test_a_rule_that_mistreats_its_cotangent_is_named(self, use):
        import autograd.numpy as anp

        wave = self.wave(use)

        report = report_on(lambda x: anp.sum(wave(x)), gradient="autograd")

        assert report.verdict == "refuted"
        assert [diagnosis.code for diagnosis in report.diagnoses] == ["ignores-cotangent"]

    def test_a_wrong_forward_rule_is_named(self):
        import autograd.numpy as anp
        from autograd.extend import defjvp

        wave = self.wave(lambda cotangent: cotangent)
        defjvp(wave, lambda tangent, value, x: 1.1 * tangent * np.cos(x))

        assert "right in reverse mode, wrong in forward mode" in words(
            report_on(lambda x: anp.sum(wave(x)), gradient="autograd")
        )

    def test_a_right_rule_without_a_forward_one_is_silent(self):
        import autograd.numpy as anp

        wave = self.wave(lambda cotangent: cotangent)

        report = report_on(lambda x: anp.exp(anp.sum(wave(x))), gradient="autograd")

        assert (report.verdict, report.findings) == ("confirmed", ())


class TestSeveralPoints:
    def test_only_the_first_points_are_tried_in_full(self):
        points = gradcheck.points(*([0.1 * k, 0.4, 0.9] for k in range(1, 6)))

        report = report_on(lambda x: ignoring(x).sum(), points)

        refuted = {
            name[-1] for name, v in zip(report.entries.name, report.entries.verdict, strict=True) if v == "refuted"
        }
        assert refuted == {"0", "1", "2"}
