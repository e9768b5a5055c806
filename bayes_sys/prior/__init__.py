"""The room “prior”."""
