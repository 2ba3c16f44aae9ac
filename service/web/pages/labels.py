"""Fields by the names that stand beside them on a page. The API names a field by JSON pointer; people do not."""

from collections.abc import Callable, Iterator
from contextlib import contextmanager

from service.errors import FieldError, InvalidInput

FIELDS = {
    "subject": "Subject",
    "x_quantity": "Quantity of x",
    "x_unit": "Unit of x",
    "y_quantity": "Quantity of y",
    "y_unit": "Unit of y",
    "table": "Table",
    "plan_id": "Named plan",
    "max_degree": "Highest degree tried",
    "weights": "Weights",
    "mpe_value": "Maximum permissible error",
    "mpe_of": "Maximum permissible error, of",
    "mpe_kind": "Maximum permissible error, as",
    "state": "State",
    "verdict": "Verdict",
    "submitted_by": "Submitted by",
    "since": "Queued from",
    "until": "Queued until",
}
PREDICATES = ("is", "must", "has", "needs", "should", "lies", "shares", "stands", "are")
"""First words of messages that go on from the name of their field, as a sentence does."""

Labeller = Callable[[str], str]


def field_label(pointer: str) -> str:
    """The name beside the field at a pointer; its own name as words where no page shows it."""
    name = pointer.rpartition("/")[2].replace("~1", "/").replace("~0", "~")
    return FIELDS.get(name, name.replace("_", " "))


def sentence(label: str, message: str) -> str:
    """Both as one sentence."""
    message = message.removeprefix("input ")
    if not label:
        return message
    return f"{label} {message}" if message.partition(" ")[0] in PREDICATES else f"{label}: {message}"


def sentences(error: InvalidInput, label: Labeller = field_label) -> tuple[str, ...]:
    """Each thing that is wrong, once."""
    return tuple(dict.fromkeys(sentence(label(one.pointer), one.message) for one in error.errors))


@contextmanager
def named_by(label: Labeller) -> Iterator[None]:
    """Errors raised here say in words where they are, and no longer by pointer."""
    try:
        yield
    except InvalidInput as error:
        raise InvalidInput([FieldError("", one) for one in sentences(error, label)]) from error
