"""What predicts outcome and treatment from the controls, and the folds it is fitted on."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import EstimationFailed
from pipeline.core.prices import Booleans, Floats, Integers
from pipeline.estimators.errors import ErrorRule
from pipeline.estimators.propensity import fit_logit

CLIP = 0.01
TREES = 300
ALPHAS = np.logspace(-2, 4, 19)
PENALTIES = (0.001, 0.01, 0.1, 1.0, 10.0)
Predict = Callable[[Floats, Floats, Floats], Floats]
"""Controls and target of the rows fitted on, controls of the rows asked about -> prediction."""


@dataclass(frozen=True, slots=True, eq=False)
class Folds:
    """Who is predicted from whom.

    Attributes:
        order: (n,) rows in the order of their identifiers: results do not depend on how the deals
            happen to be sorted.
        fold: (n,) fold of each row of that order; all 0 when there is one.
        count: folds; with one, the rows are predicted from themselves.
        note: a sentence for the reader.
    """

    order: Integers
    fold: Integers
    count: int
    note: str

    def parts(self) -> list[tuple[Booleans, Booleans]]:
        """(rows fitted on, rows predicted) of each fold, as masks over the ordered rows."""
        if self.count == 1:
            every = np.ones(len(self.fold), dtype=np.bool_)
            return [(every, every)]
        return [(self.fold != at, self.fold == at) for at in range(self.count)]


def folds_of(design: Design, D: Floats, rule: ErrorRule, options: FitOptions) -> Folds:
    """Folds of whole clusters if the errors are clustered, else with equal shares of treated.

    Of two cluster dimensions the one with fewer clusters is kept whole. D (n,) is the treatment;
    deals with equal values are spread evenly.

    Raises:
        EstimationFailed: if there are fewer clusters than folds.
    """
    order = np.argsort(np.array(design.rows), kind="stable")
    rng = np.random.default_rng(options.seed)
    count = options.folds
    if count == 1:
        note = "Outcome and treatment are predicted on the rows they were fitted on (one fold)."
        return Folds(order, np.zeros(design.n, dtype=np.int64), 1, note)
    if rule.clusters:
        name = min(rule.clusters, key=lambda key: rule.counts[key])
        if rule.counts[name] < count:
            raise EstimationFailed(f"{rule.counts[name]} clusters by {name} for {count} folds")
        fold = _whole_clusters(rule.clusters[name][order], count, rng)
        return Folds(order, fold, count, f"Cross-fitted in {count} folds, {name} kept whole.")
    shuffled = rng.permutation(design.n)
    ranked = shuffled[np.argsort(D[order][shuffled], kind="stable")]
    fold = np.empty(design.n, dtype=np.int64)
    fold[ranked] = np.arange(design.n) % count
    return Folds(order, fold, count, f"Cross-fitted in {count} folds.")


def _whole_clusters(codes: Integers, count: int, rng: np.random.Generator) -> Integers:
    """Clusters in random order, each to the fold with the fewest rows so far."""
    _, first, inverse = np.unique(codes, return_index=True, return_inverse=True)
    # Numbered by first appearance, not by code: codes may be renamed without moving a fold.
    number = np.empty(len(first), dtype=np.int64)
    number[np.argsort(first)] = np.arange(len(first))
    member = number[inverse.reshape(-1)]
    sizes = np.bincount(member)
    filled = np.zeros(count)
    of_cluster = np.empty(len(sizes), dtype=np.int64)
    for cluster in rng.permutation(len(sizes)):
        of_cluster[cluster] = int(filled.argmin())
        filled[of_cluster[cluster]] += sizes[cluster]
    return np.asarray(of_cluster[member], dtype=np.int64)


def mean_learner(options: FitOptions) -> Predict:
    """The regression of ``options.learner``: least squares, ridge on squares and products, forest.

    Ridge chooses its penalty by leave-one-out error (Golub, Heath and Wahba 1979); the forest has
    300 trees with leaves of five (Breiman 2001).
    """
    return {"parametric": _lines, "penalised": _ridge, "forest": _forest(options.seed)}[
        options.learner
    ]


def probability_learner(options: FitOptions, names: tuple[str, ...]) -> Predict:
    """As :func:`mean_learner` for a target of 0 and 1: logit, penalised logit, forest."""

    def logit(X: Floats, d: Floats, at: Floats) -> Floats:
        fit = fit_logit(d > 0.5, X, names)
        return np.asarray(1 / (1 + np.exp(-at @ fit.coefficients)))

    return {
        "parametric": logit,
        "penalised": _penalised_logit,
        "forest": _forest(options.seed, classify=True),
    }[options.learner]


def _lines(X: Floats, y: Floats, at: Floats) -> Floats:
    size = np.linalg.norm(X, axis=0)
    size = np.where(size > 0, size, 1.0)
    # Least norm where an arm lacks a variable's variation: that variable then predicts nothing.
    b = np.linalg.lstsq(X / size, y, rcond=1e-10)[0]
    return np.asarray(at / size @ b)


def _features(X: Floats, at: Floats) -> tuple[Floats, Floats]:
    """Standardised controls, their squares and products, standardised again by the rows fitted."""
    from sklearn.preprocessing import PolynomialFeatures, StandardScaler

    varies = np.ptp(X, axis=0) > 1e-12 * np.abs(X).max(axis=0, initial=0.0)
    X, at = X[:, varies], at[:, varies]
    for step in (StandardScaler(), PolynomialFeatures(2, include_bias=False), StandardScaler()):
        X, at = step.fit_transform(X), step.transform(at)
    return X, at


def _ridge(X: Floats, y: Floats, at: Floats) -> Floats:
    from sklearn.linear_model import RidgeCV

    centre, spread = float(y.mean()), float(y.std()) or 1.0
    X, at = _features(X, at)
    if X.shape[1] == 0:
        return np.full(len(at), centre)
    found = RidgeCV(alphas=ALPHAS).fit(X, (y - centre) / spread)
    return np.asarray(centre + spread * found.predict(at))


def _penalised_logit(X: Floats, d: Floats, at: Floats) -> Floats:
    from sklearn.linear_model import LogisticRegression
    from sklearn.model_selection import StratifiedKFold

    def logit(C: float) -> LogisticRegression:
        return LogisticRegression(C=C, solver="newton-cholesky", tol=1e-10, max_iter=200)

    X, at = _features(X, at)
    if X.shape[1] == 0:
        return np.full(len(at), float(d.mean()))
    label = (d > 0.5).astype(int)
    inner = StratifiedKFold(min(3, int(np.bincount(label).min())))
    best, least = PENALTIES[0], np.inf
    for C in PENALTIES:
        loss = 0.0
        for fitted, asked in inner.split(X, label):
            p = logit(C).fit(X[fitted], label[fitted]).predict_proba(X[asked])
            loss -= float(np.log(np.clip(p[np.arange(len(p)), label[asked]], 1e-15, 1)).sum())
        if loss < least:
            best, least = C, loss
    return np.asarray(logit(best).fit(X, label).predict_proba(at)[:, 1])


def _forest(seed: int, *, classify: bool = False) -> Predict:
    def fit(X: Floats, y: Floats, at: Floats) -> Floats:
        from sklearn.ensemble import RandomForestClassifier, RandomForestRegressor

        centre, spread = float(y.mean()), float(y.std()) or 1.0
        scale = np.where(np.ptp(X, axis=0) > 0, X.std(axis=0), 1.0)
        X, at = X / scale, at / scale
        if classify:
            many = RandomForestClassifier(TREES, min_samples_leaf=5, random_state=seed, n_jobs=1)
            return np.asarray(many.fit(X, y > 0.5).predict_proba(at)[:, 1])
        trees = RandomForestRegressor(TREES, min_samples_leaf=5, random_state=seed, n_jobs=1)
        return np.asarray(centre + spread * trees.fit(X, (y - centre) / spread).predict(at))

    return fit


def cross_fitted(
    folds: Folds, learn: Predict, X: Floats, target: Floats, use: Booleans | None = None
) -> Floats:
    """(n,) prediction of ``target`` for every row from the other folds' rows in ``use``.

    X (n, p), all in the design's own order. Raises :class:`EstimationFailed` if a fold leaves
    fewer than two rows to fit on, or only one value of a treatment.
    """
    X, target = X[folds.order], target[folds.order]
    use = np.ones(len(target), dtype=np.bool_) if use is None else use[folds.order]
    found = np.empty(len(target))
    for fitted, asked in folds.parts():
        rows = fitted & use
        if rows.sum() < 2:
            raise EstimationFailed("a fold leaves fewer than two deals of an arm: use fewer folds")
        found[asked] = learn(X[rows], target[rows], X[asked])
    back = np.empty_like(found)
    back[folds.order] = found
    return back
