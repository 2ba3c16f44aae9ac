"""The last step of every page: render it for who looks, with a token for its forms."""

from fastapi import Request
from starlette.responses import Response

from service.web.pages.render import Page, render
from service.web.pages.visitors import Visitor, new_secret, token_of, with_form_cookie


def show(request: Request, visitor: Visitor, template: str, page: Page, *, status: int = 200) -> Response:
    """The page; the first one also brings the cookie that its forms need."""
    secret = visitor.secret or new_secret()
    response = render(template, page, caller=visitor.caller, form_token=token_of(secret), status=status)
    return response if visitor.secret else with_form_cookie(request, secret, response)
