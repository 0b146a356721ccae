"""The arrays an estimator may see, and nothing else."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from pipeline.core.prices import Booleans, Floats, Integers


@dataclass(frozen=True, slots=True, eq=False)
class SelectionRows:
    """All candidates, those that announced and those that did not.

    Attributes:
        W: (A, q) regressors of the decision to announce, a constant first.
        names: q names.
        excluded: the names that enter this equation and not the outcome.
        selected: (A,) whether the candidate's deal is a row of the design.
        outcome_row: (A,) the row of the design for a selected candidate, -1 otherwise.
        clusters: name -> (A,) integer codes.
    """

    W: Floats
    names: tuple[str, ...]
    excluded: tuple[str, ...]
    selected: Booleans
    outcome_row: Integers
    clusters: dict[str, Integers] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, eq=False)
class Design:
    """One sample, one mask: every array has the same n rows.

    Attributes:
        y: (n,) outcome, decimal.
        X: (n, k) regressors: the constant, the treatment, the controls, in that order.
        names: k names.
        treatment: name of the regressor whose coefficient is the question.
        effects: fixed effect -> (n,) integer codes from 0.
        clusters: cluster dimension -> (n,) integer codes from 0.
        Z: (n, L) excluded instruments; L may be 0.
        instruments: L names.
        also_endogenous: further regressors that the instruments move, beside the treatment; one
            that is taken out of X is no longer endogenous.
        selection: the candidates, if the study models who announces.
        rows: n deal identifiers.
        outcome: how the outcome is called on a page, e.g. ``CAR[-1, +1]``.
        outcome_variance: (n,) variance of the error with which each outcome was measured, the
            outcome's unit squared, or None where it is not known.

    Raises:
        ValueError: if a shape disagrees or a value is not finite.
    """

    y: Floats
    X: Floats
    names: tuple[str, ...]
    treatment: str
    rows: tuple[str, ...]
    outcome: str
    effects: dict[str, Integers] = field(default_factory=dict)
    clusters: dict[str, Integers] = field(default_factory=dict)
    Z: Floats = field(default_factory=lambda: np.empty((0, 0)))
    instruments: tuple[str, ...] = ()
    selection: SelectionRows | None = None
    outcome_variance: Floats | None = None
    also_endogenous: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        n = len(self.y)
        if self.X.shape != (n, len(self.names)) or len(self.rows) != n:
            raise ValueError(f"X has shape {self.X.shape}, expected {(n, len(self.names))}")
        if self.instruments and self.Z.shape != (n, len(self.instruments)):
            raise ValueError(f"Z has shape {self.Z.shape}, expected {(n, len(self.instruments))}")
        for codes in (*self.effects.values(), *self.clusters.values()):
            if codes.shape != (n,):
                raise ValueError("effects and clusters need one code a row")
        if self.treatment and self.treatment not in self.names:
            raise ValueError(f"treatment {self.treatment} is not a regressor")
        if self.treatment and self.treatment in self.also_endogenous:
            raise ValueError("also_endogenous must name regressors other than the treatment")
        if not all(np.isfinite(array).all() for array in (self.y, self.X, self.Z)):
            raise ValueError("y, X and Z must be finite: rows with gaps are dropped before")
        variance = self.outcome_variance
        if variance is not None and (variance.shape != (n,) or not (variance >= 0).all()):
            raise ValueError("outcome_variance needs one value a row, none negative")

    @property
    def n(self) -> int:
        """Rows."""
        return len(self.y)

    @property
    def endogenous(self) -> tuple[str, ...]:
        """The regressors the instruments move, the treatment first."""
        return (self.treatment, *(n for n in self.also_endogenous if n in self.names))


COVARIANCES = ("auto", "classical", "hc0", "hc1", "hc2", "hc3", "cr2", "cr3")
"""What a study may ask for; ``auto`` leaves the choice to the estimator. ``cr2`` and ``cr3``
cluster by the design's one dimension."""


LEARNERS = ("parametric", "penalised", "forest")
"""Straight lines and a logit; the same with squares and products, penalised; random forests."""


@dataclass(frozen=True, slots=True)
class FitOptions:
    """What a person may choose about a fit.

    Attributes:
        level: confidence level of every interval, between .5 and 1.
        covariance: one of :data:`COVARIANCES`; anything but ``auto`` excludes ``cluster``.
        cluster: whether to cluster by the design's one or two dimensions.
        allow_functional_form: accept a selection model without an excluded variable, identified
            by the curvature of the inverse Mills ratio alone.
        learner: how nuisance functions are learnt, one of :data:`LEARNERS`.
        folds: parts of the sample for cross-fitting, 2 to 20; 1 fits and predicts on the same rows.
        matches: nearest deals a deal is compared with in matching, at least 1.
        draws: bootstrap draws for the columns that offer one; 0 leaves the bootstrap out.
        seed: of every random choice inside a fit.

    Raises:
        ValueError: if a value is none of these, or both kinds of covariance are asked for.
    """

    level: float = 0.95
    covariance: str = "auto"
    cluster: bool = False
    allow_functional_form: bool = False
    learner: str = "penalised"
    folds: int = 5
    matches: int = 1
    draws: int = 0
    seed: int = 20260301

    def __post_init__(self) -> None:
        if not 0.5 <= self.level < 1:
            raise ValueError(f"level must be in [.5, 1). Got {self.level} instead.")
        if self.covariance not in COVARIANCES:
            raise ValueError(f"covariance must be one of {COVARIANCES}. Got {self.covariance}.")
        if self.cluster and self.covariance != "auto":
            raise ValueError(f"cluster and covariance {self.covariance} exclude each other")
        if self.learner not in LEARNERS:
            raise ValueError(f"learner must be one of {LEARNERS}. Got {self.learner} instead.")
        if not 1 <= self.folds <= 20:
            raise ValueError(f"folds must be from 1 to 20. Got {self.folds} instead.")
        if self.matches < 1:
            raise ValueError(f"matches must be at least 1. Got {self.matches} instead.")
        if self.draws < 0:
            raise ValueError(f"draws must not be negative. Got {self.draws} instead.")
