"""Two saved runs: what is not the same in them, and which numbers moved."""
