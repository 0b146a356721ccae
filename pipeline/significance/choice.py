"""Which test leads, by a rule fixed before the data are seen."""

from __future__ import annotations

from pipeline.significance.resampled import HANDFUL

BY_RULE = "by_rule"


def leading_test(declared: str, deals: int) -> str:
    """The key of the test that leads.

    The study's own choice if it declares one. By rule: the sample-quantile test for up to five
    deals, else the dependence-adjusted standardised t, which becomes the standardised t by
    itself when no event windows overlap (Harrington and Shrider 2007, JFQA 42, for tests that
    stand a rise of variance; Kolari and Pynnönen 2010, RFS 23, for dependence).
    """
    if declared != BY_RULE:
        return declared
    return "sample_quantile" if deals <= HANDFUL else "dependence_adjusted"
