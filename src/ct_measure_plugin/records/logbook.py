"""The logbook: records kept in a database, only ever added to.

SQLite by default; any database that SQLAlchemy reaches (PostgreSQL for a department) by its URL.
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import sqlalchemy as sa
from platformdirs import user_data_path
from pydantic import ValidationError
from sqlalchemy.exc import SQLAlchemyError

from ct_measure_plugin.errors import RecordError
from ct_measure_plugin.records.record import Record

if TYPE_CHECKING:
    from collections.abc import Iterable
    from datetime import datetime
    from types import TracebackType
    from typing import Self

__all__ = ["Logbook"]

_META = sa.MetaData()
_RECORDS = sa.Table(
    "records",
    _META,
    sa.Column("id", sa.String(36), primary_key=True),
    sa.Column("created", sa.DateTime(timezone=True), nullable=False, index=True),
    sa.Column("measurement", sa.String(64), nullable=False, index=True),
    sa.Column("series_digest", sa.String(64), nullable=False, index=True),
    sa.Column("record", sa.Text, nullable=False),
)


class Logbook:
    """The store of records.

    Parameters
    ----------
    where : str, Path or None
        A file for SQLite, a database URL, or None for the user's own logbook.

    Examples
    --------
    >>> with Logbook("sqlite://") as book:
    ...     len(book.find())
    0
    """

    def __init__(self, where: str | Path | None = None) -> None:
        if where is None:
            where = user_data_path("ct-measure-plugin", ensure_exists=True) / "logbook.sqlite"
        url = str(where) if "://" in str(where) else f"sqlite:///{Path(where).expanduser()}"
        try:
            self._engine = sa.create_engine(url)
            _META.create_all(self._engine)
        except (SQLAlchemyError, ImportError) as error:
            raise RecordError(
                f"the logbook cannot be opened ({type(error).__name__}): check its place"
            ) from None

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def close(self) -> None:
        """Give the database's connections back."""
        self._engine.dispose()

    def add(self, records: Record | Iterable[Record]) -> int:
        """Add records, all or none; return how many.

        Raises
        ------
        RecordError
            If one of them is in the logbook already, or the database refuses.
        """
        group = [records] if isinstance(records, Record) else list(records)
        rows: list[dict[str, Any]] = [
            {
                "id": record.id,
                "created": record.created,
                "measurement": record.measurement,
                "series_digest": record.source.series_digest,
                "record": record.model_dump_json(),
            }
            for record in group
        ]
        if not rows:
            return 0
        try:
            with self._engine.begin() as connection:
                connection.execute(_RECORDS.insert(), rows)
        except SQLAlchemyError as error:
            raise RecordError(f"the logbook took nothing ({type(error).__name__})") from None
        return len(rows)

    def get(self, record_id: str) -> Record:
        """Return one record by its id.

        Raises
        ------
        RecordError
            If there is none.
        """
        query = sa.select(_RECORDS.c.record).where(_RECORDS.c.id == record_id)
        found = self._run(query)
        if not found:
            raise RecordError("the logbook holds no record of that id")
        return found[0]

    def find(
        self,
        *,
        measurement: str | None = None,
        series_digest: str | None = None,
        since: datetime | None = None,
        until: datetime | None = None,
        limit: int | None = None,
    ) -> tuple[Record, ...]:
        """Return records, oldest first, narrowed by what is given."""
        query = sa.select(_RECORDS.c.record).order_by(_RECORDS.c.created.desc())
        if measurement is not None:
            query = query.where(_RECORDS.c.measurement == measurement)
        if series_digest is not None:
            query = query.where(_RECORDS.c.series_digest == series_digest)
        if since is not None:
            query = query.where(_RECORDS.c.created >= since)
        if until is not None:
            query = query.where(_RECORDS.c.created <= until)
        if limit is not None:
            query = query.limit(limit)
        return tuple(reversed(self._run(query)))

    def _run(self, query: sa.Select[tuple[str]]) -> list[Record]:
        try:
            with self._engine.connect() as connection:
                texts = [str(row[0]) for row in connection.execute(query)]
        except SQLAlchemyError as error:
            raise RecordError(f"the logbook cannot be read ({type(error).__name__})") from None
        try:
            return [Record.model_validate_json(text) for text in texts]
        except ValidationError:
            raise RecordError("the logbook holds a record of another format") from None
