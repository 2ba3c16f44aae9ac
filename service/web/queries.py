"""Query parameters that a call does not know are refused, like unknown keys of a body: a misspelt filter must not
silently answer everything. In one place, for every operation of the document.
"""

from collections import Counter
from collections.abc import Iterator
from typing import Any

from fastapi import Request
from fastapi.dependencies.models import Dependant
from pydantic import BaseModel

from service.errors import FieldError, InvalidInput


def demand_known_query(request: Request) -> None:
    """Raises InvalidInput that names each parameter which is unknown, or stands twice."""
    given = Counter(name for name, _ in request.query_params.multi_items())
    if not given:
        return
    known = set(_names(request.scope["route"].dependant))
    wrong = [FieldError(f"/query/{name[:80]}", "is not a known parameter") for name in given if name not in known]
    wrong += [FieldError(f"/query/{name}", "stands twice") for name in given if name in known and given[name] > 1]
    if wrong:
        raise InvalidInput(wrong[:20])


def _names(dependant: Dependant) -> Iterator[str]:
    """Query parameters of an operation and of everything it depends on."""
    for one in dependant.query_params:
        kind: Any = one.field_info.annotation
        if isinstance(kind, type) and issubclass(kind, BaseModel):  # a model whose fields are the parameters
            yield from (field.alias or name for name, field in kind.model_fields.items())
        else:
            yield one.alias
    for inner in dependant.dependencies:
        yield from _names(inner)
