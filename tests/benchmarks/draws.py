"""What the simulations share: samples drawn one by one, and the rates they give."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Callable, Iterable, Mapping, Sequence
from typing import TypeVar

import numpy as np

NOMINAL = 0.05
Row = dict[str, object]
T = TypeVar("T")


def drawn(
    draw: Callable[[np.random.Generator], Mapping[str, T]], seed: Sequence[int], draws: int
) -> dict[str, list[T]]:
    """Procedure -> what it gave in each sample that it answered; a stream of its own a sample."""
    found: dict[str, list[T]] = defaultdict(list)
    for stream in np.random.SeedSequence(list(seed)).spawn(draws):
        for procedure, value in draw(np.random.default_rng(stream)).items():
            found[procedure].append(value)
    return found


def rejections(name: str, found: Mapping[str, Sequence[float]], draws: int) -> list[Row]:
    """One row a procedure whose name does not begin with an underscore: its rate and the error."""
    error = round(float(np.sqrt(NOMINAL * (1 - NOMINAL) / draws)), 4)
    return [
        {
            "design": name,
            "procedure": procedure,
            "nominal": NOMINAL,
            "rate": round(float(np.mean(values)), 4),
            "monte_carlo_se": error,
            "draws": draws,
        }
        for procedure, values in found.items()
        if not procedure.startswith("_")
    ]


def rates(rows: Iterable[Row]) -> dict[tuple[str, str], float]:
    """(design, procedure) -> rate, of the rows that hold one."""
    return {
        (str(row["design"]), str(row["procedure"])): float(row["rate"])  # type: ignore[arg-type]
        for row in rows
        if "rate" in row
    }
