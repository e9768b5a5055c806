"""The room “sampling”."""
