"""s-vectors: published values, optimality conditions, general-purpose solvers, validity."""

from __future__ import annotations

import time

import numpy as np
import pytest

from sparsesel.engine.reference import reference_s_vector
from sparsesel.knockoffs import (
    S_VECTOR_METHODS,
    LowRankCovariance,
    SVectorStatus,
    block_diagonal_s_vector,
    s_vector,
    solve_s_vector,
)
from sparsesel.tasks import spawn


def equicorrelated(size, correlation):
    return np.full((size, size), correlation) + (1.0 - correlation) * np.eye(size)


def autoregressive(size, correlation):
    return correlation ** np.abs(np.subtract.outer(np.arange(size), np.arange(size)))


def to_correlation(covariance):
    scale = 1.0 / np.sqrt(np.diag(covariance))
    return covariance * scale * scale[:, None]


def sample_correlation(generator, size, n_rows):
    return np.corrcoef(generator.standard_normal((n_rows, size)), rowvar=False)


def rotated_spectrum(generator, size, smallest=0.01, largest=9.0):
    """Eigenvalues spread over decades, eigenvectors at random: most s_j of the SDP are 0."""
    basis = np.linalg.qr(generator.standard_normal((size, size)))[0]
    return to_correlation((basis * np.geomspace(smallest, largest, size)) @ basis.T)


def factor_model(generator, size, rank, smallest=0.2, largest=2.0):
    return LowRankCovariance(
        generator.uniform(smallest, largest, size), generator.standard_normal((size, rank))
    )


def shrunk(generator, n_features, n_rows, weight):
    """(1 - weight) X'X / n + weight I with fewer rows than columns."""
    table = generator.standard_normal((n_rows, n_features))
    table += generator.standard_normal((n_rows, 3)) @ generator.standard_normal((3, n_features))
    table = (table - table.mean(0)) / table.std(0)
    return LowRankCovariance(
        np.full(n_features, weight), np.sqrt((1.0 - weight) / n_rows) * table.T
    )


def objective(correlation, s, method):
    """The two smooth objectives, as printed in Spector and Janson 2022 (from memory)."""
    slack = 2.0 * correlation - np.diag(s)
    if method == "mvr":
        return np.sum(1.0 / s) + np.trace(np.linalg.inv(slack))
    return -np.sum(np.log(s)) - np.linalg.slogdet(slack)[1]


def dense_cases():
    generators = spawn(1, 6)
    return {
        "autoregressive .9": autoregressive(40, 0.9),
        "equicorrelated .7": equicorrelated(30, 0.7),
        "Wishart, n = 1.5 p": sample_correlation(generators[0], 40, 60),
        "rotated": rotated_spectrum(generators[1], 35),
        "factors": to_correlation(factor_model(generators[2], 40, 3).dense()),
        "blocks": np.kron(np.eye(4), equicorrelated(10, 0.8)),
    }


DENSE = dense_cases()


# --- published and recomputed values ----------------------------------------------------------


@pytest.mark.parametrize("correlation", [0.0, 0.2, 0.5, 0.6, 0.9])
@pytest.mark.parametrize("method", ["sdp", "equicorrelated"])
def test_equal_correlations_have_the_known_sdp(correlation, method):
    # Barber and Candes 2015: for equal correlations rho >= 0 both are min(1, 2 (1 - rho)).
    s = s_vector(equicorrelated(8, correlation), method)
    np.testing.assert_allclose(s, min(1.0, 2.0 * (1.0 - correlation)), atol=2e-6)


@pytest.mark.parametrize(
    ("size", "correlation", "mvr", "max_entropy"),
    [
        # recomputed from the objectives of Spector and Janson 2022 (which are from memory)
        (10, 0.25, 0.769412, 0.784305),
        (10, 0.5, 0.513137, 0.525063),
        (100, 0.5, 0.501256, 0.502500),
        (50, 0.8, 0.201010, 0.202015),
    ],
)
def test_equal_correlations_have_the_recomputed_values(size, correlation, mvr, max_entropy):
    matrix = equicorrelated(size, correlation)
    tight = {"tol": 1e-13}
    found = solve_s_vector(matrix, "mvr", **tight).s
    np.testing.assert_allclose(found, mvr, atol=6e-7)
    found = solve_s_vector(matrix, "max_entropy", **tight).s
    np.testing.assert_allclose(found, max_entropy, atol=6e-7)


@pytest.mark.parametrize(("size", "correlation"), [(2, 0.5), (2, 0.9), (7, 0.3), (25, 0.8)])
def test_maximum_entropy_solves_its_quadratic(size, correlation):
    # With a = 2 (1 - rho), b = 2 (1 + (p-1) rho): smaller root of
    # 2p s^2 - [p (a+b) + (p-1) b + a] s + p a b = 0.
    a, b = 2.0 * (1.0 - correlation), 2.0 * (1.0 + (size - 1) * correlation)
    roots = np.roots([2 * size, -(size * (a + b) + (size - 1) * b + a), size * a * b])
    s = solve_s_vector(equicorrelated(size, correlation), "max_entropy", tol=1e-14).s
    np.testing.assert_allclose(s, roots.min(), rtol=1e-7)


def test_maximum_entropy_of_two_features():
    # (3 - sqrt(1 + 8 rho^2)) / 2; rho = .5 gives .6339746
    s = solve_s_vector(equicorrelated(2, 0.5), "max_entropy", tol=1e-14).s
    np.testing.assert_allclose(s, 0.6339746, atol=5e-8)


@pytest.mark.parametrize(
    ("correlation", "twice_smallest"), [(0.3, 1.094045), (0.5, 0.680532), (0.7, 0.361211)]
)
def test_autoregressive_equicorrelated(correlation, twice_smallest):
    # recomputed: 2 lambda_min of AR(1), p = 10
    s = s_vector(autoregressive(10, correlation), "equicorrelated")
    np.testing.assert_allclose(s, min(1.0, twice_smallest), atol=6e-7)


def test_autoregressive_sdp():
    # recomputed with cvxpy to 1e-4: AR(1), p = 10
    s = s_vector(autoregressive(10, 0.5), "sdp")
    np.testing.assert_allclose(s, [1.0, *[2.0 / 3.0] * 8, 1.0], atol=1e-4)
    assert s_vector(autoregressive(10, 0.7), "sdp").sum() == pytest.approx(4.426265, abs=1e-5)


@pytest.mark.parametrize(
    ("method", "first_half"),
    [
        ("max_entropy", [0.6580, 0.4706, 0.4867, 0.4852, 0.4853]),
        ("mvr", [0.5945, 0.4308, 0.4384, 0.4385, 0.4385]),
    ],
)
def test_autoregressive_smooth(method, first_half):
    # recomputed to 1e-4: AR(1) at .5, p = 10, first half (the second mirrors it)
    s = s_vector(autoregressive(10, 0.5), method)
    np.testing.assert_allclose(s[:5], first_half, atol=1e-4)
    np.testing.assert_allclose(s, s[::-1], atol=1e-6)


# --- optimality -------------------------------------------------------------------------------


@pytest.mark.parametrize("name", DENSE)
@pytest.mark.parametrize("method", ["mvr", "max_entropy"])
def test_smooth_objectives_are_stationary(name, method):
    matrix = DENSE[name]
    solution = solve_s_vector(matrix, method, tol=1e-13)
    inverse = np.linalg.inv(2.0 * matrix - np.diag(solution.s))
    pull = np.diag(inverse) if method == "max_entropy" else np.diag(inverse @ inverse)
    push = 1.0 / solution.s if method == "max_entropy" else 1.0 / solution.s**2
    np.testing.assert_allclose(pull, push, rtol=1e-5)
    assert solution.status is SVectorStatus.CONVERGED


@pytest.mark.parametrize("name", DENSE)
@pytest.mark.parametrize("method", ["mvr", "max_entropy"])
def test_no_feasible_neighbour_is_better(name, method):
    matrix = DENSE[name]
    s = s_vector(matrix, method)
    best = objective(matrix, s, method)
    for generator in spawn(3, 5):
        moved = s * np.exp(0.05 * generator.standard_normal(len(s)))
        if np.linalg.eigvalsh(2.0 * matrix - np.diag(moved))[0] > 0:
            assert objective(matrix, moved, method) > best
    assert objective(matrix, 0.97 * s, method) > best


@pytest.mark.parametrize("name", DENSE)
def test_sdp_reaches_the_optimum_of_a_general_solver(name):
    matrix = DENSE[name][:24, :24]
    s, optimum = s_vector(matrix, "sdp"), reference_s_vector(matrix).sum()
    assert s.sum() == pytest.approx(optimum, rel=1e-6)


@pytest.mark.statistical
@pytest.mark.parametrize("position", range(30))
def test_sdp_reaches_the_optimum_of_a_general_solver_on_random_covariances(position):
    generator = spawn(5, 30)[position]
    size = int(generator.integers(5, 101))
    if position % 2:
        matrix = rotated_spectrum(generator, size)
    else:
        matrix = sample_correlation(generator, size, int(size * generator.uniform(1.1, 5.0)) + 2)
    s, optimum = s_vector(matrix, "sdp"), reference_s_vector(matrix).sum()
    assert s.sum() == pytest.approx(optimum, rel=1e-6)


@pytest.mark.parametrize("name", DENSE)
@pytest.mark.parametrize("method", ["mvr", "max_entropy", "sdp"])
def test_gap_bounds_the_true_distance(name, method):
    """Stopped early, the gap is an upper bound on what is left."""
    matrix = DENSE[name]
    best = solve_s_vector(matrix, method).s
    for max_iter in (1, 2, 4):
        early = solve_s_vector(matrix, method, tol=1e-14, max_iter=max_iter)
        if method == "sdp":
            left = (best.sum() - early.s.sum()) / early.s.sum()
        else:
            left = objective(matrix, early.s, method) - objective(matrix, best, method)
            left /= len(matrix) if method == "max_entropy" else objective(matrix, early.s, method)
        assert early.gap >= left - 1e-9
    assert early.gap < np.inf


def test_too_few_iterations_are_reported():
    solution = solve_s_vector(DENSE["rotated"], "sdp", max_iter=1)
    assert solution.status is SVectorStatus.NOT_CONVERGED
    assert "raise max_iter" in solution.status.value


@pytest.mark.parametrize("method", S_VECTOR_METHODS)
def test_blocks_are_solved_apart(method):
    """A block-diagonal covariance has the s-vectors of its blocks, equicorrelated their minimum."""
    parts = [equicorrelated(4, 0.6), autoregressive(5, 0.4)]
    whole = np.zeros((9, 9))
    whole[:4, :4], whole[4:, 4:] = parts
    apart = np.concatenate([s_vector(part, method) for part in parts])
    expected = np.full(9, apart.min()) if method == "equicorrelated" else apart
    np.testing.assert_allclose(s_vector(whole, method), expected, rtol=2e-4)


# --- validity and relations -------------------------------------------------------------------


@pytest.mark.parametrize("name", DENSE)
@pytest.mark.parametrize("method", S_VECTOR_METHODS)
def test_valid_and_within_bounds(name, method):
    s = s_vector(DENSE[name], method)
    assert (s >= 0).all()
    assert np.linalg.eigvalsh(2.0 * DENSE[name] - np.diag(s))[0] >= 0
    if method in {"sdp", "equicorrelated"}:
        assert (s <= 1).all()


@pytest.mark.parametrize("method", S_VECTOR_METHODS)
def test_scale_and_order_do_not_matter(method):
    generator = spawn(7, 1)[0]
    matrix = DENSE["rotated"]
    scale, order = generator.uniform(0.1, 10.0, len(matrix)), generator.permutation(len(matrix))
    moved = (matrix * scale * scale[:, None])[np.ix_(order, order)]
    expected = (s_vector(matrix, method) * scale**2)[order]
    if method == "sdp":
        weight = 1.0 / scale[order] ** 2
        found = s_vector(moved, method) * weight
        assert found.sum() == pytest.approx((expected * weight).sum(), rel=1e-6)
    else:
        np.testing.assert_allclose(s_vector(moved, method), expected, rtol=1e-4)


@pytest.mark.parametrize("method", S_VECTOR_METHODS)
def test_constant_feature_gets_zero_and_changes_nothing(method):
    matrix = autoregressive(6, 0.5)
    wider = np.zeros((7, 7))
    wider[1:, 1:] = matrix
    s = s_vector(wider, method)
    assert s[0] == 0
    np.testing.assert_allclose(s[1:], s_vector(matrix, method))
    assert (s_vector(np.zeros((2, 2)), method) == 0).all()


@pytest.mark.parametrize("method", S_VECTOR_METHODS)
def test_nearly_singular_matrices_are_shrunk_no_further_than_needed(method):
    generator = spawn(9, 1)[0]
    table = generator.standard_normal((20, 30))
    singular = np.corrcoef(table, rowvar=False)
    solution = solve_s_vector(singular, method)
    assert 0 < solution.shrinkage < 3e-8
    mixed = (1.0 - solution.shrinkage) * singular + solution.shrinkage * np.eye(30)
    assert np.linalg.eigvalsh(2.0 * mixed - np.diag(solution.s))[0] > -1e-14
    assert (solution.s > 0).all()
    assert solve_s_vector(autoregressive(30, 0.9), method).shrinkage == 0


@pytest.mark.parametrize("method", S_VECTOR_METHODS)
def test_tiny_eigenvalues_keep_their_certificate(method):
    generator = spawn(10, 1)[0]
    matrix = rotated_spectrum(generator, 60, smallest=1e-6)
    solution = solve_s_vector(matrix, method)
    assert solution.status is SVectorStatus.CONVERGED
    assert np.linalg.eigvalsh(2.0 * matrix - np.diag(solution.s))[0] > -1e-14


# --- diagonal plus low rank -------------------------------------------------------------------


def low_rank_cases():
    generators = spawn(11, 3)
    return {
        "20 factors": factor_model(generators[0], 600, 20),
        "strong factors": factor_model(generators[1], 520, 4, 0.01, 0.2),
        "shrunk": shrunk(generators[2], 600, 80, 0.3),
    }


LOW_RANK = low_rank_cases()


@pytest.mark.parametrize("name", LOW_RANK)
@pytest.mark.parametrize("method", ["mvr", "max_entropy", "equicorrelated"])
def test_low_rank_agrees_with_dense(name, method):
    covariance = LOW_RANK[name]
    found = solve_s_vector(covariance, method, tol=1e-13)
    dense = solve_s_vector(covariance.dense(), method, tol=1e-13)
    np.testing.assert_allclose(found.s, dense.s, rtol=1e-5)
    assert found.status is SVectorStatus.CONVERGED or method == "equicorrelated"


@pytest.mark.parametrize("name", LOW_RANK)
def test_low_rank_sdp_agrees_with_dense(name):
    covariance = LOW_RANK[name]
    found, dense = solve_s_vector(covariance, "sdp"), solve_s_vector(covariance.dense(), "sdp")
    weight = 1.0 / covariance.variances
    assert found.s @ weight == pytest.approx(dense.s @ weight, rel=2e-6)
    assert found.status is SVectorStatus.CONVERGED


@pytest.mark.parametrize("name", LOW_RANK)
@pytest.mark.parametrize("method", S_VECTOR_METHODS)
def test_low_rank_is_valid(name, method):
    covariance = LOW_RANK[name]
    s = s_vector(covariance, method)
    scale = 1.0 / np.sqrt(covariance.variances)
    slack = (2.0 * covariance.dense() - np.diag(s)) * scale * scale[:, None]
    assert np.linalg.eigvalsh(slack)[0] > -1e-13
    assert (s >= 0).all()


def test_low_rank_smallest_eigenvalue():
    for covariance in LOW_RANK.values():
        expected = np.linalg.eigvalsh(covariance.dense())[0]
        assert covariance.smallest_eigenvalue() == pytest.approx(expected, abs=1e-11)


# --- block-diagonal approximation -------------------------------------------------------------


def test_block_approximation_is_exact_on_blocks():
    blocks = np.kron(np.eye(6), autoregressive(5, 0.7))
    order = spawn(13, 1)[0].permutation(30)
    shuffled = blocks[np.ix_(order, order)]
    found = block_diagonal_s_vector(shuffled, "mvr", largest_block=5)
    np.testing.assert_allclose(found, s_vector(shuffled, "mvr"), rtol=1e-5)


@pytest.mark.parametrize("method", S_VECTOR_METHODS)
def test_block_approximation_is_valid_and_no_better_than_the_optimum(method):
    matrix = DENSE["rotated"]
    for largest in (1, 7, 35):
        s = block_diagonal_s_vector(matrix, method, largest_block=largest)
        assert np.linalg.eigvalsh(2.0 * matrix - np.diag(s))[0] > -1e-14
        if method == "sdp":
            assert s.sum() <= s_vector(matrix, method).sum() * (1 + 1e-6)


# --- groups -----------------------------------------------------------------------------------

LABELS = {
    "singles": lambda size: np.arange(size),
    "neighbours": lambda size: np.arange(size) // 5,
    "scattered": lambda size: np.arange(size) * 7 % 4,
    "one": lambda size: np.zeros(size, dtype=int),
}


def inverse_root(matrix):
    values, vectors = np.linalg.eigh(matrix)
    return (vectors / np.sqrt(values)) @ vectors.T


def blocks_only(matrix, labels):
    return np.where(np.equal.outer(labels, labels), matrix, 0.0)


@pytest.mark.parametrize("name", DENSE)
@pytest.mark.parametrize("grouping", LABELS)
@pytest.mark.parametrize("method", S_VECTOR_METHODS)
def test_group_matrices_are_valid(name, grouping, method):
    matrix = DENSE[name]
    labels = LABELS[grouping](len(matrix))
    solution = solve_s_vector(matrix, method, feature_groups=labels)
    np.testing.assert_array_equal(solution.matrix, blocks_only(solution.matrix, labels))
    assert np.linalg.eigvalsh(solution.matrix)[0] > -1e-12
    assert np.linalg.eigvalsh(2.0 * matrix - solution.matrix)[0] >= 0
    np.testing.assert_array_equal(solution.s, np.diag(solution.matrix))
    assert solution.status is SVectorStatus.CONVERGED


@pytest.mark.parametrize("name", DENSE)
@pytest.mark.parametrize("method", S_VECTOR_METHODS)
def test_groups_of_one_are_the_s_vector(name, method):
    matrix = DENSE[name]
    solution = solve_s_vector(matrix, method, feature_groups=np.arange(len(matrix)))
    np.testing.assert_allclose(solution.s, s_vector(matrix, method), rtol=2e-4, atol=1e-6)


@pytest.mark.parametrize("method", S_VECTOR_METHODS)
def test_one_group_moves_as_far_as_it_can(method):
    """With a single group S = Sigma: for all rules D = S is the symmetric optimum."""
    matrix = DENSE["rotated"]
    solution = solve_s_vector(matrix, method, feature_groups=np.zeros(len(matrix)))
    np.testing.assert_allclose(solution.matrix, matrix, atol=2e-5)


@pytest.mark.parametrize("grouping", ["neighbours", "scattered"])
@pytest.mark.parametrize("method", ["mvr", "max_entropy"])
def test_group_blocks_are_stationary(grouping, method):
    """S^-1 = D^-1 inside every block, or S^-2 = D^-2 with every group whitened."""
    matrix = DENSE["rotated"]
    labels = LABELS[grouping](len(matrix))
    S = solve_s_vector(matrix, method, feature_groups=labels, tol=1e-13, max_iter=500).matrix
    root = inverse_root(blocks_only(matrix, labels))
    whitened, S = root @ matrix @ root, root @ S @ root
    pull, push = np.linalg.inv(2.0 * whitened - S), np.linalg.inv(S)
    if method == "mvr":
        pull, push = pull @ pull, push @ push
    pull = blocks_only(pull, labels)
    np.testing.assert_allclose(pull, push, atol=1e-5 * np.abs(push).max())


@pytest.mark.parametrize("method", S_VECTOR_METHODS)
def test_groups_do_not_depend_on_the_coordinates_inside(method):
    """A linear change of coordinates inside each group changes S with it."""
    generator = spawn(19, 1)[0]
    matrix, labels = DENSE["rotated"][:20, :20], np.arange(20) // 4
    mix = blocks_only(generator.standard_normal((20, 20)), labels)
    expected = mix @ solve_s_vector(matrix, method, feature_groups=labels).matrix @ mix.T
    moved = mix @ matrix @ mix.T
    found = solve_s_vector(0.5 * (moved + moved.T), method, feature_groups=labels).matrix
    np.testing.assert_allclose(found, expected, atol=2e-4 * np.abs(expected).max())


@pytest.mark.parametrize("grouping", ["neighbours", "scattered"])
def test_group_sdp_reaches_the_optimum_of_a_general_solver(grouping):
    """The tied programme, stated in cvxpy with S_g = c_g Sigma_gg."""
    cvxpy = pytest.importorskip("cvxpy")
    matrix = DENSE["rotated"][:20, :20]
    labels = LABELS[grouping](20)
    S = solve_s_vector(matrix, "sdp", feature_groups=labels).matrix
    codes = np.unique(labels)
    c = cvxpy.Variable(len(codes))
    parts = [np.where(np.logical_and.outer(labels == g, labels == g), matrix, 0.0) for g in codes]
    slack = 2 * matrix - sum(c[i] * part for i, part in enumerate(parts))
    sizes = np.array([(labels == g).sum() for g in codes])
    limits = [c >= 0, c <= 1, slack >> 0]
    optimum = cvxpy.Problem(cvxpy.Maximize(sizes @ c), limits).solve(solver="CLARABEL")
    assert np.trace(S) == pytest.approx(optimum, rel=2e-6)


def test_groups_help_where_features_repeat_one_another():
    """Blocks at .99: single features hardly move, groups move as if they were independent."""
    matrix = np.kron(np.eye(4), equicorrelated(5, 0.99))
    alone = s_vector(matrix, "mvr")
    together = solve_s_vector(matrix, "mvr", feature_groups=np.arange(20) // 5)
    assert alone.max() < 0.03
    np.testing.assert_allclose(together.matrix, matrix, atol=1e-6)


@pytest.mark.parametrize("method", S_VECTOR_METHODS)
def test_groups_in_other_units_and_with_a_constant(method):
    generator = spawn(18, 1)[0]
    matrix, labels = DENSE["rotated"], LABELS["neighbours"](35)
    scale = np.r_[0.0, generator.uniform(0.5, 2.0, 34)]
    given = matrix * scale * scale[:, None]
    found = solve_s_vector(given, method, feature_groups=labels).matrix
    assert (found[0] == 0).all()
    inner = solve_s_vector(matrix[1:, 1:], method, feature_groups=labels[1:]).matrix
    np.testing.assert_allclose(found[1:, 1:], inner * scale[1:] * scale[1:, None], rtol=1e-4)


# --- bad input --------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("matrix", "message"),
    [
        (np.ones((2, 3)), "must be a square matrix"),
        (np.array([[1.0, np.nan], [np.nan, 1.0]]), "NaN or infinite"),
        (np.array([[1.0, 0.5], [0.1, 1.0]]), "not symmetric"),
        (np.array([[1.0, 2.0], [2.0, 1.0]]), "smallest eigenvalue"),
    ],
)
def test_bad_covariances_are_refused(matrix, message):
    with pytest.raises(ValueError, match=message):
        s_vector(matrix)


def test_unknown_method_is_refused():
    with pytest.raises(ValueError, match=r"'asdp' is unknown; allowed are 'mvr'.*usual choice"):
        s_vector(np.eye(2), "asdp")


def test_labels_of_another_length_are_refused():
    with pytest.raises(ValueError, match="one label per feature is needed"):
        solve_s_vector(np.eye(3), feature_groups=np.arange(4))


def test_bad_low_rank_covariances_are_refused():
    with pytest.raises(ValueError, match="Transpose the loadings"):
        LowRankCovariance(np.ones(4), np.ones((2, 4)))
    with pytest.raises(ValueError, match="diagonal entry that is not positive"):
        LowRankCovariance(np.array([1.0, 0.0]), np.ones((2, 1)))


# --- speed ------------------------------------------------------------------------------------


def median_time(function, repeats):
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        function()
        times.append(time.perf_counter() - start)
    return float(np.median(times))


def side_by_side(first, second, repeats):
    """Median times of two functions called in turn, so that both meet the same machine."""
    times = [(median_time(first, 1), median_time(second, 1)) for _ in range(repeats)]
    return np.median(times, axis=0)


@pytest.mark.benchmark
@pytest.mark.parametrize("method", ["mvr", "max_entropy", "sdp"])
@pytest.mark.parametrize("design", ["autoregressive", "Wishart"])
def test_a_thousand_features_within_a_hundred_factorisations(method, design):
    if design == "autoregressive":
        matrix = autoregressive(1000, 0.5)
    else:
        matrix = sample_correlation(spawn(15, 1)[0], 1000, 3000)
    s_vector(matrix[:40, :40], method)
    ours, factorisation = side_by_side(
        lambda: s_vector(matrix, method), lambda: np.linalg.cholesky(matrix), 5
    )
    assert ours <= 100.0 * factorisation


@pytest.mark.benchmark
@pytest.mark.parametrize("method", ["mvr", "max_entropy", "sdp"])
def test_twenty_thousand_features_with_twenty_factors_within_a_minute(method):
    covariance = factor_model(spawn(16, 1)[0], 20_000, 20, 0.5, 20.0)
    start = time.perf_counter()
    solution = solve_s_vector(covariance, method)
    assert time.perf_counter() - start < 60.0
    assert solution.status is SVectorStatus.CONVERGED


@pytest.mark.benchmark
def test_fifty_times_faster_than_a_general_solver():
    cvxpy = pytest.importorskip("cvxpy")
    matrix = sample_correlation(spawn(17, 1)[0], 200, 600)
    s_vector(matrix[:40, :40], "sdp")
    ours = median_time(lambda: s_vector(matrix, "sdp"), 5)
    s = cvxpy.Variable(200)
    limits = [s >= 0, s <= 1, 2 * matrix - cvxpy.diag(s) >> 0]
    problem = cvxpy.Problem(cvxpy.Maximize(cvxpy.sum(s)), limits)
    start = time.perf_counter()
    problem.solve(solver="SCS")
    assert time.perf_counter() - start >= 50.0 * ours
