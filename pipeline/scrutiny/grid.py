"""Every declared way to make the estimate, side by side: the specification curve.

Simonsohn, Simmons and Nelson (2020). Cells that share rows and regressors share one
decomposition, so that a cell is a column of a matrix product and not a fit.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field, replace

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate, EstimationFailed, t_tail
from pipeline.core.findings import InputProblem
from pipeline.core.prices import Booleans, Floats, Integers
from pipeline.estimators import absorb
from pipeline.estimators.algebra import partial_out, refusal
from pipeline.estimators.errors import ErrorRule, choose_errors, degrees_of_freedom, of_influence
from pipeline.scrutiny.ground import summed
from pipeline.scrutiny.influence import rows_of

CITATION = "Simonsohn, Simmons and Nelson (2020)"
MOST_CELLS = 2_000
LEAST_SQUARES = ("ols", "fixed_effects")
TWO_STAGES = "two_stage_least_squares"
LINEAR = (*LEAST_SQUARES, TWO_STAGES)
"""Estimators whose cells are columns of a matrix product; the others are fitted cell by cell."""
Fit = Callable[[Design, FitOptions], Estimate]
Tell = Callable[[int, int], None]


@dataclass(frozen=True, slots=True, eq=False)
class Choices:
    """What may be chosen; the first of each is the headline's.

    Attributes:
        outcomes: choice in words (window and model) -> (n,) outcome, NaN where it is missing.
        controls: choice -> names of the controls; the constant and the treatment always stay.
        winsorise: choice -> share of the outcome set to its quantile at either end, 0 to .25.
        samples: choice -> (n,) deals used.
        estimators: choice -> one of :data:`LINEAR`, or a key of ``fits``.
        fits: further estimators, each a full fit a cell.
        most_cells: a larger grid is refused.
        allow: let it be larger.
    """

    outcomes: Mapping[str, Floats]
    controls: Mapping[str, tuple[str, ...]]
    winsorise: Mapping[str, float] = field(default_factory=lambda: {"as it is": 0.0})
    samples: Mapping[str, Booleans] = field(default_factory=dict)
    estimators: Mapping[str, str] = field(default_factory=lambda: {"least squares": "ols"})
    fits: Mapping[str, Fit] = field(default_factory=dict)
    most_cells: int = MOST_CELLS
    allow: bool = False

    @property
    def cells(self) -> int:
        """How many combinations there are."""
        lists = (self.outcomes, self.controls, self.winsorise, self.estimators)
        return int(np.prod([len(item) for item in lists])) * max(1, len(self.samples))


@dataclass(frozen=True, slots=True)
class Cell:
    """One specification and its answer, NaN with the ``reason`` if it has none."""

    outcome: str
    controls: str
    winsorise: str
    sample: str
    estimator: str
    estimate: float
    std_error: float
    p_value: float
    n: int
    reason: str = ""


@dataclass(frozen=True, slots=True, eq=False)
class Block:
    """Least-squares cells with the same rows and regressors.

    ``kept`` (n_design,) rows, ``D`` (m,) treatment as recorded, ``controls`` (m, k) with effects
    taken out, ``effects`` to take out of a new treatment, ``Y`` (m, c) outcomes with controls
    taken out, ``cells`` their places in the grid.
    """

    kept: Booleans
    D: Floats
    controls: Floats
    effects: dict[str, Integers]
    Y: Floats
    cells: tuple[int, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Grid:
    """All cells, the blocks the fast ones came from, and (n, S) influences on the treatment.

    Influences of least-squares cells are at a coefficient of zero, of others at their estimate.
    ``clusters`` (n,) are the first dimension's, or the rows.
    """

    cells: tuple[Cell, ...]
    blocks: tuple[Block, ...]
    influence: Floats
    clusters: Integers


@dataclass(frozen=True, slots=True)
class Summary:
    """The curve in numbers: cells with an answer, and shares of them.

    ``same_sign`` and ``significant`` are shares with the first cell's sign, and with it and
    p < .05; the p-values are those of :func:`permutation_test`, NaN if it was not asked for.
    """

    cells: int
    failed: int
    median: float
    low: float
    high: float
    same_sign: float
    significant: float
    p_median: float = float("nan")
    p_same_sign: float = float("nan")
    p_significant: float = float("nan")


def specification_grid(
    design: Design,
    choices: Choices,
    options: FitOptions,
    tell: Tell = lambda done, total: None,
) -> Grid:
    """Every combination of the choices.

    Linear cells use HC1 or the design's clusters, the degrees of freedom of the estimators and
    t intervals; others what their fit says. A cell that cannot be estimated holds the reason.
    ``tell`` hears how many cells of how many are done.

    Raises:
        InputProblem: ``grid_too_large`` beyond the most cells unless allowed, ``grid_control`` for
            a control the design does not have.
    """
    _check(design, choices)
    samples = choices.samples or {"all deals": np.ones(design.n, dtype=np.bool_)}
    cells: list[Cell] = []
    blocks: list[Block] = []
    scores: list[Floats] = []
    for label, estimator in choices.estimators.items():
        for control_label, controls in choices.controls.items():
            slim = _with_controls(design, controls)
            for sample_label, rows in samples.items():
                head = (control_label, sample_label, label)
                if estimator in LINEAR:
                    made = _linear(slim, choices, rows, estimator, options)
                else:
                    made = _fitted(slim, choices, rows, choices.fits[estimator], options)
                for block, entries in made:
                    at = len(cells)
                    cells += [
                        Cell(key[0], head[0], key[1], head[1], head[2], *numbers)
                        for key, numbers, _ in entries
                    ]
                    scores += [influence for _, _, influence in entries]
                    if block is not None:
                        blocks.append(replace(block, cells=tuple(range(at, at + len(entries)))))
                    tell(len(cells), choices.cells)
    first = next(iter(design.clusters.values()), np.arange(design.n))
    return Grid(tuple(cells), tuple(blocks), np.column_stack(scores), first)


def _check(design: Design, choices: Choices) -> None:
    if choices.cells > choices.most_cells and not choices.allow:
        raise refusal(
            "grid_too_large",
            "scrutiny.grid",
            f"{choices.cells:,} cells",
            f"at most {choices.most_cells:,}, the key most_cells",
            "declare fewer choices, or set scrutiny.grid.allow = true",
        )
    for names in choices.controls.values():
        unknown = [name for name in names if name not in design.names]
        if unknown:
            raise refusal(
                "grid_control",
                "scrutiny.grid.control_sets",
                f"{', '.join(unknown)}, not among the controls of the study",
                f"some of {', '.join(design.names)}",
                "add it to the controls or take it out of the grid",
            )


def _with_controls(design: Design, controls: tuple[str, ...]) -> Design:
    constant = [n for n, x in zip(design.names, design.X.T, strict=True) if np.ptp(x) == 0]
    stay = [
        at
        for at, name in enumerate(design.names)
        if name in controls or name == design.treatment or name in constant
    ]
    names = tuple(design.names[at] for at in stay)
    return replace(design, X=design.X[:, stay], names=names)


Numbers = tuple[float, float, float, int, str]
Entry = tuple[tuple[str, str], Numbers, Floats]


def _linear(
    design: Design, choices: Choices, rows: Booleans, estimator: str, options: FitOptions
) -> Iterator[tuple[Block | None, list[Entry]]]:
    """Blocks of cells by which outcomes are there, so that each block shares rows."""
    patterns: dict[bytes, list[str]] = {}
    for name, y in choices.outcomes.items():
        patterns.setdefault((rows & np.isfinite(y)).tobytes(), []).append(name)
    for names in patterns.values():
        keep = rows & np.isfinite(choices.outcomes[names[0]])
        keys = [(name, tail) for name in names for tail in choices.winsorise]
        columns = [
            winsorised(choices.outcomes[name][keep], choices.winsorise[t]) for name, t in keys
        ]
        try:
            block, numbers, influence = _block(
                design, keep, np.column_stack(columns), estimator, options
            )
        except (InputProblem, EstimationFailed) as failure:
            yield None, [(key, _none(str(failure)), np.zeros(design.n)) for key in keys]
            continue
        entries = list(zip(keys, numbers, influence.T, strict=True))
        yield block if estimator in LEAST_SQUARES else None, entries


def _none(reason: str) -> Numbers:
    nan = float("nan")
    return nan, nan, nan, 0, reason


def _block(
    design: Design, keep: Booleans, Y: Floats, estimator: str, options: FitOptions
) -> tuple[Block, list[Numbers], Floats]:
    small = rows_of(design, keep)
    effects = small.effects if estimator != "ols" else {}
    at = design.names.index(design.treatment)
    inside = np.ones(small.n, dtype=np.bool_)
    if effects:
        inside = absorb.without_singletons(effects)
        effects = {name: codes[inside] for name, codes in effects.items()}
    instrumented = estimator == TWO_STAGES
    if instrumented and (not design.instruments or design.also_endogenous):
        raise EstimationFailed("two stages here need instruments for the treatment alone")
    L = len(design.instruments) if instrumented else 0
    X = small.X[inside]
    outcomes = np.column_stack([small.Z[inside], Y[inside]]) if L else Y[inside]
    clusters = {name: codes[inside] for name, codes in small.clusters.items()}
    rule = choose_errors(
        clusters, len(X), summed(options), otherwise="hc1", cluster_by_default=True
    )
    counted = absorbed = 0
    if effects:
        varies = np.ptp(X, axis=0) > 0
        varies[at] = True
        at, X = int(varies[:at].sum()), X[:, varies]
        both = absorb.demean(np.column_stack([X, outcomes]), effects)
        X, outcomes = both[:, : X.shape[1]], both[:, X.shape[1] :]
        free = {n: c for n, c in effects.items() if not absorb.nested(c, rule.clusters)}
        counted, absorbed = absorb.coefficients_of(free), absorb.coefficients_of(effects)
    D, controls = X[:, at], np.delete(X, at, axis=1)
    left = partial_out(np.column_stack([D, outcomes]), controls)
    treatment, Z, e = left[:, 0], left[:, 1 : 1 + L], left[:, 1 + L :]
    d = treatment - partial_out(treatment[:, None], Z)[:, 0] if L else treatment
    if float(d @ d) <= 1e-12 * float(D @ D) or len(X) <= X.shape[1] + absorbed:
        raise EstimationFailed("the treatment does not vary beside the controls")
    df, _ = degrees_of_freedom(rule, X.shape[1] + absorbed)
    numbers, psi = _numbers(rule, treatment, d, e, X.shape[1] + counted, df)
    place = np.flatnonzero(keep)[inside]
    influence = np.zeros((design.n, Y.shape[1]))
    influence[place] = psi
    kept = np.zeros(design.n, dtype=np.bool_)
    kept[place] = True
    raw = design.X[place, design.names.index(design.treatment)]
    return Block(kept, raw, controls, effects, e, ()), numbers, influence


def _numbers(
    rule: ErrorRule, treatment: Floats, d: Floats, e: Floats, k: int, df: float
) -> tuple[list[Numbers], Floats]:
    """Each outcome (n, c) on the treatment (n,), both with the controls out; and influences.

    ``d`` (n,) is the part of the treatment that decides: all of it, or what the instruments
    predict of it. The influences (n, c) are those at a coefficient of zero.
    """
    b = d @ e / float(d @ d)
    psi = d[:, None] * (e - np.outer(treatment, b)) / float(d @ d)
    numbers: list[Numbers] = []
    for column, value in enumerate(b):
        V = of_influence(rule, psi[:, [column]], k, unit_free=False)
        error = float(np.sqrt(V.covariance[0, 0]))
        numbers.append((float(value), error, t_tail(float(value) / error, df), len(d), ""))
    # What goes out has the null imposed: the outcome itself is the error when b is zero.
    return numbers, d[:, None] * e / float(d @ d)


def _fitted(
    design: Design, choices: Choices, rows: Booleans, fit: Fit, options: FitOptions
) -> Iterator[tuple[Block | None, list[Entry]]]:
    for name, y in choices.outcomes.items():
        keep = rows & np.isfinite(y)
        for tail, share in choices.winsorise.items():
            filled = np.where(keep, y, 0.0)
            filled[keep] = winsorised(y[keep], share)
            cut = rows_of(replace(design, y=filled), keep)
            influence = np.zeros(design.n)
            try:
                found = fit(cut, options)
            except (InputProblem, EstimationFailed) as failure:
                yield None, [((name, tail), _none(str(failure)), influence)]
                continue
            term = found.term(design.treatment)
            column = found.names.index(design.treatment)
            if found.scores is not None and len(found.scores) == keep.sum():
                influence[keep] = found.scores[:, column]
            numbers = (term["coefficient"], term["std_error"], term["p_value"], found.n, "")
            yield None, [((name, tail), numbers, influence)]


def winsorised(y: Floats, share: float) -> Floats:
    """y (n,) with a ``share`` at either end set to the quantile there.

    Raises:
        InputProblem: ``winsorise_range`` outside [0, .25].
    """
    if not 0 <= share <= 0.25:
        raise refusal(
            "winsorise_range",
            "scrutiny.grid.winsorise",
            f"{share:g}",
            "a share from 0 to .25",
            "give a share",
        )
    low, high = np.quantile(y, [share, 1 - share])
    return np.asarray(np.clip(y, low, high)) if share else y
