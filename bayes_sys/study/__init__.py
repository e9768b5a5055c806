"""The room “study”: what the user wrote, and the panel that the tables make of it."""
