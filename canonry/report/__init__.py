"""The report: one page that holds everything a reader of a study needs."""
