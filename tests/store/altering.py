"""Altering what is stored, as somebody with the database at hand would, and the one mistake found then."""

import json
from typing import Any

from sqlalchemy import text

from service.store.codec import canonical, digest
from service.store.integrity import Checked
from service.workflows.run import run_job
from tests.jobs import MACHINE, Desk, at

COUNT = 6


def issue(desk: Desk) -> Desk:
    """Six verdicts."""
    for seed in range(COUNT):
        run_one(desk, seed)
    return desk


def run_one(desk: Desk, seed: int) -> str:
    job_id = desk.put(seed)
    run_job(desk.database, desk.took(seconds=1), MACHINE, clock=lambda: at(2))
    return job_id


def sql(desk: Desk, *statements: str, **values: Any) -> None:
    with desk.database.write() as connection:
        for statement in statements:
            connection.execute(text(statement), values if ":" in statement else {})


def one(desk: Desk, query: str, **values: Any) -> Any:
    with desk.database.read() as connection:
        return connection.execute(text(query), values).scalar_one()


def job_of(desk: Desk, sequence: int) -> str:
    return str(one(desk, "SELECT job_id FROM verdicts WHERE sequence = :s", s=sequence))


def changed(document: str, **values: Any) -> tuple[str, str]:
    """The document with these values, and the digest that goes with it."""
    body = canonical(json.loads(document) | values)
    return body.decode(), digest(body)


def alter_verdict(desk: Desk, sequence: int, *, with_digest: bool) -> None:
    document = one(desk, "SELECT document FROM verdicts WHERE sequence = :s", s=sequence)
    body, digest_ = changed(document, service_version="9")
    sql(desk, "UPDATE verdicts SET document = :d WHERE sequence = :s", d=body, s=sequence)
    if with_digest:
        sql(desk, "UPDATE verdicts SET digest = :d WHERE sequence = :s", d=digest_, s=sequence)


def alter_result(desk: Desk, job_id: str, *, with_digest: bool, **values: Any) -> None:
    body, digest_ = changed(one(desk, "SELECT document FROM results WHERE job_id = :j", j=job_id), **values)
    sql(desk, "UPDATE results SET document = :d WHERE job_id = :j", d=body, j=job_id)
    if with_digest:
        sql(desk, "UPDATE results SET digest = :d WHERE job_id = :j", d=digest_, j=job_id)


def only(checked: Checked) -> str:
    """The one mistake that was found."""
    assert checked.wrong == len(checked.mistakes) == 1, checked.mistakes
    return checked.mistakes[0]
