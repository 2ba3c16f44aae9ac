"""Worker processes: they take jobs from the table, compute them, and are watched, swept up after and restarted."""
