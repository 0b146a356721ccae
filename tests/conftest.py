"""One BLAS thread a process, so that two workers share two cores and give the same bits; and
nothing of the user's own kept results is read or written."""

import os
import tempfile

import pipeline  # noqa: F401  (fixes the number of threads before numpy is imported)
from tests.database import server

__all__ = ["server"]

os.environ["DEALWAKE_KEEP"] = tempfile.mkdtemp(prefix="dealwake-tests-")
