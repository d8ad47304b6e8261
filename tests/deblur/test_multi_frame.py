import numpy as np
import pytest

from enhance.deblur.multi_frame import WINDOW, couple


def dense(own, change, own_weight, change_weight):
    """Solve the normal equations of one pixel with NumPy."""
    n = len(own)
    A, b = np.zeros((n, n)), np.zeros(n)
    for i in range(n):
        A[i, i] += own_weight[i]
        b[i] += own_weight[i] * own[i]
    for i in range(n - 1):
        A[i, i] += change_weight[i]
        A[i + 1, i + 1] += change_weight[i]
        A[i, i + 1] -= change_weight[i]
        A[i + 1, i] -= change_weight[i]
        b[i] -= change_weight[i] * change[i]
        b[i + 1] += change_weight[i] * change[i]
    return A, np.linalg.solve(A, b)


@pytest.mark.parametrize("count", [1, 2, 5, 17])
def test_equals_the_dense_solution(count):
    rng = np.random.default_rng(3)
    own, change = rng.normal(size=(count, 1, 1)), rng.normal(size=(count - 1, 1, 1))
    ow, cw = rng.uniform(0.2, 3, count), rng.uniform(0.2, 3, count - 1)
    _, expected = dense(own.ravel(), change.ravel(), ow, cw)
    for at in range(count):
        assert np.isclose(couple(list(own), list(change), at, list(ow), list(cw))[0, 0], expected[at])


def test_unit_weights_are_the_published_tridiagonal_system():
    # Pan et al., IEEE TPAMI 44(5), 2022: diagonal 2, 3, ..., 3, 2, off-diagonal -1
    A, _ = dense(np.zeros(5), np.zeros(4), np.ones(5), np.ones(4))
    np.testing.assert_array_equal(np.diag(A), [2, 3, 3, 3, 2])
    np.testing.assert_array_equal(np.diag(A, 1), [-1] * 4)
    own = list(np.random.default_rng(4).normal(size=(5, 1, 1)))
    change = list(np.random.default_rng(5).normal(size=(4, 1, 1)))
    b = np.array([o.item() for o in own])
    steps = np.array([c.item() for c in change])
    b[:-1] -= steps
    b[1:] += steps
    assert np.isclose(couple(own, change, 2)[0, 0], np.linalg.solve(A, b)[2])


def test_influence_decays_by_0_382_a_key():
    # The smaller root of z^2 - 3 z + 1
    root = (3 - np.sqrt(5)) / 2
    own = [np.zeros((1, 1)) for _ in range(2 * WINDOW + 1)]
    change = [np.zeros((1, 1))] * (2 * WINDOW)
    influence = []
    for k in range(4):
        own[WINDOW + k] = np.ones((1, 1))
        influence.append(couple(own, change, WINDOW)[0, 0])
        own[WINDOW + k] = np.zeros((1, 1))
    np.testing.assert_allclose(np.divide(influence[1:], influence[:-1]), root, atol=1e-3)
    assert root**WINDOW < 0.0005
