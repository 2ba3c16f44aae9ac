"""Templates to responses. Autoescaping is on for everything; a name that a template misspells is an error."""

from dataclasses import Field, fields
from functools import cache
from typing import Any, ClassVar, Protocol

from jinja2 import Environment, PackageLoader, StrictUndefined
from starlette.responses import HTMLResponse

from service.web.pages import numbers, words
from service.workflows.callers import Caller


class Page(Protocol):
    """A page's context: a frozen dataclass whose fields are the names in its template."""

    __dataclass_fields__: ClassVar[dict[str, Field[Any]]]


@cache
def environment() -> Environment:
    """Made when the first page is asked for."""
    made = Environment(
        loader=PackageLoader("service.web.pages"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    made.filters |= {
        "moment": numbers.moment,
        "seconds": numbers.seconds,
        "rounded": numbers.rounded,
        "plain": words.plain,
        "visible": words.visible,
        "degree_name": words.degree_name,
    }
    made.globals |= {"number": numbers.number, "words": words}
    return made


def render(
    template: str,
    page: Page,
    *,
    caller: Caller | None,
    form_token: str = "",
    status: int = 200,
    headers: dict[str, str] | None = None,
) -> HTMLResponse:
    """`page` under its field names, with who looks and the token that forms carry."""
    values = {one.name: getattr(page, one.name) for one in fields(page)}
    html = environment().get_template(template).render(caller=caller, form_token=form_token, **values)
    # Under no-referrer, which other answers carry, browsers send forms with `Origin: null`, and that is refused.
    return HTMLResponse(html, status_code=status, headers={"Referrer-Policy": "same-origin", **(headers or {})})
