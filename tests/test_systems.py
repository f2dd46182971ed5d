"""Many small systems at once, against numpy.linalg one by one."""

from __future__ import annotations

import numpy as np
import pytest

from ingest import systems


@pytest.fixture(params=[1, 2, 7, 19])
def made(request):
    """Forty random symmetric positive definite systems of one size, (K, K, 40), with right-hand sides."""
    rng = np.random.default_rng(request.param)
    root = rng.standard_normal((40, request.param, request.param))
    matrix = root @ root.transpose(0, 2, 1) + 0.1 * np.eye(request.param)
    return matrix.transpose(1, 2, 0).copy(), rng.standard_normal((request.param, 40))


def test_the_solutions_are_those_of_numpy(made):
    matrix, right = made
    lower, sound = systems.factor(matrix)
    expected = np.linalg.solve(matrix.transpose(2, 0, 1), right.T[..., None])[..., 0].T
    np.testing.assert_allclose(systems.solve(lower, right), expected, rtol=1e-8, atol=1e-10)
    assert sound.all()


def test_the_inverses_are_those_of_numpy(made):
    matrix, _ = made
    inverse = systems.invert(systems.factor(matrix)[0])
    expected = np.linalg.inv(matrix.transpose(2, 0, 1)).transpose(1, 2, 0)
    np.testing.assert_allclose(inverse, expected, rtol=1e-7, atol=1e-9)


def test_only_the_lower_triangle_counts_and_nothing_is_changed(made):
    matrix, _ = made
    lower_only = np.tril(matrix.transpose(2, 0, 1)).transpose(1, 2, 0).copy()
    before = lower_only.copy()
    np.testing.assert_array_equal(systems.factor(lower_only)[0], systems.factor(matrix)[0])
    np.testing.assert_array_equal(lower_only, before)


def test_a_singular_system_is_called_unsound_and_the_others_are_not():
    matrix = np.stack([np.eye(2), np.ones((2, 2)), np.diag([1.0, 4.0])], axis=2)
    assert systems.factor(matrix)[1].tolist() == [True, False, True]
