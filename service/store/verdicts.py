"""Results and verdicts. Verdicts form one chain: each document carries the digest of the one issued before it."""

from collections.abc import Callable
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, exists, insert, select, update

from service.store.codec import canonical, digest
from service.store.records import VerdictFilter, VerdictRecord
from service.store.tables import jobs, results, verdict_chain, verdicts

RECORD = (verdicts.c.sequence, verdicts.c.digest, verdicts.c.document)
ADD_RESULT, ADD = insert(results), insert(verdicts)
END = update(verdict_chain).where(verdict_chain.c.id == 1)
LENGTHEN = END.values(length=verdict_chain.c.length + 1).returning(verdict_chain.c.length, verdict_chain.c.head)


def add_result(connection: Connection, job_id: str, *, document: bytes, digest_: str, provenance: bytes) -> None:
    """Keep what a job computed."""
    row = {
        "job_id": job_id,
        "digest": digest_,
        "document": document.decode(),
        "provenance": provenance.decode(),
    }
    connection.execute(ADD_RESULT, row)


def issue(
    connection: Connection,
    job_id: str,
    *,
    subject: str,
    verdict: str,
    now: datetime,
    document: Callable[[str | None], dict[str, Any]],
) -> VerdictRecord:
    """Append one verdict to the chain; `document` builds it from the digest of the one before.

    Call it last in a transaction: on PostgreSQL the chain's row stays locked until the commit.
    """
    sequence, previous = connection.execute(LENGTHEN).one()
    body = canonical(document(previous))
    row = {
        "sequence": sequence,
        "job_id": job_id,
        "subject": subject,
        "verdict": verdict,
        "issued_at": now,
        "digest": digest(body),
        "previous": previous,
        "document": body.decode(),
    }
    connection.execute(ADD, row)
    connection.execute(END, {"head": row["digest"]})
    return VerdictRecord(sequence=sequence, digest=row["digest"], document=row["document"])


def of_job(connection: Connection, job_id: str) -> VerdictRecord | None:
    """The verdict that a job ended with."""
    query = select(*RECORD).where(verdicts.c.job_id == job_id)
    row = connection.execute(query).mappings().first()
    return None if row is None else VerdictRecord(**row)


def issued(connection: Connection, wanted: VerdictFilter, *, after: int, limit: int) -> tuple[VerdictRecord, ...]:
    """Verdicts that match, in the order of issue, from the one after sequence `after` on."""
    query = select(*RECORD).where(verdicts.c.sequence > after).order_by(verdicts.c.sequence).limit(limit)
    if wanted.subject is not None:
        query = query.where(verdicts.c.subject == wanted.subject)
    if wanted.verdict is not None:
        query = query.where(verdicts.c.verdict == wanted.verdict)
    if wanted.since is not None:
        query = query.where(verdicts.c.issued_at >= wanted.since)
    later = verdicts.alias()
    newer = select(later.c.sequence).where(
        later.c.subject == verdicts.c.subject, later.c.sequence > verdicts.c.sequence
    )
    if wanted.submitted_by is not None:
        own = select(jobs.c.id).where(jobs.c.submitted_by == wanted.submitted_by)
        query = query.where(verdicts.c.job_id.in_(own))
        newer = newer.where(later.c.job_id.in_(own))
    if wanted.newest_only:
        query = query.where(~exists(newer))
    return tuple(VerdictRecord(**row) for row in connection.execute(query).mappings())
