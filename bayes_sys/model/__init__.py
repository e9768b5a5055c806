"""The room “model”."""
