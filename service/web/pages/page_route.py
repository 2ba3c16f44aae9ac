"""Errors of pages are pages too: in words, with what to do next."""

from collections.abc import Callable, Coroutine
from dataclasses import dataclass
from typing import Any
from urllib.parse import quote

from fastapi import Request, Response
from fastapi.exceptions import RequestValidationError
from fastapi.routing import APIRoute
from starlette.exceptions import HTTPException
from starlette.responses import RedirectResponse

from service.errors import InvalidInput, LeastbendError, Overloaded, Unauthenticated
from service.web.pages.labels import sentences
from service.web.pages.render import render
from service.web.pages.visitors import visitor_of
from service.web.problems import STATUS
from service.web.strict_json import field_errors

ADVICE = {
    401: "Sign in with a key that an administrator gave you.",
    403: "Ask an administrator for a key that may do this.",
    404: "It may have been removed, or it belongs to somebody else. The history shows what you may see.",
    413: "Send less at once, or raise the limit in the settings of this installation.",
    422: "Mend what is named above and try again.",
    429: "Wait a little and load the page again.",
    503: "Nothing is lost. Wait a few seconds and load the page again.",
}


@dataclass(frozen=True, kw_only=True, slots=True)
class ErrorPage:
    """error.html. `title`: what went wrong in a few words; `errors`: the fields in words, if it was input."""

    title: str
    message: str
    errors: tuple[str, ...]
    advice: str
    code: str


class PageRoute(APIRoute):
    """Turns what a page's route raises into an HTML answer; 401 into the way to sign in."""

    def get_route_handler(self) -> Callable[[Request], Coroutine[Any, Any, Response]]:
        """FastAPI's documented hook."""
        inner = super().get_route_handler()

        async def handle(request: Request) -> Response:
            try:
                return await inner(request)
            except Unauthenticated:
                back = request.url.path + (f"?{request.url.query}" if request.url.query else "")
                return RedirectResponse(f"/sign-in?next={quote(back, safe='')}", status_code=303)
            except LeastbendError as error:
                return error_page(request, error)
            except RequestValidationError as error:
                return error_page(request, InvalidInput(field_errors(error.errors())))
            except HTTPException as error:  # a form that cannot be read
                return error_page(request, InvalidInput.at("", str(error.detail)))

        return handle


def error_page(request: Request, error: LeastbendError) -> Response:
    """What the error says, and what to do, with the way to the other pages for who may see them."""
    status = next(status for kind, status in STATUS if isinstance(error, kind))
    titles = {403: "Not allowed", 404: "Not found", 413: "Too large", 429: "Too many requests", 503: "Not now"}
    page = ErrorPage(
        title=titles.get(status, "That did not work"),
        message=error.message,
        errors=sentences(error) if isinstance(error, InvalidInput) else (),
        advice=ADVICE.get(status, ""),
        code=error.code,
    )
    headers = {"Retry-After": str(error.retry_after)} if isinstance(error, Overloaded) else None
    visitor = visitor_of(request)
    caller, token = (None, "") if visitor is None else (visitor.caller, visitor.form_token)
    return render("error.html", page, caller=caller, form_token=token, status=status, headers=headers)
