"""The error tree. Codes are stable promises to callers; nothing here knows HTTP.

LeastbendError
├── InvalidInput          bad data or plan: names the field(s) by RFC 6901 pointer
│   └── MalformedInput    the body could not be read at all (not JSON, bad CSV, ...)
├── TooLarge              a stated limit was exceeded
├── NotFound              no such dataset, job, plan, ...
├── Conflict              the request contradicts the state of what it names
├── Forbidden             the caller may not do this
│   └── Unauthenticated   no key, or not a valid one
├── Overloaded            try again after `retry_after` seconds
│   └── RateLimited       this caller has asked too often
└── Unusable              the installation cannot run (database too new, disk full, ...)
"""

from collections.abc import Sequence
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class FieldError:
    """One thing wrong with the input: where (RFC 6901 JSON pointer) and what."""

    pointer: str
    message: str

    def __str__(self) -> str:
        """Both in one line."""
        return f"{self.pointer} {self.message}" if self.pointer else self.message


class LeastbendError(Exception):
    """Base of everything the service raises on purpose."""

    code = "error"

    def __init__(self, message: str, *, code: str | None = None) -> None:
        super().__init__(message)
        self.message = message
        if code is not None:
            self.code = code


class InvalidInput(LeastbendError):
    """The data or the plan breaks a rule; `errors` names each field."""

    code = "invalid_input"

    def __init__(self, errors: Sequence[FieldError], *, message: str | None = None, code: str | None = None) -> None:
        first = str(errors[0]) if errors else "invalid input"
        super().__init__(message or first, code=code)
        self.errors = tuple(errors)

    @classmethod
    def at(cls, pointer: str, message: str, *, code: str | None = None) -> "InvalidInput":
        """One error at one place, the common case."""
        return cls([FieldError(pointer, message)], code=code)


class MalformedInput(InvalidInput):
    """The body cannot be read as what its content type says."""

    code = "malformed_input"


class TooLarge(LeastbendError):
    """A stated limit was exceeded; the message gives the limit."""

    code = "too_large"


class NotFound(LeastbendError):
    """The thing named does not exist, or the caller may not know that it does."""

    code = "not_found"


class Conflict(LeastbendError):
    """The request contradicts the present state."""

    code = "conflict"


class Forbidden(LeastbendError):
    """The caller is known and may not do this."""

    code = "forbidden"


class Unauthenticated(Forbidden):
    """No key was given, or not a valid one."""

    code = "unauthenticated"


class Overloaded(LeastbendError):
    """Not now: try again after `retry_after` seconds."""

    code = "overloaded"

    def __init__(self, message: str, *, retry_after: int, code: str | None = None) -> None:
        super().__init__(message, code=code)
        self.retry_after = retry_after


class RateLimited(Overloaded):
    """This caller has asked too often: try again after `retry_after` seconds."""

    code = "rate_limited"


class Unusable(LeastbendError):
    """The installation cannot run as it is; the message says what to do."""

    code = "unusable"
