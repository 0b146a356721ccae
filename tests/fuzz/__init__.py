"""Readers fed with broken files: see :mod:`tests.fuzz.run`."""
