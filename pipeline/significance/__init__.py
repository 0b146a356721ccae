"""Is the average abnormal return real? Tests, dependence, paths and power."""
