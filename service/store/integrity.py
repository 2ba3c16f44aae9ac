"""Every digest that the database holds, computed again from what it is the digest of."""

import json
from dataclasses import dataclass, field

from sqlalchemy import Connection, func, select

from service.store import datasets as dataset_store
from service.store.codec import digest
from service.store.tables import datasets, plans, results, verdict_chain, verdicts

MOST_NAMED = 20  # mistakes that are listed; all are counted


@dataclass(kw_only=True)
class Checked:
    """How many digests were right, by kind, and what was wrong. `purged`: datasets whose points were removed."""

    right: dict[str, int] = field(default_factory=dict)
    wrong: int = 0
    purged: int = 0
    mistakes: list[str] = field(default_factory=list)

    def note(self, kind: str, name: str, right: bool) -> None:
        """One digest."""
        self.right.setdefault(kind, 0)
        if right:
            self.right[kind] += 1
            return
        self.wrong += 1
        if len(self.mistakes) < MOST_NAMED:
            self.mistakes.append(f"{kind} {name} is not what its digest says")


def check_digests(connection: Connection) -> Checked:
    """Datasets, plans, results, verdicts, and the chain of verdicts from first to last."""
    checked = Checked()
    for dataset_id in connection.execute(select(datasets.c.id)).scalars().all():
        found = dataset_store.load(connection, dataset_id, purged_too=True)
        if found is None:
            continue
        content, said = found
        if content.x.size == 0:
            checked.purged += 1
        else:
            checked.note("dataset", dataset_id, digest(dataset_store.dataset_document(content)) == said)
    for kind, table, name in (("plan", plans, plans.c.digest), ("result", results, results.c.job_id)):
        query = select(name.label("name"), table.c.digest, table.c.document)
        for row in connection.execute(query.execution_options(yield_per=200)):
            checked.note(kind, row.name, digest(row.document.encode()) == row.digest)
    _check_chain(connection, checked)
    return checked


def _check_chain(connection: Connection, checked: Checked) -> None:
    previous, length = None, 0
    query = select(verdicts.c.sequence, verdicts.c.job_id, verdicts.c.digest, verdicts.c.previous, verdicts.c.document)
    for row in connection.execute(query.order_by(verdicts.c.sequence).execution_options(yield_per=500)):
        length += 1
        linked = row.sequence == length and row.previous == previous == json.loads(row.document)["previous"]
        checked.note("verdict", row.job_id, linked and digest(row.document.encode()) == row.digest)
        previous = row.digest
    end = connection.execute(select(verdict_chain.c.length, verdict_chain.c.head)).one()
    missing = connection.execute(
        select(func.count()).select_from(results).where(results.c.job_id.not_in(select(verdicts.c.job_id)))
    ).scalar_one()
    checked.note("chain", "of verdicts", (end.length, end.head) == (length, previous))
    checked.note("chain", "of results without a verdict", missing == 0)
