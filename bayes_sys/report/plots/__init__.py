"""The pictures of the page, each one an SVG of its own."""
