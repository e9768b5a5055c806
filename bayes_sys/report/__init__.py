"""The room “report”."""
