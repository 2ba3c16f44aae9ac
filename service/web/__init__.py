"""The HTTP service: FastAPI application, request and response schemas, routes, one error map."""
