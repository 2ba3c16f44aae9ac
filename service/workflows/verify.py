"""Whether everything the database holds is what its digests say."""

from sqlalchemy import text
from sqlalchemy.exc import DBAPIError

from service.errors import Unusable
from service.store.database import Database
from service.store.integrity import Checked, check_digests


def verify_digests(database: Database) -> Checked:
    """Datasets, plans, results, verdicts and their chain, as they are at one moment, while the service may go on.

    Raises Unusable where the database itself is damaged.
    """
    try:
        with database.read() as connection:
            if database.postgres:  # SQLite's readers see one moment anyway
                connection.execute(text("SET TRANSACTION ISOLATION LEVEL REPEATABLE READ, READ ONLY"))
            return check_digests(connection)
    except DBAPIError as error:
        raise Unusable(f"the database cannot be read to its end: {error.orig}") from error
