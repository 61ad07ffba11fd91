"""Simulated tables have the law and truth they state; real tables hold what is known of them."""

from __future__ import annotations

import tracemalloc

import numpy as np
import pytest
from scipy import stats
from sklearn.compose import make_column_selector, make_column_transformer
from sklearn.linear_model import lasso_path
from sklearn.preprocessing import OneHotEncoder
from tables import (
    load_alzheimer_csf,
    load_leukaemia_all,
    load_meats,
    load_prostate,
    meat_wavelengths,
)

from sparsesel.datasets import (
    COVARIANCE_FAMILIES,
    Autoregressive,
    Blocks,
    Equicorrelated,
    FactorModel,
    Independent,
    Signal,
    TableDesign,
    make_orchard,
    make_sparse_classification,
    make_sparse_regression,
    table_covariance,
)

# Chance of a false alarm of one Monte Carlo check here, over all the numbers it compares.
FALSE_ALARM = 1e-4


def assert_covariance(X, expected):
    """Second moments of Gaussian rows of mean 0 agree with `expected`.

    Var(x_j x_k) = Σ_jj Σ_kk + Σ_jk² (Isserlis 1918), hence the standard error of each moment; the
    limit is Bonferroni's over the entries.
    """
    n, p = X.shape
    diagonal = np.diag(expected)
    standard_error = np.sqrt((np.outer(diagonal, diagonal) + expected**2) / n)
    z = (X.T @ X / n - expected) / standard_error
    assert np.abs(z).max() < stats.norm.isf(FALSE_ALARM / 2 / (p * (p + 1) / 2))


class TestColumns:
    @pytest.mark.parametrize("family", COVARIANCE_FAMILIES)
    def test_rows_have_the_covariance_of_their_family(self, family):
        X = family().sampler(24)(np.random.default_rng(1), 20_000)
        assert_covariance(X, family().matrix(24))

    @pytest.mark.parametrize("family", COVARIANCE_FAMILIES)
    def test_matrix_is_a_correlation_matrix(self, family):
        matrix = family().matrix(37)
        np.testing.assert_allclose(np.diag(matrix), 1, rtol=1e-12)
        np.testing.assert_array_equal(matrix, matrix.T)
        assert np.linalg.eigvalsh(matrix)[0] > 0

    def test_matrices_by_hand(self):
        np.testing.assert_allclose(
            Autoregressive(-0.5).matrix(3), [[1, -0.5, 0.25], [-0.5, 1, -0.5], [0.25, -0.5, 1]]
        )
        np.testing.assert_allclose(Blocks(2, 0.8).matrix(3), [[1, 0.8, 0], [0.8, 1, 0], [0, 0, 1]])
        np.testing.assert_array_equal(Independent().matrix(2), np.eye(2))
        loadings = FactorModel(3, 0.4).loadings(9)
        np.testing.assert_allclose((loadings**2).sum(axis=1), 0.4)

    def test_covariates_explain_the_stated_share(self):
        design = TableDesign(20_000, 8, Equicorrelated(0.3), n_covariates=3, confounding=0.4)
        table = make_sparse_regression(design, random_state=2, signal=Signal(2))
        assert_covariance(table.X, table.covariance)
        # Feature j follows covariate j mod 3 with correlation √c.
        assert table.covariance[3 + 4, 4 % 3] == pytest.approx(np.sqrt(0.4))
        assert table.covariance[3 + 4, 5 % 3] == 0

    def test_rows_of_a_group_share_the_stated_part(self):
        design = TableDesign(20_000, 6, Independent(), n_groups=10_000, group_share=0.5)
        table = make_sparse_regression(design, Signal(1), random_state=3)
        np.testing.assert_array_equal(np.bincount(table.groups), 2)
        pairs = np.hstack([table.X[0::2], table.X[1::2]])
        assert_covariance(pairs, np.kron([[1, 0.5], [0.5, 1]], np.eye(6)))

    def test_group_sizes_differ_by_one_at_most(self):
        table = make_sparse_regression(TableDesign(23, 5, n_groups=4), Signal(1), random_state=0)
        assert set(np.bincount(table.groups)) == {5, 6}

    @pytest.mark.parametrize("family", COVARIANCE_FAMILIES)
    def test_one_seed_is_one_table_in_every_storage(self, family):
        def draw(dtype, order):
            design = TableDesign(
                70, 30, family(), 2, 0.2, n_groups=9, group_share=0.3, dtype=dtype, order=order
            )
            return make_sparse_regression(design, Signal(3), random_state=5)

        double = draw("float64", "F")
        assert double.X.flags.f_contiguous
        assert draw("float64", "C").X.flags.c_contiguous
        np.testing.assert_array_equal(draw("float64", "C").X, double.X)
        assert draw("float32", "C").X.dtype == np.float32
        np.testing.assert_array_equal(draw("float32", "F").X, double.X.astype(np.float32))

    @pytest.mark.parametrize("family", COVARIANCE_FAMILIES)
    def test_wide_tables_need_memory_in_proportion_to_their_width(self, family):
        n, p = 8, 200_000
        tracemalloc.start()
        table = make_sparse_regression(
            TableDesign(n, p, family(), dtype="float32"), Signal(5), random_state=0
        )
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        assert table.X.shape == (n, p)
        # A few double copies of the rows, the loadings of five factors, and the names of columns.
        assert peak < 6 * n * p * 8 + 5 * 2 * p * 8 + 200 * p

    def test_a_covariance_too_wide_to_form_is_refused(self):
        with pytest.raises(
            ValueError, match=r"20001 columns: up to 20000 .* Use design.covariance"
        ):
            table_covariance(TableDesign(10, 20_001))


class TestOutcomes:
    def test_continuous_outcome_is_its_formula(self):
        design = TableDesign(50, 40, n_covariates=2)
        table = make_sparse_regression(design, Signal(6, 2.0), noise=0.0, random_state=1)
        np.testing.assert_allclose(table.y, table.X @ table.coef, rtol=1e-12)
        assert np.count_nonzero(table.support) == 6
        np.testing.assert_array_equal(np.abs(table.coef[table.support]), 2.0)
        np.testing.assert_array_equal(table.coef[:2], 1.0)
        assert table.covariates == ("z0", "z1")
        assert not set(table.covariates) & set(table.truth)

    def test_noise_and_group_effects_have_the_stated_size(self):
        design = TableDesign(6_000, 3, n_groups=3_000)
        table = make_sparse_regression(
            design, Signal(1, group_effect=2.0), noise=1.5, random_state=4
        )
        rest = table.y - table.X @ table.coef
        half_difference, mean = (rest[0::2] - rest[1::2]) / 2, (rest[0::2] + rest[1::2]) / 2
        for values, variance in ((half_difference, 1.5**2 / 2), (mean, 4.0 + 1.5**2 / 2)):
            scaled = (values**2).sum() / variance
            assert FALSE_ALARM < stats.chi2.cdf(scaled, values.size) < 1 - FALSE_ALARM

    def test_parts_of_a_table_have_streams_of_their_own(self):
        design = TableDesign(30, 20)
        plain = make_sparse_regression(design, Signal(3), random_state=7)
        louder = make_sparse_regression(design, Signal(3, amplitude=3), noise=9, random_state=7)
        np.testing.assert_array_equal(plain.X, louder.X)
        assert plain.truth == louder.truth
        np.testing.assert_allclose(
            louder.y - louder.X @ louder.coef, 9 * (plain.y - plain.X @ plain.coef), atol=1e-12
        )

    @pytest.mark.parametrize("prevalence", [0.5, 0.1])
    def test_class_one_has_the_requested_prevalence_and_the_stated_chance(self, prevalence):
        table = make_sparse_classification(
            TableDesign(8_000, 12), Signal(4), prevalence=prevalence, random_state=2
        )
        chance = 1 / (1 + np.exp(-table.intercept - table.X @ table.coef))
        assert chance.mean() == pytest.approx(prevalence, abs=1e-9)
        z = (table.y - chance).sum() / np.sqrt((chance * (1 - chance)).sum())
        assert abs(z) < stats.norm.isf(FALSE_ALARM / 2)
        # The score of each column at the stated coefficients has mean zero.
        scores = table.X * (table.y - chance)[:, None]
        z = scores.sum(axis=0) / np.sqrt((scores**2).sum(axis=0))
        assert np.abs(z).max() < stats.norm.isf(FALSE_ALARM / 2 / 12)

    @pytest.mark.parametrize("signs", ["random", "alternating", "positive"])
    @pytest.mark.parametrize("placement", ["random", "spread", "first"])
    def test_placement_and_signs(self, placement, signs):
        signal = Signal(5, placement=placement, signs=signs)
        table = make_sparse_regression(TableDesign(4, 53), signal, random_state=3)
        positions = np.flatnonzero(table.support)
        assert positions.size == 5
        if placement != "random":
            step = {"spread": 10, "first": 1}[placement]
            np.testing.assert_array_equal(positions, step * np.arange(5))
        if signs != "random":
            other = {"alternating": -1, "positive": 1}[signs]
            np.testing.assert_array_equal(table.coef[positions], [1, other, 1, other, 1])

    def test_global_null(self):
        table = make_sparse_classification(TableDesign(100, 9), Signal(0), random_state=0)
        assert table.truth == ()
        assert table.intercept == pytest.approx(0)

    def test_seeds(self):
        design = TableDesign(10, 4)

        def draw(random_state):
            return make_sparse_regression(design, Signal(1), random_state=random_state).X

        np.testing.assert_array_equal(draw(3), draw(3))
        np.testing.assert_array_equal(draw(np.random.SeedSequence(3)), draw(3))
        assert (draw(3) != draw(4)).all()
        assert (draw(None) != draw(None)).all()
        for stream in (np.random.default_rng(0), np.random.RandomState(0)):
            assert (draw(stream) != draw(stream)).all()

    def test_frame_carries_the_names(self):
        table = make_sparse_regression(TableDesign(6, 3, n_covariates=1), Signal(1), random_state=0)
        frame = table.frame()
        assert tuple(frame.columns) == table.feature_names == ("z0", "x0", "x1", "x2")
        np.testing.assert_array_equal(frame.to_numpy(), table.X)


@pytest.mark.parametrize(
    ("build", "message"),
    [
        (lambda: Autoregressive(1.0), r"abs\(rho\)=1.0: a number in \[0, 1\) .* smaller"),
        (lambda: Equicorrelated(-0.1), r"rho=-0.1: a number in \[0, 1\)"),
        (lambda: Blocks(0), r"size=0: an integer >= 1 .* Use 1 or more"),
        (lambda: FactorModel(0), r"n_factors=0: an integer >= 1 .* Use Independent\(\)"),
        (lambda: FactorModel(communality=1), r"communality=1: a number in \[0, 1\)"),
        (lambda: TableDesign(1), r"n_samples=1, n_features=500: at least 2 rows .* larger table"),
        (lambda: TableDesign(confounding=0.5), "n_covariates=0: confounding is .* Set n_cov"),
        (lambda: TableDesign(group_share=0.5), "n_groups=None: group_share is .* Set n_groups"),
        (lambda: TableDesign(9, n_groups=10), "n_groups=10 with n_samples=9: between .* Lower"),
        (lambda: TableDesign(dtype="int8"), "dtype='int8', order='F': dtype 'float64' .* Convert"),
        (lambda: Signal(placement="last"), "placement='last': 'random', .* compute the outcome"),
        (lambda: Signal(signs="negative"), "signs='negative': 'random', .* negative amplitude"),
        (lambda: Signal(-1), "n_informative=-1, group_effect=0.0: numbers >= 0 .* Use 0"),
        (
            lambda: make_sparse_regression(TableDesign(9, 3), Signal(4)),
            "n_informative=4 with n_features=3: at most all .* Lower n_informative",
        ),
        (lambda: make_sparse_regression(noise=-1), "noise=-1: a number >= 0 .* Use 0"),
        (
            lambda: make_sparse_classification(prevalence=1),
            "prevalence=1: a share strictly between 0 and 1 .* Choose",
        ),
        (
            lambda: make_sparse_classification(
                TableDesign(5, 3), Signal(0), prevalence=1e-6, random_state=0
            ),
            "5 rows with class 1 in 0 of them: both classes .* Ask for more rows",
        ),
        (lambda: make_orchard("taste"), "outcome='taste': 'firmness' and 'browning' .* Choose"),
        (lambda: make_orchard(n_orchards=1), "n_orchards=1: at least 2 orchards .* Use 2"),
    ],
)
def test_a_bad_request_says_what_is_allowed_and_what_to_do(build, message):
    with pytest.raises(ValueError, match=message):
        build()


def first_entries(X, y, n_entries):
    """Positions of the first columns to enter a lasso path, by scikit-learn."""
    alphas = np.abs(X.T @ y).max() / len(y) * np.geomspace(1, 0.1, 40)
    coef = lasso_path(X, y, alphas=alphas, max_iter=200)[1]
    entered = coef != 0
    rank = np.where(entered.any(axis=1), entered.argmax(axis=1), coef.shape[1])
    order = np.lexsort((-np.abs(coef).max(axis=1), rank))
    return order[: min(n_entries, np.count_nonzero(entered.any(axis=1)))]


def project_out(values, basis):
    return values - basis @ (basis.T @ values)


def selection_shares(table, y, n_entries, n_pairs=50):
    """Share of half-samples, halved by orchard, in which a column is among the first to enter."""
    generator = np.random.default_rng(0)
    orchards = np.unique(table.groups)
    covariates = [table.feature_names.index(name) for name in table.covariates]
    candidates = np.delete(np.arange(table.X.shape[1]), covariates)
    counts = np.zeros(table.X.shape[1])
    for _ in range(n_pairs):
        first = np.isin(table.groups, generator.permutation(orchards)[: orchards.size // 2])
        for half in (first, ~first):
            X = table.X[half]
            basis = np.linalg.qr(np.column_stack([np.ones(len(X)), X[:, covariates]]))[0]
            # A rare category of the log can be missing from a half of the orchards.
            varying = candidates[X[:, candidates].std(axis=0) > 0]
            columns = project_out(X[:, varying] / X[:, varying].std(axis=0), basis)
            response = project_out(y[half], basis)
            counts[varying[first_entries(columns, response, n_entries)]] += 1
    return dict(zip(table.feature_names, counts / (2 * n_pairs), strict=True))


class TestOrchard:
    @pytest.mark.parametrize("outcome", ["firmness", "browning"])
    def test_names_regions_and_truth_are_consistent(self, outcome):
        table = make_orchard(outcome)
        n_columns = table.X.shape[1]
        assert len(set(table.feature_names)) == len(table.regions) == len(table.coef) == n_columns
        region_of = dict(zip(table.feature_names, table.regions, strict=True))
        assert set(table.truth) <= set(table.feature_names)
        assert table.covariates == ("storage_days",)
        assert not set(table.truth) & set(table.related) | set(table.truth) & {"storage_days"}
        assert {region_of[name] for name in table.related} <= {
            region_of[name] for name in table.truth
        }
        assert len(table.truth) + len(table.related) < n_columns / 2

    def test_one_seed_gives_the_same_lots_for_both_outcomes(self):
        firmness, browning = make_orchard("firmness"), make_orchard("browning")
        np.testing.assert_array_equal(firmness.X, browning.X)
        np.testing.assert_array_equal(firmness.y, make_orchard("firmness").y)
        assert (make_orchard(random_state=1).X != firmness.X).mean() > 0.9
        assert make_orchard(n_orchards=4).X.shape[0] == 36

    def test_spectra_are_smooth_corrected_for_scatter_and_strongly_correlated(self):
        table = make_orchard()
        channels = [name.startswith("nir_") for name in table.feature_names]
        spectra = table.X[:, channels]
        np.testing.assert_allclose(spectra.mean(axis=1), 0, atol=1e-12)
        np.testing.assert_allclose(spectra.std(axis=1), 1)
        neighbours = np.diag(np.corrcoef(spectra.T), 1)
        assert np.median(neighbours) > 0.97

    def test_volatiles_of_a_pathway_are_correlated(self):
        table = make_orchard()
        acetates = table.X[:, [region == "voc_ester_acetate" for region in table.regions]]
        inside = np.corrcoef(acetates.T)[np.triu_indices(acetates.shape[1], 1)]
        assert 0.4 < np.median(inside) < 0.7

    @pytest.mark.parametrize("seed", range(5))
    def test_firmness_depends_on_the_true_columns_and_the_orchard_only(self, seed):
        """Within orchards, what the truth leaves over is noise for every other column.

        Given X, the residual centred by orchard is Gaussian on n − G dimensions, so its
        correlation with any centred column has Student's law; Bonferroni over the columns.
        """
        table = make_orchard("firmness", random_state=seed)
        rest = table.y - table.X @ table.coef
        member = table.groups[:, None] == np.unique(table.groups)
        means = member / member.sum(axis=0)

        def centred(values):
            return values - member @ (means.T @ values)

        within, columns = centred(rest), centred(table.X)
        columns = columns[:, columns.std(axis=0) > 1e-9]
        dimension = rest.size - member.shape[1]
        r = columns.T @ within / np.linalg.norm(columns, axis=0) / np.linalg.norm(within)
        t = r * np.sqrt((dimension - 1) / (1 - r**2))
        assert 2 * stats.t.sf(np.abs(t).max(), dimension - 1) > 1e-3 / columns.shape[1]
        # Noise 0.8 and orchard effect 0.5 per unit of the predictor, 1.6 newton each.
        scaled = within @ within / (0.8 * 1.6) ** 2
        assert 1e-3 < stats.chi2.cdf(scaled, dimension) < 1 - 1e-3
        orchard_means = means.T @ rest
        variance = (0.5 * 1.6) ** 2 + (0.8 * 1.6) ** 2 / 9
        scaled = ((orchard_means - orchard_means.mean()) ** 2).sum() / variance
        assert 1e-3 < stats.chi2.cdf(scaled, member.shape[1] - 1) < 1 - 1e-3

    @pytest.mark.parametrize("seed", range(5))
    def test_about_a_quarter_of_the_lots_brown(self, seed):
        table = make_orchard("browning", random_state=seed)
        assert set(table.y) == {"no", "yes"}
        # Given the scores the count varies less than a binomial of the mean chance.
        count = (table.y == "yes").sum()
        assert stats.binomtest(int(count), table.y.size, 0.25).pvalue > 1e-3

    @pytest.mark.parametrize("outcome", ["firmness", "browning"])
    def test_frame_becomes_X_by_one_hot_coding(self, outcome):
        table = make_orchard(outcome)
        frame = table.frame()
        coder = make_column_transformer(
            (
                OneHotEncoder(drop="if_binary", sparse_output=False),
                make_column_selector(dtype_include=[object, "string"]),
            ),
            remainder="passthrough",
            verbose_feature_names_out=False,
        ).set_output(transform="pandas")
        coded = coder.fit_transform(frame)
        assert set(coded.columns) == set(table.feature_names)
        np.testing.assert_array_equal(coded[list(table.feature_names)].to_numpy(), table.X)
        whole = table.frame(with_outcome=True)
        assert list(whole.columns) == ["orchard", outcome, *frame.columns]
        np.testing.assert_array_equal(whole["orchard"], table.groups)
        np.testing.assert_array_equal(whole[outcome], table.y)

    @pytest.mark.filterwarnings("ignore::sklearn.exceptions.ConvergenceWarning")
    @pytest.mark.parametrize(
        ("outcome", "n_entries", "least"), [("firmness", 30, 6), ("browning", 18, 3)]
    )
    def test_the_truth_can_be_found(self, outcome, n_entries, least):
        """A plain loop of scikit-learn paths over half-samples finds most of the truth at .75.

        Order of entry is all that is used, so loosely converged paths are enough. Columns that
        pass without being true are neighbours of true ones, which is what `related` is for.
        """
        table = make_orchard(outcome)
        y = table.y if outcome == "firmness" else (table.y == "yes").astype(float)
        shares = selection_shares(table, y, n_entries)
        selected = {name for name, share in shares.items() if share >= 0.75}
        assert len(selected & set(table.truth)) >= least
        assert selected <= set(table.truth) | set(table.related)


def welch(features, positive):
    """Welch's t and its p-value for every column, positive minus negative rows."""
    return stats.ttest_ind(features[positive], features[~positive], equal_var=False)


class TestMeats:
    """Borggaard and Thodberg (1992); the position of fat's band is the C-H overtone's."""

    def test_fat_goes_with_the_channel_at_930_nm(self):
        table = load_meats()
        spectra = table.features.to_numpy()
        fat = table.metadata["fat"].to_numpy()
        scaled = (spectra - spectra.mean(axis=1, keepdims=True)) / spectra.std(
            axis=1, keepdims=True
        )
        r = np.array([np.corrcoef(channel, fat)[0, 1] for channel in scaled.T])
        best = meat_wavelengths()[np.argsort(-r)]
        assert best[0] == 930
        assert set(best[:3]) == {928, 930, 932}
        assert r.max() == pytest.approx(0.867, abs=5e-4)
        assert set(meat_wavelengths()[np.argsort(r)[:3]]) <= {872, 874, 876, 878}
        assert r.min() == pytest.approx(-0.86, abs=5e-3)
        raw = np.array([np.corrcoef(channel, fat)[0, 1] for channel in spectra.T])
        assert meat_wavelengths()[np.abs(raw).argmax()] == 930
        assert np.abs(raw).max() == pytest.approx(0.52, abs=5e-3)

    def test_neighbours_are_nearly_equal(self):
        table = load_meats()
        assert table.features.shape == (215, 100)
        assert np.diag(np.corrcoef(table.features.T), 1).min() > 0.9998
        assert not table.features.isna().to_numpy().any()


class TestAlzheimer:
    """Craig-Schapiro et al. (2011); tau, phosphorylated tau and Aβ42 are the clinical markers."""

    def test_clinical_markers_differ_most_and_in_the_right_direction(self):
        table = load_alzheimer_csf()
        numeric = table.features.select_dtypes("number")
        impaired = (table.metadata["Class"] == "Impaired").to_numpy()
        assert numeric.shape == (333, 129)
        assert impaired.sum() == 91
        t, p = welch(numeric.to_numpy(), impaired)
        found = dict(zip(numeric.columns, t, strict=True))
        leaders = sorted(found, key=lambda name: -abs(found[name]))[:4]
        assert leaders == ["tau", "Ab_42", "p_tau", "GRO_alpha"]
        assert [found[name] for name in leaders] == pytest.approx([9.0, -7.8, 6.3, 6.0], abs=0.06)
        assert np.count_nonzero(p < 0.05 / 129) == 23

    def test_tau_and_its_relative(self):
        features = load_alzheimer_csf().features
        assert np.corrcoef(features["tau"], features["p_tau"])[0, 1] == pytest.approx(
            0.91, abs=5e-3
        )

    def test_risk_allele(self):
        table = load_alzheimer_csf()
        carrier = table.features["Genotype"].str.contains("E4")
        impaired = table.metadata["Class"] == "Impaired"
        assert carrier[impaired].mean() == pytest.approx(0.55, abs=5e-3)
        assert carrier[~impaired].mean() == pytest.approx(0.32, abs=5e-3)


class TestLeukaemia:
    """Chiaretti et al. (2004); gene names from the chip's published annotation."""

    ON_Y = (
        "41214_at 38355_at 37583_at 34477_at 35885_at 38182_at 40097_at 36321_at 31534_at 40030_at"
    )

    def test_eleven_probes_differ_by_sex(self):
        table = load_leukaemia_all()
        known = table.metadata["sex"].notna().to_numpy()
        men = (table.metadata["sex"] == "M").to_numpy()[known]
        assert (men.sum(), known.sum()) == (83, 125)
        probes = table.features.columns
        t, p = welch(table.features.to_numpy()[known], men)
        by_sex = set(probes[p < 0.05 / 12_625])
        assert by_sex == {*self.ON_Y.split(), "38446_at"}
        # RPS4Y1 higher in men, XIST active only in women.
        assert t[probes.get_loc("41214_at")] == pytest.approx(21.5, abs=0.05)
        assert t[probes.get_loc("38446_at")] == pytest.approx(-14.4, abs=0.05)
        step_up = set(probes[stats.false_discovery_control(p) < 0.05])
        assert step_up - by_sex == {"33158_at"}

    def test_fused_gene_differs_most_between_fusion_and_none(self):
        table = load_leukaemia_all()
        kind = table.metadata["mol.biol"]
        rows = table.metadata["BT"].str.startswith("B") & kind.isin(["BCR/ABL", "NEG"])
        fused = (kind[rows] == "BCR/ABL").to_numpy()
        assert (fused.sum(), fused.size) == (37, 79)
        t, p = welch(table.features[rows].to_numpy(), fused)
        order = np.argsort(-np.abs(t))[:3]
        assert list(table.features.columns[order]) == ["1636_g_at", "39730_at", "1635_at"]
        assert list(t[order]) == pytest.approx([9.1, 8.6, 7.2], abs=0.05)
        assert np.count_nonzero(p < 0.05 / 12_625) == 20
        assert np.count_nonzero(stats.false_discovery_control(p) < 0.05) == 162

    def test_receptor_gene_separates_cell_types(self):
        table = load_leukaemia_all()
        t_cell = table.metadata["BT"].str.startswith("T").to_numpy()
        t, p = welch(table.features.to_numpy(), t_cell)
        receptor = table.features["38319_at"]
        assert table.features.columns[np.abs(t).argmax()] == "38319_at"
        assert t.max() == pytest.approx(34.4, abs=0.05)
        assert (receptor[~t_cell].max(), receptor[t_cell].min()) == (7.18, 8.14)
        assert np.count_nonzero(p < 0.05 / 12_625) == 815


def test_prostate_is_the_corrected_table():
    """Stamey et al. (1989), as tabulated with The Elements of Statistical Learning, 2nd edition."""
    table = load_prostate()
    assert table.features.shape == (97, 8)
    assert table.metadata["train"].sum() == 67
    assert table.features["lweight"][31] == 3.804438
