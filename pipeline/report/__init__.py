"""From the results of a run to documents: a page, a memo, a workbook, tables and figures."""
