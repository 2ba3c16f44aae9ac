"""Routes: each takes a request apart, calls one workflow and shapes the answer."""
