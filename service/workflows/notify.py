"""Tell whoever asked of a job's end, signed after the Standard Webhooks specification, at least once.

What is sent: `{"type": "job.succeeded" | "job.failed" | "job.cancelled", "timestamp", "data": {job_id, subject, state,
verdict or error}}`, with headers webhook-id (the job's id: the same in every attempt), webhook-timestamp and
webhook-signature. Any 2xx answer is a receipt; otherwise it is sent again, with longer and longer pauses, for 3 days.
"""

import json
from datetime import datetime, timedelta
from ipaddress import ip_address
from typing import Protocol
from urllib.parse import urlsplit

from standardwebhooks.webhooks import Webhook

from service.errors import InvalidInput
from service.settings import Settings
from service.store import notifications
from service.store.clock import rfc3339
from service.store.database import Database
from service.store.notifications import Due
from service.workflows.callers import Caller

# After the specification's advice: soon at first, then for days.
PAUSES = tuple(timedelta(seconds=s) for s in (5, 30, 120, 600, 1800, 3600, 7200, 14400, 28800, 43200, 86400, 86400))
TAKEN_FOR = timedelta(seconds=60)
AT_ONCE = 20
LOCAL_NAMES = ("localhost", "ip6-localhost")


class Refused(Exception):
    """This address is not to be called, now or ever; the message says why."""


class Sender(Protocol):
    """Posts one body; answers the status. Raises OSError where nothing was answered, Refused where it must not."""

    def __call__(self, url: str, body: bytes, headers: dict[str, str]) -> int:
        """Send."""
        ...


def check_url(settings: Settings, caller: Caller, url: str) -> None:
    """Say at submission what can be said of the address. Raises InvalidInput at /notify_url."""
    if caller.open and settings.notify_secret is None:
        message = "without keys, notifications are signed with the setting LEASTBEND_NOTIFY_SECRET, which is not set"
        raise InvalidInput.at("/notify_url", message)
    parts = urlsplit(url)
    try:
        port_is_known = parts.port is None or 0 < parts.port < 65536
    except ValueError:
        port_is_known = False
    if parts.scheme not in ("http", "https") or not parts.hostname or not port_is_known:
        raise InvalidInput.at("/notify_url", "must be an http or https address with a host")
    if parts.username is not None or parts.fragment:
        raise InvalidInput.at("/notify_url", "must hold neither a user name nor a fragment")
    if not settings.notify_private and is_private(parts.hostname):
        raise InvalidInput.at("/notify_url", "is a private or loopback address, which this installation does not call")


def is_private(host: str) -> bool:
    """Whether an address, or a name that always means this machine, lies outside the public internet."""
    if host.lower().rstrip(".") in LOCAL_NAMES or host.lower().rstrip(".").endswith(".localhost"):
        return True
    try:
        address = ip_address(host)
    except ValueError:
        return False
    mapped = getattr(address, "ipv4_mapped", None)
    return not (mapped or address).is_global or address.is_multicast


def send_due(database: Database, settings: Settings, sender: Sender, *, now: datetime) -> int:
    """Send what is due; answers how many were tried. Many senders at once are safe."""
    with database.read() as connection:
        waiting = notifications.due(connection, now, limit=AT_ONCE)
    tried = 0
    for job_id in waiting:
        with database.write() as connection:
            due = notifications.take(connection, job_id, now=now, again_at=now + TAKEN_FOR)
        if due is None:
            continue
        tried += 1
        state, answer = _send(settings, sender, due, now)
        next_at = None
        if state == "waiting":
            if due.attempts > len(PAUSES):
                state = "given_up"
            else:
                next_at = now + PAUSES[due.attempts - 1]
        with database.write() as connection:
            notifications.settle(connection, job_id, state=state, answer=answer, next_at=next_at, now=now)
    return tried


def _send(settings: Settings, sender: Sender, due: Due, now: datetime) -> tuple[str, str]:
    secret = due.notify_secret or settings.notify_secret
    if secret is None:
        return "waiting", "there is no secret to sign with: set LEASTBEND_NOTIFY_SECRET"
    body = json.dumps(_message(due)).encode()
    headers = {
        "Content-Type": "application/json",
        "webhook-id": due.job_id,
        "webhook-timestamp": str(int(now.timestamp())),
        "webhook-signature": Webhook(secret).sign(due.job_id, now, body.decode()),
    }
    try:
        status = sender(due.url, body, headers)
    except Refused as refused:
        return "given_up", str(refused)
    except OSError as error:
        return "waiting", f"no answer: {error}"[:300]
    if 200 <= status < 300:
        return "delivered", f"answered {status}"
    return ("given_up" if status == 410 else "waiting"), f"answered {status}"  # 410 Gone: never send again


def _message(due: Due) -> dict[str, object]:
    return {
        "type": f"job.{due.state}",
        "timestamp": rfc3339(due.finished_at),
        "data": {
            "job_id": due.job_id,
            "subject": due.subject,
            "state": due.state,
            "verdict": None if due.verdict is None else json.loads(due.verdict),
            "error": None if due.error is None else json.loads(due.error),
        },
    }
