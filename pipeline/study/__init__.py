"""The study file: its schema, its loading and its inheritance."""
