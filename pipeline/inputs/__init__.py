"""From the analyst's files to typed tables, with every finding at once."""
