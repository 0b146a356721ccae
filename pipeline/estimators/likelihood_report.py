"""What a joint-normal likelihood says of itself: covariance, facts, tests of the correlation."""

from __future__ import annotations

import numpy as np

from pipeline.core.estimate import NotApplicable, Tested, chi2_test, t_test, z_test
from pipeline.core.prices import Floats
from pipeline.estimators.errors import ErrorRule, factor, of_influence, positive
from pipeline.estimators.likelihood_maximum import Maximum

NULL = "the errors of choice and outcome are uncorrelated"
CAUTION = "a large p does not show that there is no selection on what was not recorded"


def likelihood_covariance(
    found: Maximum, rule: ErrorRule, names: tuple[str, ...]
) -> tuple[Floats, bool]:
    """(p, p) covariance of (γ, β, ln σ, atanh ρ): observed information or its sandwich.

    Huber (1967), White (1982). The sandwich's factors are those of maximum likelihood, n/(n - 1)
    and G/(G - 1). The second value says whether a two-way covariance was repaired.

    Raises:
        EstimationFailed: if a variance is not positive.
    """
    if rule.kind == "classical":
        return positive(found.information, names), False
    errors = of_influence(rule, found.influence, 1)
    return positive(errors.covariance, names), errors.floored


def multiplier(rule: ErrorRule) -> dict[str, float]:
    """small_sample_factor, where one number makes the covariance from the scores."""
    value = factor(rule, 1)
    return {} if np.isnan(value) else {"small_sample_factor": value}


def likelihood_words(rule: ErrorRule, otherwise: str) -> str:
    """The covariance in words; ``otherwise`` describes every kind but the classical one."""
    return "inverse of the observed information" if rule.kind == "classical" else otherwise


def facts(found: Maximum, V: Floats) -> dict[str, float]:
    """σ, ρ and λ = ρσ with delta-method errors, and how the maximum was reached."""
    slope = 1 - found.rho**2
    inner = V[-2:, -2:]
    of_lambda = np.array([found.rho * found.sigma, slope * found.sigma])
    higher = (
        {
            "higher_peak_rho": found.higher[0],
            "higher_peak_gain": found.higher[1] - found.value,
        }
        if found.higher
        else {}
    )
    return {
        **higher,
        "sigma": found.sigma,
        "se_sigma": found.sigma * float(np.sqrt(inner[0, 0])),
        "rho": found.rho,
        "se_rho": slope * float(np.sqrt(inner[1, 1])),
        "lambda": found.rho * found.sigma,
        "se_lambda": float(np.sqrt(of_lambda @ inner @ of_lambda)),
        "atanh_rho": float(np.arctanh(found.rho)),
        "log_likelihood": found.value,
        "log_likelihood_independent": found.value_independent,
        "starts": float(len(found.starts)),
        "starts_agreeing": float(sum(start.agrees for start in found.starts)),
        "gradient": found.gradient,
        "information_condition": found.condition,
        **{f"profile.{rho:g}": value - found.value for rho, value in found.profile.items()},
    }


def correlation_tests(
    found: Maximum, V: Floats, df: float, rule: ErrorRule, citation: str
) -> dict[str, Tested]:
    """Wald test of atanh ρ = 0 and the likelihood ratio against ρ = 0.

    The ratio is χ²(1) for independent rows and a right likelihood only, so it is not given
    beside robust or clustered errors.
    """
    statistic = float(np.arctanh(found.rho) / np.sqrt(V[-1, -1]))
    name, ratio = "Wald test of the correlation", "Likelihood ratio of the correlation"
    if np.isinf(df):
        wald: Tested = z_test(name, NULL, statistic, caution=CAUTION, citation=citation)
    else:
        wald = t_test(name, NULL, statistic, df, caution=CAUTION, citation=citation)
    if rule.kind != "classical":
        return {
            "no_selection": wald,
            "likelihood_ratio": NotApplicable(
                ratio, "the likelihood ratio does not allow for robust or clustered errors"
            ),
        }
    twice = max(2 * (found.value - found.value_independent), 0.0)
    return {
        "no_selection": wald,
        "likelihood_ratio": chi2_test(ratio, NULL, twice, 1, caution=CAUTION, citation=citation),
    }


def likelihood_notes(found: Maximum) -> tuple[str, ...]:
    """What a reader must know of the maximum: a higher one elsewhere, one close to the edge."""
    notes = []
    if found.higher is not None:
        rho, value = found.higher
        notes.append(
            f"The likelihood is higher by {value - found.value:.1f} at a correlation of {rho:.3f}, "
            f"far from the two-step estimate; the peak near that one, {found.rho:.3f}, is shown. "
            "Two peaks are a sign that the model does not fit: do not lead with this column."
        )
    if abs(found.rho) > 0.95:
        notes.append(
            f"The correlation of the errors is put at {found.rho:.3f}, close to one: the model is "
            "barely identified here."
        )
    return tuple(notes)
