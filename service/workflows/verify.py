"""Whether everything the database holds is what its digests say."""

from service.store.database import Database
from service.store.integrity import Checked, check_digests


def verify_digests(database: Database) -> Checked:
    """Datasets, plans, results, verdicts and their chain, in one reading transaction."""
    with database.read() as connection:
        return check_digests(connection)
