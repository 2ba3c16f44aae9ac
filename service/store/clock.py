"""Times as the store keeps them, and ids that sort by time."""

from datetime import UTC, datetime, timedelta

import uuid_utils

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
MICROSECOND = timedelta(microseconds=1)


def utc_now() -> datetime:
    """The clock that processes use; tests pass their own times."""
    return datetime.now(UTC)


def to_microseconds(moment: datetime) -> int:
    """Exact integer microseconds since 1970 UTC."""
    return (moment - EPOCH) // MICROSECOND


def from_microseconds(value: int) -> datetime:
    """Inverse of `to_microseconds`."""
    return EPOCH + value * MICROSECOND


def rfc3339(moment: datetime) -> str:
    """RFC 3339 in UTC, always with six decimals, so that text sorts as time does."""
    return moment.astimezone(UTC).replace(tzinfo=None).isoformat(timespec="microseconds") + "Z"


def new_id() -> str:
    """A UUID version 7 (RFC 9562): opaque to callers, sorts by time."""
    return str(uuid_utils.uuid7())
