"""A study file proposed from the analyst's own tables: what each is, and which column is which."""
