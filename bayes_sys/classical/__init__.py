"""The room “classical”."""
