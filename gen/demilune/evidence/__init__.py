"""The evidence report: what was checked, as a record and as a page, and how to repeat it."""
