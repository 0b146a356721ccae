"""Regressions of deals' abnormal returns: least squares, fixed effects, selection, instruments.

Every entry point is ``fit(design: Design, options: FitOptions) -> Estimate``. It raises
:class:`~pipeline.core.findings.InputProblem` for a request that has no answer and
:class:`~pipeline.core.estimate.EstimationFailed` for one that was tried in vain.
"""
