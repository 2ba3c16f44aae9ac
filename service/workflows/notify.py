"""Tell whoever asked of a job's end, signed after the Standard Webhooks specification, at least once.

What is sent: `{"type": "job.succeeded" | "job.failed" | "job.cancelled", "timestamp", "data": {job_id, subject, state,
verdict or error}}`, with headers webhook-id (the job's id: the same in every attempt), webhook-timestamp and
webhook-signature. Any 2xx answer is a receipt; otherwise it is sent again, with longer and longer pauses, for 3 days.
"""

import json
import logging
import re
import socket
from collections.abc import Callable
from datetime import datetime, timedelta
from ipaddress import IPv4Address, IPv6Address, IPv6Network, ip_address
from typing import Protocol

import httpx
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
# Labels of 1 to 63 characters (RFC 1035), or an IPv6 address: what a resolver can be asked for.
NAME = re.compile(r"(?=.{1,253}$)[\w-]{1,63}(\.[\w-]{1,63})*\.?|[0-9A-Fa-f:.]+")
NAT64 = IPv6Network("64:ff9b::/96")
# What Python 3.11 counts as global and leads nowhere public, whichever IPv4 address it holds: IPv4-compatible and
# IPv4-translated addresses (RFC 4291, 2765), local NAT64 (RFC 8215), site-local (RFC 3879), segment routing (RFC 9602),
# documentation (RFC 9637).
NOT_PUBLIC = tuple(
    IPv6Network(one) for one in ("::/96", "::ffff:0:0:0/96", "64:ff9b:1::/48", "fec0::/10", "5f00::/16", "3fff::/20")
)

logger = logging.getLogger(__name__)


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
    try:
        parts = httpx.URL(url)  # as the sender reads it
        host, port = parts.host, parts.port
    except (httpx.InvalidURL, ValueError):
        parts, host, port = httpx.URL(""), "", None
    if parts.scheme not in ("http", "https") or not NAME.fullmatch(host) or (port is not None and not 0 < port < 65536):
        raise InvalidInput.at("/notify_url", "must be an http or https address with a host")
    if parts.userinfo or parts.fragment:
        raise InvalidInput.at("/notify_url", "must hold neither a user name nor a fragment")
    if not settings.notify_private and is_private(host):
        raise InvalidInput.at("/notify_url", "is a private or loopback address, which this installation does not call")


def is_private(host: str) -> bool:
    """Whether an address, or a name that always means this machine, lies outside the public internet."""
    name = host.lower().rstrip(".")
    if name in LOCAL_NAMES or name.endswith(".localhost"):
        return True
    try:
        address = ip_address(host)
    except ValueError:
        try:
            address = IPv4Address(socket.inet_aton(name))  # 127.1, 0x7f000001, 2130706433: systems take these, too
        except OSError:
            return False
    if any(address in network for network in NOT_PUBLIC):
        return True
    return any(not one.is_global or one.is_multicast for one in (address, *_within(address)))


def _within(address: IPv4Address | IPv6Address) -> list[IPv4Address]:
    """IPv4 addresses that an IPv6 address leads to: mapped, 6to4 (RFC 3056), Teredo (RFC 4380), NAT64 (RFC 6052)."""
    if isinstance(address, IPv4Address):
        return []
    found = [address.ipv4_mapped, address.sixtofour, *(address.teredo or ())]
    if address in NAT64:
        found.append(IPv4Address(address.packed[-4:]))
    return [one for one in found if one is not None]


def send_due(database: Database, settings: Settings, sender: Sender, *, clock: Callable[[], datetime]) -> int:
    """Send what is due; answers how many were tried. Many senders at once are safe."""
    with database.read() as connection:
        waiting = notifications.due(connection, clock(), limit=AT_ONCE)
    tried = 0
    for job_id in waiting:
        now = clock()
        with database.write() as connection:
            due = notifications.take(connection, job_id, now=now, again_at=now + TAKEN_FOR)
        if due is None:
            continue
        tried += 1
        state, answer = _try(settings, sender, due, now)
        next_at = None
        if state == "waiting":
            if due.attempts > len(PAUSES):
                state = "given_up"
            else:
                next_at = now + PAUSES[due.attempts - 1]
        with database.write() as connection:
            notifications.settle(connection, job_id, state=state, answer=answer, next_at=next_at, now=now)
    return tried


def _try(settings: Settings, sender: Sender, due: Due, now: datetime) -> tuple[str, str]:
    """State and answer. What goes wrong with one, whatever it is, must not hold up the others: it is tried again."""
    try:
        return _send(settings, sender, due, now)
    except Exception as error:
        logger.exception("the notification of job %s could not be sent", due.job_id)
        return "waiting", f"could not be sent: {type(error).__name__}"


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
