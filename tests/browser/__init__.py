"""Pages in a real browser."""
