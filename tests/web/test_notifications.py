"""Telling of a job's end: signed as Standard Webhooks has it, again and again until received, never into private nets.

Steps are run with an injected clock; the last tests run the real service.
"""

import contextlib
import json
import signal
import subprocess
import sys
import time
from datetime import UTC, datetime, timedelta
from http.server import BaseHTTPRequestHandler
from pathlib import Path
from typing import Any

import pytest
from standardwebhooks.webhooks import Webhook, WebhookVerificationError

from service.client import Client
from service.settings import Settings
from service.store.records import NotificationRecord
from service.worker.notifier import Notifier, Poster
from service.workflows.callers import LOCAL, create_key
from service.workflows.cancel import cancel_job
from service.workflows.notify import PAUSES, TAKEN_FOR, send_due
from service.workflows.read import read_job
from service.workflows.submit import Submission
from tests.jobs import Desk, calibration
from tests.web.real import make_key_and_secret, real_service
from tests.web.receiver import receiving, simple

SECRET = "whsec_" + "MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw"


class Notified:
    """One job of one submitter that has ended, and the steps of telling of it."""

    def __init__(self, desk: Desk, url: str) -> None:
        self.desk = desk
        self.start = datetime.now(UTC)  # the library demands fresh timestamps
        self.key, self.secret = create_key(desk.database, name="anna", role="submit", now=self.start)
        self.settings = desk.settings.model_copy(update={"notify_private": True})
        asked = Submission(dataset=calibration(1), notify_url=url)
        desk = Desk(desk.database, desk.transport, self.settings)
        self.job_id = desk.submit(asked)
        self.poster: Any = Poster(allow_private=True, seconds=2)

    def end(self) -> None:
        cancel_job(self.desk.database, self.job_id, by="anna", now=self.start)

    def send(self, seconds: float = 0) -> int:
        moment = self.start + timedelta(seconds=seconds)
        return send_due(self.desk.database, self.settings, self.poster, clock=lambda: moment)

    @property
    def state(self) -> NotificationRecord:
        _, found = read_job(self.desk.database, LOCAL, self.job_id)
        assert found is not None
        return found


@pytest.fixture
def desk(database: Any, transport: Any, settings: Settings) -> Desk:
    # Where the receiver of the test is may be called.
    return Desk(database, transport, settings.model_copy(update={"notify_private": True}))


def test_who_is_told_can_verify_it(desk: Desk) -> None:
    with receiving() as receiver:
        told = Notified(desk, receiver.url)
        assert told.send() == 0  # the job has not ended
        told.end()
        assert told.send() == 1
        path, headers, body = receiver.got[0]
        assert path == "/told?by=leastbend"
        message = Webhook(told.secret).verify(body, headers)
        assert message["type"] == "job.cancelled"
        assert message["data"]["job_id"] == told.job_id == headers["webhook-id"]
        assert message["data"]["state"] == "cancelled"
        with pytest.raises(WebhookVerificationError):
            Webhook(told.secret).verify(body.replace(b"cancelled", b"succeeded"), headers)
        with pytest.raises(WebhookVerificationError):
            Webhook(SECRET).verify(body, headers)
        assert (told.state.state, told.state.attempts, told.state.last_answer) == ("delivered", 1, "answered 204")
        assert told.state.next_at is None
        assert told.send(10**6) == 0
        assert len(receiver.got) == 1


def test_it_is_sent_again_with_longer_pauses_until_it_is_received(desk: Desk) -> None:
    answers = [500, 503, 404, 200]
    with receiving(lambda handler, number: simple(handler, answers[number - 1])) as receiver:
        told = Notified(desk, receiver.url)
        told.end()
        at = 0.0
        for number, pause in enumerate(PAUSES[:3]):
            assert told.send(at) == 1
            assert (told.state.state, told.state.attempts) == ("waiting", number + 1)
            assert told.state.last_answer == f"answered {answers[number]}"
            assert told.state.next_at == told.start + timedelta(seconds=at) + pause
            at += pause.total_seconds()
            assert told.send(at - 0.001) == 0
        assert told.send(at) == 1
        assert (told.state.state, told.state.attempts) == ("delivered", 4)
        assert len({headers["webhook-id"] for _, headers, _ in receiver.got}) == 1
        assert len({body for _, _, body in receiver.got}) == 1
        for _, headers, body in receiver.got:  # each attempt has a timestamp and a signature of its own
            Webhook(told.secret).verify(body, headers)
        assert len({headers["webhook-timestamp"] for _, headers, _ in receiver.got}) == 4


def test_one_that_cannot_be_sent_at_all_is_tried_again_and_holds_up_nobody(desk: Desk) -> None:
    told = Notified(desk, "http://hooks.example/")
    other = Desk(desk.database, desk.transport, told.settings).submit(
        Submission(dataset=calibration(2), notify_url="http://other.example/")
    )
    told.end()
    cancel_job(desk.database, other, by="anna", now=told.start)
    sent = list[str]()

    def sender(url: str, _body: bytes, _headers: dict[str, str]) -> int:
        sent.append(url)
        if "hooks" in url:
            raise ZeroDivisionError
        return 204

    told.poster = sender
    assert told.send() == 2
    assert sorted(sent) == ["http://hooks.example/", "http://other.example/"]
    assert (told.state.state, told.state.last_answer) == ("waiting", "could not be sent: ZeroDivisionError")
    assert told.state.next_at == told.start + PAUSES[0]
    assert told.send(PAUSES[0].total_seconds()) == 1


def test_a_thread_that_sends_outlives_any_error(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    notifier = Notifier(Settings(data_dir=tmp_path))
    looks = list[int]()

    def look(*_: object, **__: object) -> int:
        looks.append(len(looks))
        if len(looks) == 3:
            notifier._pause.set()
            return 0
        raise ZeroDivisionError

    monkeypatch.setattr("service.worker.notifier.send_due", look)
    monkeypatch.setattr("service.worker.notifier.LOOK_SECONDS", 0.001)
    notifier.start()
    notifier.join(timeout=30)
    assert looks == [0, 1, 2]


def test_it_is_given_up_after_the_last_pause(desk: Desk) -> None:
    told = Notified(desk, "http://hooks.example/")
    told.end()
    sent = list[str]()

    def nobody(url: str, _body: bytes, _headers: dict[str, str]) -> int:
        sent.append(url)
        raise OSError("nobody is there")

    told.poster, at = nobody, 0.0
    for pause in PAUSES:
        assert told.send(at) == 1
        assert told.state.state == "waiting"
        at += pause.total_seconds()
    assert told.send(at) == 1
    assert (told.state.state, told.state.attempts) == ("given_up", len(PAUSES) + 1)
    assert told.state.last_answer == "no answer: nobody is there"
    assert told.send(at * 10) == 0
    assert len(sent) == len(PAUSES) + 1
    assert timedelta(days=3) < sum(PAUSES, timedelta()) < timedelta(days=4)


def test_gone_is_never_called_again(desk: Desk) -> None:
    with receiving(lambda handler, _: simple(handler, 410)) as receiver:
        told = Notified(desk, receiver.url)
        told.end()
        assert told.send() == 1
        assert (told.state.state, told.state.last_answer) == ("given_up", "answered 410")
        assert told.send(10**6) == 0


def test_a_redirect_is_not_followed(desk: Desk) -> None:
    with receiving() as other, receiving(lambda handler, _: simple(handler, 307, Location=other.url)) as receiver:
        told = Notified(desk, receiver.url)
        told.end()
        assert told.send() == 1
        assert other.got == []
        assert (told.state.state, told.state.last_answer) == ("waiting", "answered 307")


def trickle(handler: BaseHTTPRequestHandler, _number: int) -> None:
    """A byte at a time, each soon enough for a timeout of a single read."""
    with contextlib.suppress(OSError):
        handler.wfile.write(b"HTTP/1.1 200 OK\r\nX-A: ")
        while True:
            handler.wfile.write(b"a")
            handler.wfile.flush()
            time.sleep(0.05)


def endless(handler: BaseHTTPRequestHandler, _number: int) -> None:
    """A body without end."""
    with contextlib.suppress(OSError):
        handler.wfile.write(b"HTTP/1.1 200 OK\r\n\r\n")
        while True:
            handler.wfile.write(b"a" * 2**16)


def huge_head(handler: BaseHTTPRequestHandler, _number: int) -> None:
    with contextlib.suppress(OSError):
        handler.wfile.write(b"HTTP/1.1 200 OK\r\n")
        while True:
            handler.wfile.write(b"X-A: " + b"a" * 2**16 + b"\r\n")


def test_slow_and_huge_answers_hold_up_nobody(desk: Desk) -> None:
    with receiving(trickle) as receiver:
        told = Notified(desk, receiver.url)
        told.end()
        assert told.send() == 1
        assert (told.state.state, told.state.last_answer) == ("waiting", "no answer: nothing within 2 s")
        receiver.answer = huge_head
        assert told.send(5) == 1
        assert told.state.state == "waiting"
        assert (told.state.last_answer or "").startswith("no answer: RemoteProtocolError")
        receiver.answer = endless  # its head says all there is to know
        assert told.send(35) == 1
        assert (told.state.state, told.state.last_answer) == ("delivered", "answered 200")


def test_two_senders_send_once(desk: Desk) -> None:
    with receiving() as receiver:
        told = Notified(desk, receiver.url)
        told.end()
        again = list[int]()

        class Slow:
            def __call__(self, url: str, body: bytes, headers: dict[str, str]) -> int:
                again.append(send_due(told.desk.database, told.settings, Poster(allow_private=True), clock=later))
                return Poster(allow_private=True)(url, body, headers)

        def later() -> datetime:
            return told.start + TAKEN_FOR - timedelta(seconds=1)

        told.poster = Slow()
        assert told.send() == 1
        assert again == [0]
        assert len(receiver.got) == 1


KILLED = """
import sys
from datetime import datetime
from service.settings import Settings
from service.store.database import open_database
from service.worker.notifier import Poster
from service.workflows.notify import send_due
settings = Settings()
moment = datetime.fromisoformat(sys.argv[1])
send_due(open_database(settings, durable=False), settings, Poster(allow_private=True), clock=lambda: moment)
"""


def test_a_sender_killed_in_the_middle_sends_again(desk: Desk) -> None:
    """kill -9 after the receiver had it and before the sender wrote that down: at least once, not at most once."""
    with receiving(lambda _handler, _number: time.sleep(30)) as receiver:
        told = Notified(desk, receiver.url)
        told.end()
        command = [sys.executable, "-c", KILLED, told.start.isoformat()]
        with subprocess.Popen(command, env={**told.settings.environment(), "PYTHONPATH": "."}) as process:
            assert receiver.arrived.wait(60)
            process.send_signal(signal.SIGKILL)
        assert (told.state.state, told.state.attempts) == ("waiting", 1)
        receiver.answer = lambda handler, _: simple(handler, 200)
        assert told.send(TAKEN_FOR.total_seconds() - 1) == 0
        assert told.send(TAKEN_FOR.total_seconds()) == 1
        assert (told.state.state, told.state.attempts) == ("delivered", 2)
        assert receiver.got[0][1]["webhook-id"] == receiver.got[1][1]["webhook-id"]


def test_the_address_that_was_checked_is_the_one_called(desk: Desk) -> None:
    """A name server that says something else a moment later changes nothing: it is asked once."""
    asked = list[str]()

    def once(host: str, _port: int) -> list[str]:
        asked.append(host)
        return ["127.0.0.1"] if len(asked) == 1 else ["10.255.255.1"]

    with receiving() as receiver:
        told = Notified(desk, f"http://hooks.example:{receiver.port}/told")
        told.end()
        told.poster = Poster(allow_private=True, resolve=once)
        assert told.send() == 1
        assert asked == ["hooks.example"]
        assert receiver.got[0][1]["Host"] == f"hooks.example:{receiver.port}"


@pytest.mark.long
def test_end_to_end(tmp_path: Path) -> None:
    """The real service: its workers run the job, its sweeping process tells of it, the job shows it."""
    key, secret = make_key_and_secret(tmp_path, "bench", "submit")
    failing = [True]

    def answer(handler: BaseHTTPRequestHandler, _number: int) -> None:
        simple(handler, 500 if failing.pop() else 200) if failing else simple(handler, 200)

    with (
        receiving(answer) as receiver,
        real_service(tmp_path, notify_private="true") as real,
        Client(real.address, key=key) as client,
    ):
        data = {"subject": "PT-1", "x": list(range(8)), "y": [0.02, 0.99, 2.01, 2.98, 4.03, 5.01, 5.97, 7.02]}
        job = client.submit(data, notify_url=receiver.url)
        assert job["notification"]["state"] == "waiting"
        client.wait(job["id"])
        until = time.monotonic() + 60
        while (told := client.job(job["id"])["notification"])["state"] == "waiting" and time.monotonic() < until:
            time.sleep(0.1)
        assert told["state"] == "delivered"
        assert told["attempts"] == 2
        message = Webhook(secret).verify(receiver.got[-1][2], receiver.got[-1][1])
        assert message["type"] == "job.succeeded"
        assert message["data"]["verdict"] == client.verdict(job["id"])
        assert json.loads(receiver.got[0][2]) == message
