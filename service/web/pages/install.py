"""Puts the pages and their static files on an application."""

from importlib.resources import files

from fastapi import FastAPI
from starlette.staticfiles import StaticFiles

from service.web.pages import history, job, lists, signing, trying


def install(app: FastAPI) -> None:
    """Every page; the static files under /look."""
    for one in (history, job, lists, trying, signing):
        app.include_router(one.router)
    app.mount("/look", StaticFiles(directory=str(files("service.web.pages") / "static")), name="look")
