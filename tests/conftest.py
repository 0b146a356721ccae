"""One BLAS thread a process: two test workers share two cores and give the same bits."""

import pipeline  # noqa: F401  (fixes the number of threads before numpy is imported)
