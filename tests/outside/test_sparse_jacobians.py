"""Sparse Jacobians of published problems, and how many groups of columns published shapes need.

T. F. Coleman, J. J. Moré, "Estimation of sparse Jacobian matrices and graph coloring problems", SIAM J. Numer. Anal. 20
(1983) 187-209, and A. R. Curtis, M. J. D. Powell, J. K. Reid, "On the estimation of sparse Jacobian matrices", J. Inst.
Math. Appl. 13 (1974) 117-119: a band of width w needs w groups, and taken in order the columns give them; no fewer
groups than the fullest row has entries ever suffice (from memory). The problems are those of Moré, Garbow & Hillstrom
1981, see ``tests/problem_sets/sparse_systems.py``.
"""

import numpy as np
import pytest
from scipy import sparse

from gradcheck.claims.sparsity import coloured
from tests.outside.asking import CONFIRMED, REFUTED, report_on
from tests.problem_sets.sparse_systems import SPARSE_SYSTEMS

N = 5_000


def each(systems):
    return pytest.mark.parametrize("system", systems, ids=lambda system: system.name)


def groups_of(pattern):
    return coloured(pattern.tocsr(), np.ones(pattern.shape[1], bool)).count


@pytest.mark.parametrize("half", [0, 1, 2, 3, 8])
def test_a_band_of_width_2k_plus_1_needs_as_many_groups(half):
    offsets = range(-half, half + 1)
    band = sparse.diags_array([np.ones(500 - abs(k)) for k in offsets], offsets=offsets)

    assert groups_of(band) == 2 * half + 1


def test_a_lower_triangle_needs_as_many_groups_as_columns():
    assert groups_of(sparse.csr_array(np.tril(np.ones((12, 12))))) == 12


def test_blocks_on_the_diagonal_need_as_many_groups_as_a_block_has_columns():
    assert groups_of(sparse.block_diag([np.ones((4, 3))] * 50)) == 3


def test_a_full_column_needs_a_group_of_its_own():
    arrow = sparse.eye_array(50).tolil()
    arrow[:, 0] = 1

    assert groups_of(arrow) == 2


def test_five_point_grids_need_at_least_five_groups_and_get_no_more_than_eight():
    line = sparse.diags_array([np.ones(29), np.ones(30), np.ones(29)], offsets=[-1, 0, 1])
    one = sparse.eye_array(30)

    assert 5 <= groups_of(sparse.kron(line, one) + sparse.kron(one, line)) <= 8


@each(SPARSE_SYSTEMS)
def test_the_published_jacobian_is_confirmed_entry_by_entry_at_the_start(system):
    x = system.start(N)
    claim = system.jacobian(x)
    report = report_on(system.function, x, jacobian=claim)

    assert report.verdict == CONFIRMED
    assert report.sparsity.confirmed == claim.nnz
    assert report.sparsity.groups == system.groups
    assert report.evaluations <= 8 * system.groups + 60


@each(SPARSE_SYSTEMS)
def test_a_wrong_a_misplaced_and_a_missing_entry_are_told_apart(system):
    x = system.start(N)
    claim = system.jacobian(x).tolil()
    claim[100, 100] *= 0.5
    claim[2_000, 2_009], claim[2_000, 2_000] = claim[2_000, 2_000], 0.0
    claim[4_000, 3_999] = 0.0
    claim = claim.tocsr()
    claim.eliminate_zeros()
    report = report_on(system.function, x, jacobian=claim)

    assert report.verdict == REFUTED
    assert report.sparsity.wrong.tolist() == [[100, 100], [2_000, 2_009]]
    assert report.sparsity.missing.tolist() == [[2_000, 2_000], [4_000, 3_999]]
    assert report.sparsity.misplaced.tolist() == [[2_000, 2_009, 2_000, 2_000]]
    assert report.sparsity.refuted == 4


def test_a_sign_slip_in_every_equation_is_one_story():
    system = SPARSE_SYSTEMS[1]
    x = system.start(N)
    claim = system.jacobian(x)
    claim.setdiag(-claim.diagonal(1), k=1)
    report = report_on(system.function, x, jacobian=claim)

    (repetition,) = report.sparsity.repetitions
    assert (repetition.row_step, repetition.column_step, repetition.count) == (1, 1, N - 1)
    assert [str(diagnosis.code) for diagnosis in report.diagnoses] == ["sign-flipped"]
