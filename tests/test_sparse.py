"""The sparse factor against dense algebra."""

import numpy as np
import pytest
from scipy.sparse import csc_matrix, eye_array, random_array, triu
from tolerances import ALGEBRA

from prevmap.engine.sparse import Factorizer
from prevmap.errors import FitError


def example(seed, order=60):
    rng = np.random.default_rng(seed)
    root = random_array((order, order), density=0.06, rng=rng, format="csc")
    matrix = csc_matrix(root @ root.T + 2.0 * eye_array(order))
    upper = csc_matrix(triu(matrix, format="csc"))
    upper.sort_indices()
    return matrix.toarray(), upper


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_factor_equals_dense_algebra(seed, rng):
    dense, upper = example(seed)
    factor = Factorizer(upper)(upper)
    inverse = np.linalg.inv(dense)
    assert factor.log_determinant == pytest.approx(np.linalg.slogdet(dense)[1], rel=ALGEBRA)
    right = rng.normal(size=(60, 5))
    np.testing.assert_allclose(factor.solve(right), inverse @ right, atol=ALGEBRA)
    np.testing.assert_allclose(factor.solve(right[:, 0]), inverse @ right[:, 0], atol=ALGEBRA)
    columns = np.repeat(np.arange(60), np.diff(upper.indptr))
    np.testing.assert_allclose(factor.inverse_on_pattern(), inverse[upper.indices, columns], atol=ALGEBRA)
    root = factor.sample(np.eye(60))
    np.testing.assert_allclose(root @ root.T, inverse, atol=ALGEBRA)
    assert factor.smallest_pivot > 0


def test_the_same_pattern_is_refactorised_with_new_numbers():
    dense, upper = example(4)
    factorize = Factorizer(upper)
    factorize(upper)
    other = upper.copy()
    other.data = upper.data * np.where(
        upper.indices == np.repeat(np.arange(60), np.diff(upper.indptr)), 3.0, 0.5
    )
    full = other.toarray()
    full = full + full.T - np.diag(np.diag(full))
    assert factorize(other).log_determinant == pytest.approx(np.linalg.slogdet(full)[1], rel=ALGEBRA)
    assert factorize(upper).log_determinant == pytest.approx(np.linalg.slogdet(dense)[1], rel=ALGEBRA)


def test_a_matrix_that_is_not_positive_definite_is_refused():
    upper = csc_matrix(np.triu(np.array([[1.0, 2.0], [2.0, 1.0]])))
    factorize = Factorizer(csc_matrix(np.triu(np.array([[3.0, 2.0], [2.0, 3.0]]))))
    with pytest.raises(FitError, match="not positive definite"):
        factorize(upper)
