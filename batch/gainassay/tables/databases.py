"""Tables in databases: read in chunks over a connection that cannot write, and whose secrets nobody sees."""

from __future__ import annotations

import hashlib
import os
import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any
from urllib.parse import quote

import numpy as np
import pyarrow as pa

from gainassay.errors import InputError
from gainassay.job import Source
from gainassay.tables.raw import Flaws, Piece, array_of, one_under_the_other, refuse_repeated

if TYPE_CHECKING:
    from sqlalchemy import URL, Connection, CursorResult, Engine

ROWS_AT_A_TIME = 1_000
"""So few that their cells are still near when they are turned into columns: ten times as many take longer."""

CHUNKS_OF_A_PIECE = 64
"""What is checked together: fewer cost more for each row."""

READ_ONLY = {
    "postgresql": "SET SESSION CHARACTERISTICS AS TRANSACTION READ ONLY",
    "mysql": "SET SESSION TRANSACTION READ ONLY",
    "mariadb": "SET SESSION TRANSACTION READ ONLY",
    "sqlite": "PRAGMA query_only = ON",
}
"""What keeps a connection from writing, said first on it, by kind of database."""

DRIVERS = {"postgresql": "postgresql+psycopg", "postgres": "postgresql+psycopg"}
"""Drivers of addresses that name none."""

MOST_LISTED = 10
LONGEST_QUERY = 60
"""Characters of a query that messages repeat."""

NO_VALUES: dict[type, str] = {
    **dict.fromkeys((list, tuple, set), "is a list, and one value is wanted; choose one in a query"),
    dict: "is a structure, and one value is wanted; choose one in a query",
    **dict.fromkeys((bytes, bytearray, memoryview), "is binary, and text or a number is wanted; convert it in a query"),
}
"""By type: why a cell is no plain value."""


def read_file(path: Path, source: Source) -> Iterator[Piece]:
    """The table in an SQLite file.

    Raises
    ------
    InputError
        If the file is no database or the table cannot be read.
    """
    from sqlalchemy import create_engine
    from sqlalchemy.pool import NullPool

    def connect() -> sqlite3.Connection:
        connection = sqlite3.connect(f"file:{quote(str(path.resolve()))}?mode=ro", uri=True)
        # Other files could be written, and are when one is attached that is not there.
        connection.set_authorizer(_attach_nothing)
        return connection

    return _read(create_engine("sqlite://", creator=connect, poolclass=NullPool), str(path), source, ())


def _attach_nothing(action: int, *_: object) -> int:
    return sqlite3.SQLITE_DENY if action == sqlite3.SQLITE_ATTACH else sqlite3.SQLITE_OK


def read_address(source: Source) -> Iterator[Piece]:
    """The table at the address of a database; the address may stand in an environment variable.

    Raises
    ------
    InputError
        If the database cannot be reached or the table cannot be read.
    """
    from sqlalchemy import URL, create_engine
    from sqlalchemy.exc import ArgumentError, NoSuchModuleError
    from sqlalchemy.pool import NullPool

    url = _url(source)
    name = URL.create(url.drivername, host=url.host, port=url.port, database=url.database).render_as_string()
    secrets = [url.password or "", *(str(value) for value in url.query.values())]
    try:
        engine = create_engine(url.set(drivername=DRIVERS.get(url.drivername, url.drivername)), poolclass=NullPool)
    except ModuleNotFoundError as error:
        extra = ", or gainassay[postgres]" if url.drivername in DRIVERS else ""
        raise InputError(f"{name}: its driver is not installed; install the package {error.name}{extra}") from None
    except (NoSuchModuleError, ArgumentError, TypeError, ValueError):
        raise InputError(f"{name}: no driver is installed for '{url.drivername}'; check the address") from None
    return _read(engine, name, source, tuple(filter(None, secrets)))


def _url(source: Source) -> URL:
    """The address, which holds no secret where it stands in the job."""
    from sqlalchemy.engine import make_url
    from sqlalchemy.exc import ArgumentError

    where = f"[{source.section}]: from"
    variable = source.at.removeprefix("$") if source.at.startswith("$") else ""
    if variable and not os.environ.get(variable):
        raise InputError(f"{where}: the environment variable {variable} is not set; it should hold an address")
    try:
        url = make_url(os.environ[variable] if variable else source.at)
    except (ArgumentError, ValueError):
        raise InputError(f"{where}: is no address of a database; wanted is DATABASE://HOST/NAME") from None
    if "@" in f"{url.host}{url.database}":
        # Part of a password would pass for the host, and be shown.
        raise InputError(f"{where}: the address has an '@' too many; in a name or password write it as %40")
    if not variable and (url.password is not None or url.query):
        raise InputError(
            f"{where}: an address in a job holds no password and no parameters, for manifests copy the job; put "
            'the address into an environment variable and say from = "$NAME", or the password where the driver looks'
        )
    if url.get_backend_name() == "sqlite":
        raise InputError(f'{where}: name the SQLite file itself, such as from = "parts.sqlite"')
    return url


def _read(engine: Engine, name: str, source: Source, secrets: tuple[str, ...]) -> Iterator[Piece]:
    from sqlalchemy.exc import SQLAlchemyError

    query = _one_statement(name, source.query)
    done = 0
    batches: list[list[pa.Array]] = []
    flaws: dict[str, dict[int, str]] = {}
    first = 1
    digest = hashlib.sha256()
    try:
        with _reading(engine, name, bool(query)) as connection:
            where = f"{name}, {_part(source, query)}" if source.table or query else name
            result = _result(connection, name, source.table, query)
            header = list(result.keys())
            refuse_repeated(where, header)
            for chunk in _rows(result):
                if len(batches) == CHUNKS_OF_A_PIECE:
                    yield _piece(where, header, batches, first, flaws)
                    batches, flaws, first = [], {}, done + 1
                columns = list(zip(*chunk, strict=True))
                batch = [array_of(column) for column in columns]
                for title, cells, column in zip(header, batch, columns, strict=True):
                    # What is no plain value makes text of its column.
                    if pa.types.is_string(cells.type) and (found := _flaws(column, done + 1 - first)):
                        flaws.setdefault(title, {}).update(found)
                digest.update(pa.record_batch(batch, names=header).serialize())
                batches.append(batch)
                done += len(chunk)
    except (SQLAlchemyError, engine.dialect.loaded_dbapi.Error, OSError, UnicodeError) as error:
        fault = _without(secrets, str(getattr(error, "orig", None) or error)).strip() or type(error).__name__
        after = f" after {done:,} rows; nothing of it is used" if done else ""
        raise InputError(f"{name}: cannot be read{after}: {fault.splitlines()[0]}") from None
    finally:
        engine.dispose()
    yield _piece(where, header, batches, first, flaws, digest.hexdigest())


def _rows(result: CursorResult[Any]) -> Iterator[list[Any]]:
    """Rows of a result, some at a time, as the driver gives them: SQLAlchemy's would take as long again."""
    cursor = result.cursor
    with result:
        # The first row may have been fetched ahead, and no other.
        chunk = list(result.fetchmany(1))
        if chunk and cursor:
            chunk += cursor.fetchmany(ROWS_AT_A_TIME - 1)
        while chunk and cursor:
            yield chunk
            chunk = list(cursor.fetchmany(ROWS_AT_A_TIME))


def _piece(
    where: str,
    header: list[str],
    batches: list[list[pa.Array]],
    first: int,
    flaws: Flaws,
    sha256: str = "",
) -> Piece:
    """Chunks of a result, one under the other; `first` is the row of the first."""
    parts = zip(*batches, strict=True) if batches else ([pa.array([], pa.string())] for _ in header)
    columns = {title: one_under_the_other(part) for title, part in zip(header, parts, strict=True)}
    count = sum(len(batch[0]) for batch in batches)
    return Piece(where, columns, np.arange(first, first + count), sha256, (), flaws)


@contextmanager
def _reading(engine: Engine, name: str, has_query: bool) -> Iterator[Connection]:
    """A connection that cannot write, whose results come in chunks; whatever was done on it is undone."""
    from sqlalchemy import event

    statement = READ_ONLY.get(engine.dialect.name)
    if statement is None and has_query:
        raise InputError(
            f"{name}: nothing is known that keeps a connection to '{engine.dialect.name}' from writing, so a query is "
            'not sent; say table = "..." in the job, of a view if need be'
        )

    @event.listens_for(engine, "connect")
    def forbid_writing(connection: Any, _: Any) -> None:
        if statement:
            connection.cursor().execute(statement)
            connection.commit()

    with engine.connect() as connection:
        yield connection.execution_options(stream_results=True, no_parameters=True, max_row_buffer=ROWS_AT_A_TIME)
        connection.rollback()


def _result(connection: Connection, name: str, table: str, query: str) -> CursorResult[Any]:
    """The rows that a job asks for."""
    import sqlalchemy

    if query:
        # As it stands: nothing in it is a parameter.
        result = connection.exec_driver_sql(query)
        if not result.returns_rows:
            raise InputError(f"{name}: the query gives no rows; wanted is a select statement")
        return result
    if not table:
        found = sqlalchemy.inspect(connection)
        names = sorted([*found.get_table_names(), *found.get_view_names()])
        more = f" and {len(names) - MOST_LISTED} more" if len(names) > MOST_LISTED else ""
        listed = ", ".join(names[:MOST_LISTED]) + more
        raise InputError(
            f'{name}: say table = "..." or query = "select ..." in the job; it has {listed or "no tables"}'
        )
    schema, _, own = table.rpartition(".")
    wanted = sqlalchemy.table(own, schema=schema or None)
    return connection.execute(sqlalchemy.select(sqlalchemy.text("*")).select_from(wanted))


def _one_statement(name: str, query: str) -> str:
    """A query without the semicolon at its end.

    Raises
    ------
    InputError
        If there are several: a second statement could undo what keeps the first from writing.
    """
    only = query.strip().rstrip(";").rstrip()
    if ";" in only:
        raise InputError(f"{name}: the query holds a semicolon; one select statement is read, without any")
    return only


def _part(source: Source, query: str) -> str:
    """What is read of a database, as messages call it."""
    if source.table:
        return f"table {source.table}"
    said = " ".join(query.split())
    return f"query {said if len(said) <= LONGEST_QUERY else said[: LONGEST_QUERY - 3] + '...'}"


def _flaws(column: tuple[Any, ...], start: int) -> dict[int, str]:
    """Reason for each cell that is no plain value, by its position."""
    if set(map(type, column)).isdisjoint(NO_VALUES):
        return {}
    return {start + place: NO_VALUES[type(cell)] for place, cell in enumerate(column) if type(cell) in NO_VALUES}


def _without(secrets: tuple[str, ...], message: str) -> str:
    for secret in secrets:
        message = message.replace(secret, "***")
    return message
