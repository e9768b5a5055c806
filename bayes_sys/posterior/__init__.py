"""The room “posterior”."""
