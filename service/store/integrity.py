"""Every digest that the database holds, computed again, and every verdict held against the rows that it speaks of.

The chain of verdicts is walked from its end backwards: the document whose hash the next verdict carries is the one that
was issued, whatever its own row says. So a change is found at the verdict that was changed, not at those behind it.
"""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from pydantic import TypeAdapter, ValidationError
from sqlalchemy import BigInteger, Connection, Row, exists, func, or_, select, type_coerce

from service.store import datasets as dataset_store
from service.store.clock import from_microseconds, rfc3339
from service.store.codec import digest
from service.store.retention import PURGED
from service.store.tables import State, datasets, job_events, jobs, plans, results, verdict_chain, verdicts

MOST_NAMED = 20  # mistakes that are listed; all are counted
AT_ONCE = 100  # rows fetched together: a result may take a megabyte
WRONG_DIGEST = "is not what its digest says"
OBJECT = TypeAdapter(dict[str, Any])

WAS_PURGED = exists().where(job_events.c.job_id == jobs.c.id, job_events.c.kind == PURGED)
WITNESSED = (
    select(
        verdicts.c.sequence,
        verdicts.c.job_id,
        verdicts.c.subject,
        verdicts.c.verdict,
        type_coerce(verdicts.c.issued_at, BigInteger).label("issued_at"),  # what was altered may be no moment
        verdicts.c.digest,
        verdicts.c.previous,
        verdicts.c.document,
        jobs.c.state.label("job_state"),
        jobs.c.subject.label("job_subject"),
        jobs.c.verdict.label("job_verdict"),
        jobs.c.chosen_degree,
        datasets.c.digest.label("dataset_digest"),
        plans.c.digest.label("plan_digest"),
        results.c.digest.label("result_digest"),
        results.c.document.label("result"),
        results.c.provenance,
        WAS_PURGED.label("purged"),
    )
    .outerjoin(jobs, jobs.c.id == verdicts.c.job_id)
    .outerjoin(datasets, datasets.c.id == jobs.c.dataset_id)
    .outerjoin(plans, plans.c.digest == jobs.c.plan_digest)
    .outerjoin(results, results.c.job_id == verdicts.c.job_id)
    .order_by(verdicts.c.sequence.desc())
)
WITHOUT_VERDICT = (
    select(jobs.c.id, jobs.c.state, jobs.c.verdict, jobs.c.chosen_degree)
    .outerjoin(verdicts, verdicts.c.job_id == jobs.c.id)
    .where(
        verdicts.c.job_id.is_(None),
        or_(jobs.c.state == State.SUCCEEDED, jobs.c.verdict.is_not(None), jobs.c.chosen_degree.is_not(None)),
    )
    .order_by(jobs.c.id)
)
STRAY_RESULTS = (
    select(results.c.job_id, results.c.digest, results.c.document, jobs.c.state)
    .outerjoin(verdicts, verdicts.c.job_id == results.c.job_id)
    .outerjoin(jobs, jobs.c.id == results.c.job_id)
    .where(verdicts.c.job_id.is_(None))
    .order_by(results.c.job_id)
)


@dataclass(kw_only=True)
class Checked:
    """How much was right, by kind, and what was wrong. `purged`: datasets whose points were removed."""

    right: dict[str, int] = field(default_factory=dict)
    wrong: int = 0
    purged: int = 0
    mistakes: list[str] = field(default_factory=list)

    def note(self, kind: str, name: str, faults: Sequence[str]) -> None:
        """One thing that was looked at: right where there are no faults."""
        if not faults:
            self.right[kind] = self.right.get(kind, 0) + 1
            return
        self.wrong += 1
        if len(self.mistakes) < MOST_NAMED:
            self.mistakes.append(f"{kind} {name} {'; '.join(faults)}")


@dataclass(frozen=True, kw_only=True)
class _Witness:
    """What speaks of a verdict: the one issued after it, or the end of the chain."""

    name: str
    sequence: int  # of the verdict that it speaks of; 0 before the first
    previous: str | None  # that verdict's digest
    believed: bool  # not where it was altered itself


def check_digests(connection: Connection) -> Checked:
    """Datasets, plans, results, verdicts and their chain, rows streamed. Wants to see one moment of the database."""
    checked = Checked()
    _check_datasets(connection, checked)
    for row in _streamed(connection, select(plans.c.digest, plans.c.document)):
        checked.note("plan", row.digest, _unless(_hash(row.document) == row.digest, WRONG_DIGEST))
    _check_verdicts(connection, checked)
    for row in _streamed(connection, WITHOUT_VERDICT):
        stands = f"is {row.state}, verdict {row.verdict!r}, degree {row.chosen_degree!r}"
        checked.note("job", row.id, [f"{stands}: there is no verdict of it"])
    for row in _streamed(connection, STRAY_RESULTS):
        faults = _unless(_hash(row.document) == row.digest, WRONG_DIGEST)
        faults += _unless(row.state == State.SUCCEEDED, "belongs to no verdict")  # else its job was just named
        checked.note("result", row.job_id, faults)
    return checked


def _check_datasets(connection: Connection, checked: Checked) -> None:
    for row in _streamed(connection, select(datasets.c.id).order_by(datasets.c.id)):
        try:
            found = dataset_store.load(connection, row.id, purged_too=True)
            if found is None:
                continue
            content, said = found
            if content.x.size == content.y.size == 0:  # as retention leaves it
                checked.purged += 1
                continue
            right = digest(dataset_store.dataset_document(content)) == said
        except (ValueError, TypeError):  # bytes that are no numbers, numbers that have no JSON
            right = False
        checked.note("dataset", row.id, _unless(right, WRONG_DIGEST))


def _check_verdicts(connection: Connection, checked: Checked) -> None:
    later, breaks = _end(connection)
    for row in _streamed(connection, WITNESSED):
        if row.sequence != later.sequence:
            breaks.append(_gap(later, row.sequence))
        later = _check_verdict(row, later, checked)
    if later.sequence > 0:
        breaks.append(_gap(later, 0))
    for faults in [[one] for one in breaks] or [[]]:
        checked.note("chain", "of verdicts", faults)


def _end(connection: Connection) -> tuple[_Witness, list[str]]:
    """What the end of the chain says of the last verdict, and what is wrong with the end itself."""
    end = connection.execute(select(verdict_chain.c.length, verdict_chain.c.head)).first()
    name = "the end of the chain"
    if end is not None:
        return _Witness(name=name, sequence=end.length, previous=end.head, believed=True), []
    last = connection.execute(select(func.max(verdicts.c.sequence))).scalar() or 0
    return _Witness(name=name, sequence=last, previous=None, believed=False), ["has no end: its row is missing"]


def _gap(later: _Witness, found: int) -> str:
    if found > later.sequence:
        return f"goes on to verdict {found}, but {later.name} says that {later.sequence} were issued"
    first, last = found + 1, later.sequence
    missing = f"verdict {first} is" if first == last else f"verdicts {first} to {last} are"
    digest_ = f" (digest of the last of them: {later.previous})" if later.believed else ""
    return f"has a gap: {missing} missing before {later.name}{digest_}"


def _check_verdict(row: Row[Any], later: _Witness, checked: Checked) -> _Witness:
    """Note this verdict and its result; answers what it says of the one before."""
    hashed, said = _hash(row.document), _read(row.document)
    believed = hashed == row.digest
    faults = _unless(believed, WRONG_DIGEST)
    if later.believed and later.sequence == row.sequence:
        believed = hashed == later.previous
        if not believed and not faults:
            faults.append(f"is not the one that {later.name} speaks of, which has digest {later.previous}")
    if row.sequence == 1 and said.get("previous") is not None:
        faults.append("is the first, but says that it follows another")
    if said:
        faults += _odds_with_rows(said, row)
    faults += _odds_with_result(said, row, checked)
    checked.note("verdict", f"{row.sequence} of job {row.job_id}", faults)
    return _Witness(
        name=f"verdict {row.sequence}",
        sequence=row.sequence - 1,
        previous=said.get("previous"),
        believed=believed and bool(said),
    )


def _odds_with_rows(said: Mapping[str, Any], row: Row[Any]) -> list[str]:
    own = {"job_id": row.job_id, "subject": row.subject, "verdict": row.verdict, "previous": row.previous}
    faults = _odds(said, "its own row", own | {"issued_at": _moment(row.issued_at)})
    if row.job_state is None:
        return [*faults, "its job is missing"]
    job = {
        "subject": row.job_subject,
        "verdict": row.job_verdict,
        "chosen_degree": row.chosen_degree,
        "dataset_digest": row.dataset_digest,
        "plan_digest": row.plan_digest,
    }
    ended = _unless(row.job_state == State.SUCCEEDED, f"its job is {row.job_state}")
    return faults + ended + _odds(said, "its job", job)


def _odds_with_result(said: Mapping[str, Any], row: Row[Any], checked: Checked) -> list[str]:
    """A result that is not what its own digest says is the result's fault, noted there and not held against it here."""
    if row.result_digest is None:
        return _unless(row.purged, "its result is missing, and no purge removed it")
    right = _hash(row.result) == row.result_digest
    checked.note("result", row.job_id, _unless(right, WRONG_DIGEST))
    if not right or not said:
        return []
    result, origin = _read(row.result), _read(row.provenance)
    judged = result.get("verdict")
    word = judged.get("verdict") if isinstance(judged, dict) else None
    computed = {"result_digest": row.result_digest, "verdict": word, "chosen_degree": result.get("chosen_degree")}
    came_from = {name: origin.get(name) for name in ("dataset_digest", "plan_digest", "result_digest")}
    return _odds(said, "its result", computed) + _odds(said, "its provenance", came_from)


def _odds(said: Mapping[str, Any], where: str, found: Mapping[str, Any]) -> list[str]:
    differing = [name for name, value in found.items() if said.get(name) != value]
    return [f"says {name} {said.get(name)!r}, {where} {found[name]!r}" for name in differing]


def _unless(right: bool, fault: str) -> list[str]:
    return [] if right else [fault]


def _streamed(connection: Connection, query: Any) -> Iterable[Row[Any]]:
    return connection.execute(query.execution_options(yield_per=AT_ONCE))


def _hash(document: object) -> str:
    """SQLite keeps whatever it was given, in any column."""
    return digest(document if isinstance(document, bytes) else str(document).encode())


def _read(document: Any) -> dict[str, Any]:
    """What a document says; nothing where it can no longer be read, which its hash shows already."""
    try:
        return OBJECT.validate_json(document)
    except ValidationError:
        return {}


def _moment(microseconds: Any) -> str:
    try:
        return rfc3339(from_microseconds(microseconds))
    except (TypeError, OverflowError):
        return str(microseconds)
