"""The room “system”."""
