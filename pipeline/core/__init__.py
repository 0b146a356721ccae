"""Values that every stage shares. Imports numpy and pandas only, and no stage."""
