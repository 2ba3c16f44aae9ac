"""One frozen settings class. Nothing is read on import: whoever starts a process builds one and passes it on.

Every field is also an environment variable with the prefix LEASTBEND_ (LEASTBEND_DATA_DIR, LEASTBEND_PORT, ...).
"""

import binascii
import json
from base64 import b64decode
from collections.abc import Mapping
from pathlib import Path

from pydantic import Field, field_validator
from pydantic_settings import BaseSettings, SettingsConfigDict

PREFIX = "LEASTBEND_"


class Settings(BaseSettings):
    """How one installation runs. Times are in seconds."""

    model_config = SettingsConfigDict(env_prefix=PREFIX, frozen=True, extra="ignore")

    data_dir: Path = Field(Path("leastbend-data"), description="Directory of the SQLite files; made if absent.")
    database_url: str | None = Field(
        None, description="SQLAlchemy URL of PostgreSQL (postgresql+psycopg://...); absent: SQLite in data_dir."
    )
    host: str = Field("127.0.0.1", description="Address to listen on; only loopback while there are no keys.")
    port: int = Field(8080, ge=0, le=65535, description="TCP port to listen on; 0 takes a free one.")
    workers: int = Field(2, ge=0, le=256, description="Worker processes that `serve` starts; 0 starts none.")
    allowed_origins: tuple[str, ...] = Field(
        (), description="Origins whose pages may call (CORS), as a JSON list; none by default."
    )
    log_level: str = Field("INFO", pattern="^(DEBUG|INFO|WARNING|ERROR)$", description="Least severe level logged.")

    body_bytes: int = Field(32 * 2**20, ge=1024, description="Largest request body (413 above it).")
    points: int = Field(1_000_000, ge=3, description="Most points of one dataset posted as JSON or CSV (413 above it).")
    parquet_points: int = Field(20_000_000, ge=3, description="Most points of one dataset posted as Parquet.")
    batch_size: int = Field(10_000, ge=1, description="Most datasets of one batch (413 above it).")
    requests_per_minute: int = Field(
        30_000, ge=0, description="Most requests of one key in a minute (429 beyond it); 0 sets no limit."
    )
    queue_depth: int = Field(20_000, ge=1, description="Most jobs waiting; a post beyond it gets 503.")
    page_limit: int = Field(200, ge=1, le=10_000, description="Most items on one page of a list.")
    wait_seconds: float = Field(60.0, ge=0, le=3600, description="Longest wait granted to `Prefer: wait`.")
    wait_tick_seconds: float = Field(0.02, gt=0, le=10, description="How often waiting callers' jobs are looked up.")

    notify_secret: str | None = Field(
        None,
        pattern="^whsec_[A-Za-z0-9+/]{32,}={0,2}$",
        description="Signs notifications while there are no keys (each key has its own): whsec_ and base64.",
    )
    notify_private: bool = Field(False, description="Send notifications to private and loopback addresses too.")

    job_seconds: float = Field(600.0, gt=0, description="Longest run of one job; then it is stopped and failed.")
    max_attempts: int = Field(5, ge=1, le=100, description="Starts of one job before it is failed for good.")
    lease_seconds: float = Field(10.0, gt=0, description="A running job whose worker is silent so long is run again.")
    retry_seconds: float = Field(0.2, ge=0, description="Pause before the second attempt; doubles with each.")
    sweep_seconds: int = Field(1, ge=1, le=30, description="How often lost messages and lost workers are looked for.")
    stop_seconds: float = Field(20.0, ge=0, description="Time that a running job gets to finish at a graceful stop.")

    @field_validator("database_url")
    @classmethod
    def _is_postgres(cls, value: str | None) -> str | None:
        if value is not None and not value.startswith("postgresql+psycopg://"):
            raise ValueError("must start with postgresql+psycopg:// (leave it out for SQLite)")
        return value

    @field_validator("notify_secret")
    @classmethod
    def _is_base64(cls, value: str | None) -> str | None:
        if value is not None:
            try:
                b64decode(value.removeprefix("whsec_") + "==")  # padding may be left out, and too much is none
            except binascii.Error as error:
                raise ValueError(f"must be whsec_ and the base64 of 24 bytes or more: {error}") from error
        return value

    @field_validator("sweep_seconds")
    @classmethod
    def _divides_a_minute(cls, value: int) -> int:
        if 60 % value:
            raise ValueError("must divide 60")
        return value

    @property
    def postgres(self) -> bool:
        """Whether data and queue live on PostgreSQL."""
        return self.database_url is not None

    @property
    def heartbeat_seconds(self) -> float:
        """A lease survives three lost heartbeats."""
        return self.lease_seconds / 4

    def environment(self) -> Mapping[str, str]:
        """Environment variables that give a child process these settings."""
        values = self.model_dump(mode="json", exclude_none=True)
        values["data_dir"] = str(self.data_dir.absolute())
        return {
            f"{PREFIX}{name.upper()}": json.dumps(value) if isinstance(value, list) else str(value)
            for name, value in values.items()
        }
