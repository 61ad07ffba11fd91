"""The models of the features by name: a new one is one file and one line here.

A model is a frozen dataclass with ``fit(X, covariates=, sample_weight=, feature_groups=)``; what it
returns has ``s``, ``has_copy``, ``draw`` and ``assumptions`` (`_model.FeatureModel` and
`_model.FittedModel`).  The contract tests run over this table.
"""

from __future__ import annotations

from sparsesel.knockoffs.copula import CopulaModel
from sparsesel.knockoffs.fixed_x import FixedXModel
from sparsesel.knockoffs.gaussian import GaussianModel

FEATURE_MODELS = {
    "gaussian": GaussianModel,
    "copula": CopulaModel,
    "fixed_x": FixedXModel,
}
