"""Pages and report without a browser."""
