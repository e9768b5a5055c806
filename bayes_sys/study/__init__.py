"""The room “study”."""
