"""Sends notifications from the sweeping process, and keeps them from reaching into private networks."""

import asyncio
import logging
import socket
import ssl
import threading
from collections.abc import Callable
from datetime import datetime
from ipaddress import ip_address

import httpx
from sqlalchemy.exc import SQLAlchemyError

from service.errors import LeastbendError
from service.settings import Settings
from service.store.clock import utc_now
from service.store.database import open_database
from service.workflows.notify import Refused, is_private, send_due

THREADS = 4  # so that one address that does not answer holds up no other
LOOK_SECONDS = 1.0
TIMEOUT = httpx.Timeout(10.0, connect=5.0)
WHOLE_SECONDS = 15.0  # of one exchange

logger = logging.getLogger(__name__)
Resolve = Callable[[str, int], list[str]]


def resolve(host: str, port: int) -> list[str]:
    """Every address of a name, as the system finds them. Raises OSError."""
    found = socket.getaddrinfo(host, port, type=socket.SOCK_STREAM)
    return list(dict.fromkeys(str(one[4][0]) for one in found))


class Poster:
    """Posts to the address that was checked: the name is looked up once, so it cannot come to mean another later.

    Redirects are not followed, proxies of the environment not used, and of the answer only the status is read.
    """

    def __init__(self, *, allow_private: bool, resolve: Resolve = resolve, seconds: float = WHOLE_SECONDS) -> None:
        self._allow_private = allow_private
        self._resolve = resolve
        self._seconds = seconds
        self._trust = httpx.create_ssl_context(trust_env=False)

    def __call__(self, url: str, body: bytes, headers: dict[str, str]) -> int:
        """The status of the answer. Raises Refused; OSError where there was no answer."""
        try:
            target = httpx.URL(url)
            addresses = self._resolve(target.host, target.port or (443 if target.scheme == "https" else 80))
        except (httpx.InvalidURL, ValueError) as error:  # of which UnicodeError: a name that cannot be asked for
            raise Refused(f"the address cannot be used: {error}"[:300]) from error
        if not self._allow_private and (not addresses or any(is_private(one) for one in addresses)):
            raise Refused(f"{target.host} has a private or loopback address, which is not called")
        pinned = target.copy_with(host=str(ip_address(addresses[0])))
        sent = {**headers, "Host": target.netloc.decode("ascii"), "User-Agent": "leastbend"}
        extensions = {"sni_hostname": target.host} if target.scheme == "https" else {}
        try:
            return asyncio.run(self._post(pinned, body, sent, extensions))
        except TimeoutError as error:
            raise OSError(f"nothing within {self._seconds:g} s") from error
        except (httpx.HTTPError, ssl.SSLError) as error:
            raise OSError(f"{type(error).__name__}: {error}") from error

    async def _post(self, url: httpx.URL, body: bytes, headers: dict[str, str], extensions: dict[str, str]) -> int:
        # A timeout of each step alone would let an address that answers a byte at a time hold a sender for hours.
        async with (
            asyncio.timeout(self._seconds),
            httpx.AsyncClient(timeout=TIMEOUT, trust_env=False, follow_redirects=False, verify=self._trust) as http,
            http.stream("POST", url, content=body, headers=headers, extensions=extensions) as answer,
        ):
            return answer.status_code


class Notifier(threading.Thread):
    """One of a few threads that send what is due, each with a connection of its own."""

    def __init__(self, settings: Settings, *, now: Callable[[], datetime] = utc_now) -> None:
        super().__init__(name="notifier", daemon=True)
        self._settings = settings
        self._now = now
        self._pause = threading.Event()

    def run(self) -> None:
        """Send for ever; the thread ends with its process."""
        database = open_database(self._settings, durable=False)
        poster = Poster(allow_private=self._settings.notify_private)
        while not self._pause.wait(LOOK_SECONDS):
            try:
                while send_due(database, self._settings, poster, clock=self._now):
                    pass
            except (LeastbendError, SQLAlchemyError) as error:
                logger.warning("notifications wait: %s", error)
            except Exception:
                logger.exception("notifications wait")  # a thread that ended would be missed by nobody


def start_notifiers(settings: Settings) -> None:
    """In the process that sends."""
    for _ in range(THREADS):
        Notifier(settings).start()
