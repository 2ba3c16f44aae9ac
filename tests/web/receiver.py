"""Somebody who is told: an HTTP server that keeps what it gets and answers as the test wants."""

import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from typing import Any

Answer = Callable[[BaseHTTPRequestHandler, int], None]


@dataclass
class Receiver:
    """`got`: path, headers and body of each request; `answer` is called with the handler and the number of requests."""

    port: int = 0
    answer: Answer = field(default=lambda handler, _number: simple(handler, 204))
    got: list[tuple[str, dict[str, str], bytes]] = field(default_factory=list)
    arrived: threading.Event = field(default_factory=threading.Event)

    @property
    def url(self) -> str:
        return f"http://127.0.0.1:{self.port}/told?by=leastbend"


def simple(handler: BaseHTTPRequestHandler, status: int, **headers: str) -> None:
    handler.send_response(status)
    for name, value in headers.items():
        handler.send_header(name, value)
    handler.send_header("Content-Length", "0")
    handler.end_headers()


@contextmanager
def receiving(answer: Answer | None = None) -> Iterator[Receiver]:
    """A receiver on a free port of this machine."""
    receiver = Receiver() if answer is None else Receiver(answer=answer)

    class Handler(BaseHTTPRequestHandler):
        protocol_version = "HTTP/1.1"

        def do_POST(self) -> None:
            body = self.rfile.read(int(self.headers["Content-Length"]))
            receiver.got.append((self.path, dict(self.headers), body))
            receiver.arrived.set()
            receiver.answer(self, len(receiver.got))

        do_GET = do_POST

        def log_message(self, *_: Any) -> None:
            """Says nothing."""

    server = ThreadingHTTPServer(("127.0.0.1", 0), Handler)
    server.daemon_threads = True
    receiver.port = server.server_address[1]
    thread = threading.Thread(target=server.serve_forever, args=(0.02,))
    thread.start()
    try:
        yield receiver
    finally:
        server.shutdown()
        thread.join()
        server.server_close()
