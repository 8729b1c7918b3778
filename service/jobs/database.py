"""The store's database: SQLite in a folder by default, PostgreSQL by address; its engine and the beats of workers.

Two manners of opening it. A serving process must not wait for a store that is away: its engine gives up within a
second on SQLite, two seconds on PostgreSQL. A worker waits: its work is worth more than its time.
"""

from __future__ import annotations

import os
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final

from service.settings import Settings

if TYPE_CHECKING:
    from sqlalchemy import Connection, Engine

__all__ = ["IMPATIENT", "PATIENT", "READY", "BeatBook", "address", "job_folder", "open_engine", "where"]

IMPATIENT: Final = 1.0
PATIENT: Final = 30.0
_SQLITE: Final = "sqlite:///"
READY: Final = "ready"  # the row that is there once the store is made
_FOR_EVER: Final = 1e18
_FILE: Final = "jobs.sqlite"
_CONNECT_SECONDS: Final = 2
_STATEMENT_MILLISECONDS: Final = 2_000


def job_folder(settings: Settings) -> Path:
    """Where the files of jobs are."""
    return Path(settings.data_dir) / "jobs"


def address(settings: Settings) -> str:
    """The address of the store, as SQLAlchemy takes it."""
    given = settings.job_store.get_secret_value()
    if not given:
        return f"{_SQLITE}{Path(settings.data_dir) / _FILE}"
    scheme, rest = given.split("://", 1)
    return f"postgresql+psycopg://{rest}" if scheme in ("postgresql", "postgres") else given


def where(settings: Settings) -> str:
    """The store in words, without user and password."""
    import sqlalchemy as sa

    given = sa.make_url(address(settings))
    return given.database or "" if given.drivername == "sqlite" else f"{given.host or 'this host'}/{given.database}"


def open_engine(settings: Settings, *, patience: float) -> Engine:
    """An engine that connects when it is first used. ``patience`` in seconds, for a lock of SQLite; below PATIENT it
    also bounds connections and statements of PostgreSQL."""
    import sqlalchemy as sa

    url = address(settings)
    if not url.startswith(_SQLITE):
        options: dict[str, Any] = {"application_name": "smilewright"}
        if patience < PATIENT:
            options |= {
                "connect_timeout": _CONNECT_SECONDS,
                "options": f"-c statement_timeout={_STATEMENT_MILLISECONDS}",
            }
        return sa.create_engine(
            url, connect_args=options, pool_pre_ping=True, pool_size=5, pool_timeout=_CONNECT_SECONDS
        )
    Path(settings.data_dir).mkdir(mode=0o700, parents=True, exist_ok=True)
    if url == f"{_SQLITE}{Path(settings.data_dir) / _FILE}":  # for nobody else's eyes; its journals have the same mode
        os.close(os.open(Path(settings.data_dir) / _FILE, os.O_CREAT | os.O_RDWR, 0o600))
    engine = sa.create_engine(url, connect_args={"timeout": patience}, pool_size=5, pool_timeout=PATIENT)

    @sa.event.listens_for(engine, "connect")
    def _prepare(connection: Any, _record: Any) -> None:
        connection.isolation_level = "IMMEDIATE"  # writers queue at the start of a transaction, not in its middle
        if patience >= PATIENT:
            connection.execute("PRAGMA journal_mode=WAL")  # kept in the file: readers do not wait for a writer
        connection.execute("PRAGMA synchronous=FULL")  # what was answered with 202 survives a loss of power
        connection.execute("PRAGMA foreign_keys=ON")

    return engine


class BeatBook:
    """Who is alive: one row a worker with the time of its last beat, by the database's own clock, and one row for the
    lease that lets a single worker at a time look after the others."""

    _TABLE: Final = (
        "CREATE TABLE IF NOT EXISTS smilewright_beats "
        "(name VARCHAR(200) PRIMARY KEY, holder VARCHAR(200), beat DOUBLE PRECISION NOT NULL)"
    )
    _LEASE: Final = "lease"

    def __init__(self, engine: Engine) -> None:
        import sqlalchemy as sa

        self._engine = engine
        self._text = sa.text
        lite = engine.dialect.name == "sqlite"
        self._now = "((julianday('now') - 2440587.5) * 86400.0)" if lite else "extract(epoch from clock_timestamp())"

    def create(self) -> None:
        """Make the table where it is missing."""
        with self._engine.begin() as connection:
            self._run(connection, self._TABLE)

    def call_ready(self) -> None:
        """Say that the whole store is made, ours and the durable engine's."""
        with self._engine.begin() as connection:
            self._run(
                connection,
                "INSERT INTO smilewright_beats (name, holder, beat) VALUES (:ready, :ready, :for_ever) "
                "ON CONFLICT (name) DO NOTHING",
                ready=READY,
                for_ever=_FOR_EVER,
            )

    def beat(self, worker: str) -> None:
        """Say that a worker is alive."""
        with self._engine.begin() as connection:
            self._run(
                connection,
                f"INSERT INTO smilewright_beats (name, holder, beat) VALUES (:name, :name, {self._now}) "
                f"ON CONFLICT (name) DO UPDATE SET beat = {self._now}",
                name=worker,
            )

    def leave(self, worker: str) -> None:
        """Take a worker's row away, and its lease if it holds it: it ends in good order."""
        with self._engine.begin() as connection:
            self._run(connection, "DELETE FROM smilewright_beats WHERE holder = :name", name=worker)

    def take_lease(self, worker: str, *, seconds: float) -> bool:
        """Take or keep the lease; whether this worker holds it now. It lapses ``seconds`` after its last renewal."""
        with self._engine.begin() as connection:
            done = self._run(
                connection,
                f"INSERT INTO smilewright_beats (name, holder, beat) VALUES (:lease, :worker, {self._now}) "
                f"ON CONFLICT (name) DO UPDATE SET holder = :worker, beat = {self._now} "
                f"WHERE smilewright_beats.holder = :worker OR smilewright_beats.beat < {self._now} - :seconds",
                lease=self._LEASE,
                worker=worker,
                seconds=seconds,
            )
            return bool(done.rowcount)

    def alive(self, *, within: float) -> set[str]:
        """Workers whose last beat is at most ``within`` seconds ago."""
        with self._engine.connect() as connection:
            rows = self._run(
                connection,
                f"SELECT name FROM smilewright_beats WHERE name <> :lease AND beat >= {self._now} - :within",
                lease=self._LEASE,
                within=within,
            )
            return {str(name) for (name,) in rows}

    def forget(self, *, older: float) -> None:
        """Drop rows of workers long gone."""
        with self._engine.begin() as connection:
            self._run(connection, f"DELETE FROM smilewright_beats WHERE beat < {self._now} - :older", older=older)

    def _run(self, connection: Connection, statement: str, **values: Any) -> Any:
        return connection.execute(self._text(statement), values)
