"""`leastbend demo`: the real service on an invented scenario."""
