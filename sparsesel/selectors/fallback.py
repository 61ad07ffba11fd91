r"""The final step for a table that may have no columns.

"Nothing was selected" is an answer, not an accident, and a pipeline that is cross-validated must
be able to give it: the fold in which it happens has a prediction, that of the model with the
intercept alone. For weights :math:`w_i` that is the weighted mean of the outcome, or the weighted
share of every class.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray
from sklearn import get_config
from sklearn.base import BaseEstimator, MetaEstimatorMixin, clone, is_classifier
from sklearn.metrics import accuracy_score, r2_score
from sklearn.utils import get_tags
from sklearn.utils.metadata_routing import MetadataRouter, MethodMapping, process_routing
from sklearn.utils.metaestimators import available_if
from sklearn.utils.multiclass import check_classification_targets
from sklearn.utils.validation import check_array, check_is_fitted, validate_data

from sparsesel._sklearn_compat import HasMethods

_PREDICTIONS = ("predict", "predict_proba", "predict_log_proba", "decision_function")


def _estimator_has(method: str) -> Callable[[Any], bool]:
    """Whether the wrapped estimator, fitted where there is one, has a method."""

    def check(self: NullModelFallback) -> bool:
        # Raises the AttributeError of the estimator, which says more than a bare False.
        getattr(getattr(self, "estimator_", self.estimator), method)
        return True

    return check


class NullModelFallback(MetaEstimatorMixin, BaseEstimator):
    """Fit an estimator, or the intercept alone where the table has no columns.

    Parameters
    ----------
    estimator : classifier or regressor
        The final predictor. It is cloned, fitted and asked exactly as if it were not wrapped,
        unless the table has no columns.

    Attributes
    ----------
    estimator_ : estimator
        The fitted estimator; absent after a fit to a table without columns.
    is_null_ : bool
        Whether the last fit was to a table without columns.
    classes_ : ndarray of shape (K,)
        Classes, for classifiers.
    class_prior_ : ndarray of shape (K,)
        For classifiers without columns: the weighted shares of the classes.
    constant_ : float or ndarray of shape (n_outputs,)
        For regressors without columns: the weighted mean of the outcome.
    n_features_in_ : int
        Number of columns, possibly 0.
    feature_names_in_ : ndarray of shape (p,), object
        Names of the columns, where the table had names that are all str.

    Raises
    ------
    ValueError
        If `estimator` is neither a classifier nor a regressor, or the outcome is not one that the
        null model of its kind can be fitted to.

    Notes
    -----
    Metadata such as `sample_weight` belongs to the wrapped estimator and is requested there; the
    null model uses the `sample_weight` that the estimator would have been given.

    Examples
    --------
    >>> import numpy as np
    >>> from sklearn.linear_model import LogisticRegression
    >>> from sparsesel.selectors import NullModelFallback
    >>> model = NullModelFallback(LogisticRegression())
    >>> model.fit(np.empty((4, 0)), ["no", "no", "no", "yes"]).predict_proba(np.empty((1, 0)))
    array([[0.75, 0.25]])
    """

    _doc_link_module = "sparsesel"

    _parameter_constraints: ClassVar[dict[str, Any]] = {
        "estimator": [HasMethods(["fit", "predict"])]
    }

    def __init__(self, estimator: Any) -> None:
        self.estimator = estimator

    def __sklearn_tags__(self) -> Any:
        tags = super().__sklearn_tags__()
        if not hasattr(self.estimator, "__sklearn_tags__"):
            return tags
        wrapped = get_tags(self.estimator)
        tags.estimator_type = wrapped.estimator_type
        tags.classifier_tags = wrapped.classifier_tags
        tags.regressor_tags = wrapped.regressor_tags
        tags.target_tags = wrapped.target_tags
        tags.input_tags = wrapped.input_tags
        tags.non_deterministic = wrapped.non_deterministic
        return tags

    def fit(self, X: Any, y: Any, **fit_params: Any) -> NullModelFallback:
        """Fit the estimator, or the null model where X has no columns.

        Parameters
        ----------
        X : {array-like, sparse, dataframe} of shape (n, p)
            The table; p may be 0.
        y : array-like of shape (n,) or (n, n_outputs)
            The outcome.
        **fit_params : dict
            Metadata for the estimator's fit, `sample_weight` among it.

        Returns
        -------
        NullModelFallback
            The fitted model.
        """
        self._validate_params()
        if get_tags(self.estimator).estimator_type not in ("classifier", "regressor"):
            raise ValueError(
                f"estimator is {self.estimator!r}, which is neither a classifier nor a regressor. "
                "Wrap one of these: the null model is defined for them only."
            )
        params = self._routed("fit", fit_params)
        self._forget()
        self.is_null_ = _without_columns(X)
        if self.is_null_:
            self._fit_null(X, y, params.get("sample_weight"))
        else:
            self.estimator_ = clone(self.estimator).fit(X, y, **params)
            for name in ("classes_", "n_features_in_", "feature_names_in_"):
                if hasattr(self.estimator_, name):
                    setattr(self, name, getattr(self.estimator_, name))
        return self

    def _forget(self) -> None:
        """Drop what an earlier fit of the other kind left."""
        for name in [name for name in vars(self) if name.endswith("_") and name[0] != "_"]:
            delattr(self, name)

    def _fit_null(self, X: Any, y: Any, sample_weight: Any) -> None:
        """The weighted shares of the classes, or the weighted mean."""
        n_rows = self._rows(X, reset=True)
        y = check_array(y, ensure_2d=False, dtype=None, input_name="y")
        if len(y) != n_rows:
            raise ValueError(
                f"y has {len(y)} values, but X has {n_rows} rows. Give one outcome per row of X."
            )
        weight = _weights(sample_weight, n_rows)
        if not is_classifier(self.estimator):
            self.constant_ = np.average(np.asarray(y, dtype=np.float64), axis=0, weights=weight)
            return
        check_classification_targets(y)
        if y.ndim != 1:
            raise ValueError(
                f"y has shape {y.shape}. The null model of a classifier takes one outcome, y of "
                "shape (n,): fit one model per outcome."
            )
        self.classes_, codes = np.unique(y, return_inverse=True)
        shares = np.bincount(codes, weights=weight, minlength=len(self.classes_))
        self.class_prior_ = shares / shares.sum()

    def _routed(self, method: str, params: dict[str, Any]) -> dict[str, Any]:
        """Metadata for a method of the estimator, requested by it where routing is enabled."""
        if not get_config()["enable_metadata_routing"]:
            return {name: value for name, value in params.items() if value is not None}
        if not params:
            return {}
        return process_routing(self, method, **params).estimator[method]

    def get_metadata_routing(self) -> MetadataRouter:
        """Routing of metadata: everything goes to the wrapped estimator.

        Returns
        -------
        MetadataRouter
            The router.
        """
        mapping = MethodMapping()
        for method in ("fit", "score", *_PREDICTIONS):
            mapping.add(caller=method, callee=method)
        return MetadataRouter(owner=self).add(estimator=self.estimator, method_mapping=mapping)

    def _rows(self, X: Any, *, reset: bool = False) -> int:
        """Number of rows of a table, after checking that it has the columns of the fit: none."""
        X = X if hasattr(X, "shape") else np.asarray(X)
        # There is no value to look at, and scikit-learn's checks of values stumble over a pandas
        # frame without columns.
        validate_data(self, X, reset=reset, skip_check_array=True)
        return X.shape[0]

    def predict(self, X: Any, **params: Any) -> NDArray[Any]:
        """Predict the outcome.

        Parameters
        ----------
        X : {array-like, sparse, dataframe} of shape (n, p)
            The table.
        **params : dict
            Metadata for the estimator's predict.

        Returns
        -------
        ndarray of shape (n,) or (n, n_outputs)
            Predictions; without columns the most frequent class, or the mean.
        """
        check_is_fitted(self)
        if not self.is_null_:
            return self.estimator_.predict(X, **self._routed("predict", params))
        n_rows = self._rows(X)
        if is_classifier(self.estimator):
            return np.repeat(self.classes_[[np.argmax(self.class_prior_)]], n_rows)
        return np.tile(self.constant_, (n_rows, *(1,) * np.ndim(self.constant_)))

    @available_if(_estimator_has("predict_proba"))
    def predict_proba(self, X: Any, **params: Any) -> NDArray[np.float64]:
        """Probabilities of the classes.

        Parameters
        ----------
        X : {array-like, sparse, dataframe} of shape (n, p)
            The table.
        **params : dict
            Metadata for the estimator's predict_proba.

        Returns
        -------
        ndarray of shape (n, K)
            Probabilities in the order of `classes_`; without columns their shares in the fit.
        """
        check_is_fitted(self)
        if not self.is_null_:
            return self.estimator_.predict_proba(X, **self._routed("predict_proba", params))
        return np.tile(self.class_prior_, (self._rows(X), 1))

    @available_if(_estimator_has("predict_log_proba"))
    def predict_log_proba(self, X: Any, **params: Any) -> NDArray[np.float64]:
        """Logarithms of the probabilities of the classes.

        Parameters
        ----------
        X : {array-like, sparse, dataframe} of shape (n, p)
            The table.
        **params : dict
            Metadata for the estimator's predict_log_proba.

        Returns
        -------
        ndarray of shape (n, K)
            Log probabilities in the order of `classes_`.
        """
        check_is_fitted(self)
        if not self.is_null_:
            return self.estimator_.predict_log_proba(X, **self._routed("predict_log_proba", params))
        return np.tile(_log(self.class_prior_), (self._rows(X), 1))

    @available_if(_estimator_has("decision_function"))
    def decision_function(self, X: Any, **params: Any) -> NDArray[np.float64]:
        """Confidence scores of the classes.

        Parameters
        ----------
        X : {array-like, sparse, dataframe} of shape (n, p)
            The table.
        **params : dict
            Metadata for the estimator's decision_function.

        Returns
        -------
        ndarray of shape (n,) or (n, K)
            Scores; without columns the log odds of the second class, or with more than two
            classes the log shares.
        """
        check_is_fitted(self)
        if not self.is_null_:
            return self.estimator_.decision_function(X, **self._routed("decision_function", params))
        log_share = _log(self.class_prior_)
        if len(log_share) == 2:
            return np.repeat(log_share[1] - log_share[0], self._rows(X))
        return np.tile(log_share, (self._rows(X), 1))

    @available_if(_estimator_has("score"))
    def score(self, X: Any, y: Any, **params: Any) -> float:
        """Score of the predictions, as the estimator defines it.

        Parameters
        ----------
        X : {array-like, sparse, dataframe} of shape (n, p)
            The table.
        y : array-like of shape (n,) or (n, n_outputs)
            The outcome.
        **params : dict
            Metadata for the estimator's score.

        Returns
        -------
        float
            Without columns the accuracy, or the coefficient of determination.
        """
        check_is_fitted(self)
        routed = self._routed("score", params)
        if not self.is_null_:
            return self.estimator_.score(X, y, **routed)
        metric = accuracy_score if is_classifier(self.estimator) else r2_score
        return float(metric(y, self.predict(X), sample_weight=routed.get("sample_weight")))


def _without_columns(X: Any) -> bool:
    shape = X.shape if hasattr(X, "shape") else np.asarray(X).shape
    return len(shape) == 2 and shape[1] == 0


def _weights(sample_weight: Any, n_rows: int) -> NDArray[np.float64]:
    if sample_weight is None:
        return np.ones(n_rows)
    weight = check_array(
        sample_weight, ensure_2d=False, dtype=np.float64, input_name="sample_weight"
    )
    if weight.shape != (n_rows,) or (weight < 0).any() or not weight.any():
        raise ValueError(
            f"sample_weight has shape {weight.shape}, lowest value {weight.min():g} and sum "
            f"{weight.sum():g}. It must hold one value per row of X ({n_rows}), zero or positive, "
            "not all zero; None weights all rows equally."
        )
    return weight


def _log(shares: NDArray[np.float64]) -> NDArray[np.float64]:
    with np.errstate(divide="ignore"):
        return np.log(shares)
