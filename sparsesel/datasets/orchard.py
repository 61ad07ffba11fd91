"""An invented demonstration table with a known truth: apple lots before and after storage.

A lot is a crate of apples picked in one orchard in one of two seasons. Before storage, each lot
gets a near-infrared spectrum, a profile of volatile compounds and the entries of the orchard log.
At the end of storage two outcomes are recorded: the firmness lost (newton, continuous) and
whether the flesh has browned (yes or no, the rarer class about a quarter). Nothing here was
measured; every number is drawn.

How a lot i of orchard o(i) is drawn:

*Constituents.* Water, sugar, starch, pectin and wax have amounts c_ik = √r u_o(i)k + √(1 − r)
e_ik with r the share that lots of one orchard have in common; ripeness, from the harvest day,
raises sugar and lowers starch.

*Spectrum.* Absorbance adds up over constituents (Beer and Lambert), each a sum of Gaussian bands b:

    A_i(λ) = Σ_k (1 + s_k c_ik) Σ_b h_b exp(−(λ − λ_b − δ_i)² / 2w_b²) + local_i(λ) ,

where δ_i moves the water bands with the temperature of the fruit, and local_i is a smooth process
with a length of a few channels for the chemistry that no named constituent covers. The detector
sees m_i A_i(λ) + d_i + noise, m_i and d_i for the scatter of light; the table holds each spectrum
centred and scaled by its own mean and standard deviation, which removes m_i and d_i.

*Volatiles.* Compounds of one pathway share its activity: log10 peak area = level + √κ activity +
√(1 − κ) noise.

*Outcomes.* A linear predictor of a few columns, standardised over the table, and of the storage
days, plus an effect of the orchard that no column knows:

    η_i = Σ_j β_j (x_ij − x̄_j)/sd_j + γ (storage days, standardised) + a_o(i) ;

firmness lost is a mean + a scale times (η_i + σ ε_i); browning has P(yes) = 1/(1 + exp(−b0 −
η_i)). Given the columns with β_j ≠ 0 and the storage days, the outcome does not depend on any
other column. Such a column can still stand in for a true neighbour: `related` names the columns
of the same band or pathway as a true one.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter1d
from scipy.special import expit

from sparsesel.datasets.simulated import require, solve_intercept, spawn_generators

if TYPE_CHECKING:
    import pandas

WAVELENGTHS = np.arange(900, 1705, 5)


@dataclass(frozen=True)
class Band:
    """An absorption band: its region's name, constituent, centre and width (nm), height."""

    region: str
    constituent: str
    centre: float
    width: float
    height: float


# Invented, at the places where overtones of O-H and C-H stretches are found.
BANDS = (
    Band("nir_water_second_overtone", "water", 970, 24, 0.30),
    Band("nir_starch_second_overtone", "starch", 1065, 26, 0.12),
    Band("nir_water_combination", "water", 1185, 26, 0.35),
    Band("nir_sugar_second_overtone", "sugar", 1270, 28, 0.16),
    Band("nir_pectin_combination", "pectin", 1360, 28, 0.18),
    Band("nir_water_first_overtone", "water", 1450, 34, 0.90),
    Band("nir_pectin_first_overtone", "pectin", 1580, 32, 0.22),
    Band("nir_wax_first_overtone", "wax", 1670, 22, 0.15),
)
CONSTITUENTS = ("water", "sugar", "starch", "pectin", "wax")

PATHWAYS: Mapping[str, int] = {
    "ester_acetate": 32,
    "ester_butyrate": 28,
    "ester_hexanoate": 24,
    "alcohol": 30,
    "aldehyde": 30,
    "ketone": 24,
    "lactone": 20,
    "terpene": 36,
    "sulphur": 16,
}
ROOTSTOCKS = ("dwarfing", "semivigorous", "vigorous")
SEASONS = ("first", "second")
IRRIGATIONS = ("drip", "rain")

ORCHARD_SHARE = 0.3
PATHWAY_SHARE = 0.55
LOTS_PER_SEASON = (4, 5)
PREVALENCE = 0.25
# Newton lost in store on average, and per unit of the linear predictor.
MEAN_LOSS, LOSS_SCALE = 22.0, 1.6


@dataclass(frozen=True)
class Recipe:
    """What an outcome depends on: effects per standard deviation of a column.

    `noise` is the standard deviation of a continuous outcome's noise, None for a yes-or-no outcome.
    """

    effects: Mapping[str, float]
    storage_effect: float
    orchard_effect: float
    noise: float | None


RECIPES: Mapping[str, Recipe] = {
    "firmness": Recipe(
        effects={
            "nir_0975": -0.9,
            "nir_1270": 0.8,
            "nir_1580": -1.0,
            "voc_ester_acetate_07": 0.8,
            "voc_ester_hexanoate_03": -0.7,
            "voc_alcohol_12": 0.7,
            "voc_lactone_05": 0.8,
            "harvest_day": 0.8,
        },
        storage_effect=1.0,
        orchard_effect=0.5,
        noise=0.8,
    ),
    "browning": Recipe(
        effects={
            "altitude_m": 2.0,
            "nir_1450": 2.2,
            "nir_1670": -2.0,
            "voc_aldehyde_04": 2.2,
            "voc_terpene_19": -2.0,
        },
        storage_effect=2.0,
        orchard_effect=0.5,
        noise=None,
    ),
}


@dataclass(frozen=True, eq=False)
class OrchardTable:
    """The apple lots and their truth.

    Attributes
    ----------
    X : ndarray of shape (n_lots, n_columns), float64
        All columns as numbers; categories of the orchard log as 0/1 columns.
    y : ndarray of shape (n_lots,)
        Firmness lost in newton, or "no" and "yes" for browning.
    outcome : str
        "firmness" or "browning".
    feature_names : tuple of str
        Names of the columns of X.
    regions : tuple of str
        For each column, the band or pathway it belongs to; a column of the orchard log is its own
        region, the 0/1 columns of one category together.
    groups : ndarray of str of shape (n_lots,)
        Orchard of each lot.
    covariates : tuple of str
        The must-keep column, "storage_days": it affects both outcomes and is no candidate.
    coef : ndarray of shape (n_columns,)
        Coefficients of the columns of X that made the outcome, covariate included.
    log : mapping of str to ndarray of shape (n_lots,)
        The orchard log as it was written, with categories as text.
    """

    X: NDArray[np.float64]
    y: NDArray[Any]
    outcome: str
    feature_names: tuple[str, ...]
    regions: tuple[str, ...]
    groups: NDArray[np.str_]
    covariates: tuple[str, ...]
    coef: NDArray[np.float64]
    log: Mapping[str, NDArray[Any]]

    @property
    def truth(self) -> tuple[str, ...]:
        """Names of the columns that carry signal, the covariate aside."""
        return tuple(
            name
            for name, value in zip(self.feature_names, self.coef, strict=True)
            if value and name not in self.covariates
        )

    @property
    def related(self) -> tuple[str, ...]:
        """Names of the columns without signal in the region of a column that has it."""
        region_of = dict(zip(self.feature_names, self.regions, strict=True))
        true_regions = {region_of[name] for name in self.truth}
        return tuple(
            name
            for name in self.feature_names
            if region_of[name] in true_regions and name not in self.truth
        )

    def frame(self, *, with_outcome: bool = False) -> pandas.DataFrame:
        """The lots as a pandas DataFrame, the orchard log first and with its categories as text.

        Parameters
        ----------
        with_outcome : bool, default=False
            Put the columns "orchard" and the outcome's name in front, as in a file to be handed on.

        Returns
        -------
        DataFrame of n_lots rows
        """
        import pandas

        leading: dict[str, Any] = (
            {"orchard": self.groups, self.outcome: self.y} if with_outcome else {}
        )
        spectra_and_volatiles = [
            position
            for position, name in enumerate(self.feature_names)
            if name[:4] in ("nir_", "voc_")
        ]
        log = pandas.DataFrame({**leading, **self.log})
        measured = pandas.DataFrame(
            self.X[:, spectra_and_volatiles],
            columns=[self.feature_names[position] for position in spectra_and_volatiles],
        )
        return pandas.concat([log, measured], axis=1)


def make_orchard(
    outcome: str = "firmness", *, n_orchards: int = 26, random_state: Any = 0
) -> OrchardTable:
    """Draw the invented table of apple lots, with the truth about its outcome.

    Parameters
    ----------
    outcome : {"firmness", "browning"}, default="firmness"
        Firmness lost in store (newton), or internal browning ("yes" in about a quarter of the
        lots).
    n_orchards : int >= 2, default=26
        Number of orchards; each gives 4 lots in the first season and 5 in the second.
    random_state : None, int, SeedSequence, Generator or RandomState, default=0
        The same integer gives the same lots for both outcomes.

    Returns
    -------
    OrchardTable

    Raises
    ------
    ValueError
        For an unknown outcome, fewer than two orchards, or a draw in which every lot browned or
        none.

    Examples
    --------
    >>> from sparsesel.datasets import make_orchard
    >>> table = make_orchard("browning")
    >>> table.X.shape, table.covariates
    ((234, 412), ('storage_days',))
    >>> table.truth[:2]
    ('altitude_m', 'nir_1450')
    """
    require(
        outcome in RECIPES,
        f"outcome={outcome!r}",
        "'firmness' and 'browning' are recorded",
        "Choose one of the two.",
    )
    require(
        n_orchards >= 2,
        f"n_orchards={n_orchards!r}",
        "at least 2 orchards are needed",
        "Use 2 or more, so that lots can be compared between orchards.",
    )
    streams = spawn_generators(random_state, 5)
    orchard = np.repeat(np.arange(n_orchards), sum(LOTS_PER_SEASON))
    log = _draw_log(orchard, streams[0])
    ripeness = _standardized(log["harvest_day"])
    constituents = _draw_constituents(orchard, ripeness, streams[1])
    spectra = _draw_spectra(constituents, streams[2])
    volatiles = _draw_volatiles(orchard, ripeness, streams[3])
    coded_log, log_names, log_regions = _code_log(log)
    X = np.hstack([coded_log, spectra, volatiles])
    names = (*log_names, *(f"nir_{nm:04d}" for nm in WAVELENGTHS), *_volatile_names())
    regions = (*log_regions, *_spectral_regions(), *_volatile_regions())
    y, coef = _draw_outcome(X, names, orchard, RECIPES[outcome], streams[4])
    width = len(str(n_orchards))
    groups = np.array([f"orchard_{number + 1:0{width}d}" for number in orchard])
    return OrchardTable(X, y, outcome, names, regions, groups, ("storage_days",), coef, log)


def _standardized(values: NDArray[Any]) -> NDArray[np.float64]:
    return (values - values.mean(axis=0)) / values.std(axis=0)


def _with_orchard_share(
    orchard: NDArray[np.intp], n_columns: int, generator: np.random.Generator
) -> NDArray[np.float64]:
    """Standard normal columns, of which lots of one orchard share ORCHARD_SHARE of the variance."""
    shared = generator.standard_normal((orchard[-1] + 1, n_columns))[orchard]
    own = generator.standard_normal((orchard.size, n_columns))
    return np.sqrt(ORCHARD_SHARE) * shared + np.sqrt(1 - ORCHARD_SHARE) * own


def _draw_log(orchard: NDArray[np.intp], generator: np.random.Generator) -> dict[str, NDArray[Any]]:
    """The orchard log: what is fixed for an orchard, then what changes from lot to lot."""
    n_orchards, n_lots = int(orchard[-1]) + 1, orchard.size
    season = np.tile(np.repeat([0, 1], LOTS_PER_SEASON), n_orchards)
    site = {
        "rootstock": np.array(ROOTSTOCKS)[generator.integers(3, size=n_orchards)],
        "irrigation": np.array(IRRIGATIONS)[generator.integers(2, size=n_orchards)],
        "altitude_m": np.round(generator.uniform(80, 620, n_orchards)),
        "tree_age_years": generator.integers(4, 26, n_orchards).astype(float),
    }
    # Later at altitude, a week earlier in the second season.
    harvest = (
        255
        + 0.02 * site["altitude_m"][orchard]
        - 7 * season
        + 6 * generator.standard_normal(n_lots)
    )
    return {
        "season": np.array(SEASONS)[season],
        **{name: values[orchard] for name, values in site.items()},
        "crop_load": np.round(generator.gamma(9.0, 0.6, n_lots), 1),
        "fruit_mass_g": np.round(185 + 22 * generator.standard_normal(n_lots)),
        "harvest_day": np.round(harvest),
        "storage_days": np.round(generator.uniform(60, 210, n_lots)),
    }


def _code_log(
    log: Mapping[str, NDArray[Any]],
) -> tuple[NDArray[np.float64], tuple[str, ...], tuple[str, ...]]:
    """Numbers as they are, categories as 0/1 columns (one where there are two categories)."""
    columns, names, regions = [], [], []
    for name, values in log.items():
        coded = {name: values}
        if values.dtype.kind == "U":
            categories = np.unique(values)
            kept = categories[1:] if len(categories) == 2 else categories
            coded = {f"{name}_{category}": values == category for category in kept}
        columns += [column.astype(np.float64) for column in coded.values()]
        names += list(coded)
        regions += [f"log_{name}"] * len(coded)
    return np.column_stack(columns), tuple(names), tuple(regions)


def _draw_constituents(
    orchard: NDArray[np.intp], ripeness: NDArray[np.float64], generator: np.random.Generator
) -> dict[str, NDArray[np.float64]]:
    """Amounts of the constituents, each of variance near 1."""
    amounts = _with_orchard_share(orchard, len(CONSTITUENTS), generator)
    by_name = dict(zip(CONSTITUENTS, amounts.T, strict=True))
    by_name["sugar"] = 0.5 * ripeness + np.sqrt(0.75) * by_name["sugar"]
    by_name["starch"] = -0.5 * ripeness + np.sqrt(0.75) * by_name["starch"]
    return by_name


def _draw_spectra(
    constituents: Mapping[str, NDArray[np.float64]], generator: np.random.Generator
) -> NDArray[np.float64]:
    """Absorbance as the detector sees it, each spectrum then centred and scaled by itself."""
    n_lots, n_channels = constituents["water"].size, WAVELENGTHS.size
    shift = 1.5 * generator.standard_normal(n_lots)
    absorbance = np.zeros((n_lots, n_channels))
    for band in BANDS:
        centre = band.centre + (shift if band.constituent == "water" else np.zeros(n_lots))
        profile = np.exp(-((WAVELENGTHS - centre[:, None]) ** 2) / (2 * band.width**2))
        relative = 0.02 if band.constituent == "water" else 0.12
        absorbance += (
            band.height * (1 + relative * constituents[band.constituent])[:, None] * profile
        )
    local = gaussian_filter1d(generator.standard_normal((n_lots, n_channels)), sigma=2.5, axis=1)
    absorbance += 0.02 * local
    scatter = 1 + 0.15 * generator.standard_normal(n_lots)
    offset = 0.1 * generator.standard_normal(n_lots)
    seen = scatter[:, None] * absorbance + offset[:, None]
    seen += 0.001 * generator.standard_normal((n_lots, n_channels))
    return _standardized(seen.T).T


def _spectral_regions() -> list[str]:
    """For each channel, the region of the band whose centre is nearest."""
    centres = np.array([band.centre for band in BANDS])
    nearest = np.abs(WAVELENGTHS[:, None] - centres).argmin(axis=1)
    return [BANDS[position].region for position in nearest]


def _draw_volatiles(
    orchard: NDArray[np.intp], ripeness: NDArray[np.float64], generator: np.random.Generator
) -> NDArray[np.float64]:
    """log10 peak areas of the compounds, pathway after pathway."""
    activity = _with_orchard_share(orchard, len(PATHWAYS), generator)
    activity = 0.3 * ripeness[:, None] + np.sqrt(1 - 0.3**2) * activity
    of_pathway = np.repeat(np.arange(len(PATHWAYS)), list(PATHWAYS.values()))
    level = generator.uniform(3.0, 6.0, of_pathway.size)
    noise = generator.standard_normal((orchard.size, of_pathway.size))
    shared = np.sqrt(PATHWAY_SHARE) * activity[:, of_pathway]
    return np.round(level + 0.3 * (shared + np.sqrt(1 - PATHWAY_SHARE) * noise), 3)


def _volatile_names() -> list[str]:
    return [f"voc_{name}_{k + 1:02d}" for name, count in PATHWAYS.items() for k in range(count)]


def _volatile_regions() -> list[str]:
    return [f"voc_{name}" for name, count in PATHWAYS.items() for _ in range(count)]


def _draw_outcome(
    X: NDArray[np.float64],
    names: tuple[str, ...],
    orchard: NDArray[np.intp],
    recipe: Recipe,
    generator: np.random.Generator,
) -> tuple[NDArray[Any], NDArray[np.float64]]:
    """The outcome, and the coefficients on the scale of X that made it."""
    effects = {**recipe.effects, "storage_days": recipe.storage_effect}
    used = [names.index(name) for name in effects]
    coef = np.zeros(len(names))
    coef[used] = np.array(list(effects.values())) / X[:, used].std(axis=0)
    eta = (X[:, used] - X[:, used].mean(axis=0)) @ coef[used]
    eta += recipe.orchard_effect * generator.standard_normal(orchard[-1] + 1)[orchard]
    if recipe.noise is None:
        browned = generator.random(eta.size) < expit(solve_intercept(eta, PREVALENCE) + eta)
        require(
            0 < browned.sum() < browned.size,
            f"a draw of {browned.size} lots of which {browned.sum()} browned",
            "both outcomes must be present",
            "Ask for more orchards or another random_state.",
        )
        return np.where(browned, "yes", "no"), coef
    lost = eta + recipe.noise * generator.standard_normal(eta.size)
    return np.round(MEAN_LOSS + LOSS_SCALE * lost, 1), coef * LOSS_SCALE
