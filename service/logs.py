"""Logs as JSON, one object a line, to standard error."""

import logging
import sys

from pythonjsonlogger.json import JsonFormatter

FIELDS = "%(asctime)s %(levelname)s %(process)d %(name)s %(message)s"
NAMES = {"asctime": "at", "levelname": "level", "process": "pid", "name": "logger"}


def log_as_json(level: str) -> None:
    """Every logger of this process, libraries' too, goes to standard error from `level` on."""
    handler = logging.StreamHandler(sys.stderr)
    formatter = JsonFormatter(FIELDS, rename_fields=NAMES, datefmt="%Y-%m-%dT%H:%M:%S%z")
    handler.setFormatter(formatter)
    logging.basicConfig(handlers=[handler], level=level, force=True)
    if level != "DEBUG":
        for chatty in ("huey", "alembic", "httpx", "httpcore", "matplotlib", "uvicorn.error"):
            logging.getLogger(chatty).setLevel(max(logging.WARNING, logging.getLevelNamesMapping()[level]))
    for own in ("uvicorn", "uvicorn.error", "uvicorn.access"):
        logging.getLogger(own).handlers.clear()
        logging.getLogger(own).propagate = True
