"""The room “blocks”."""
