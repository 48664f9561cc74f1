"""The history on a database: opened by path or URL, added to in one piece, read in one piece."""

from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, Engine, create_engine, event, func, insert, select, text
from sqlalchemy.engine import URL, make_url
from sqlalchemy.exc import ArgumentError, NoSuchModuleError, SQLAlchemyError

from identkit.errors import InputError, Problem
from identkit.history import tables

FILE_NAME = "history.db"
WAIT_SECONDS = 60
_LOCK = 0x1DE47  # any number of our own, known to every writer
ROWS_AT_ONCE = 2000


class Store:
    """A history, opened.

    Parameters
    ----------
    place
        A file, a folder (``history.db`` in it), or an SQLAlchemy URL.

    Raises
    ------
    InputError
        If the place cannot be opened, or holds something else.
    """

    def __init__(self, place: str) -> None:
        self.name, self.file, url = _located(place)
        try:
            self._engine = _engine(url)
        except (ArgumentError, NoSuchModuleError, ImportError) as error:
            raise self._problem(error) from error
        try:
            with self.transaction() as connection:
                self._prepare(connection)
        except InputError:
            self.close()
            raise

    def close(self) -> None:
        """Give back all connections."""
        self._engine.dispose()

    def __enter__(self) -> "Store":
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    @contextmanager
    def transaction(self) -> Iterator[Connection]:
        """Do what the block does wholly or not at all, and alone: other writers wait.

        Raises
        ------
        InputError
            If the database refuses; nothing is written then.
        """
        try:
            with self._engine.begin() as connection:
                if connection.dialect.name == "postgresql":
                    connection.execute(select(func.pg_advisory_xact_lock(_LOCK)))
                yield connection
        except SQLAlchemyError as error:
            raise self._problem(error) from error

    def rule(self, connection: Connection, name: str) -> str:
        """Return one rule of the charts; empty where it is not set."""
        found = select(tables.RULE.c.value).where(tables.RULE.c.name == name)
        return str(connection.execute(found).scalar() or "")

    def set_rule(self, connection: Connection, name: str, value: str) -> None:
        """Set one rule of the charts."""
        rule = tables.RULE
        changed = connection.execute(rule.update().where(rule.c.name == name).values(value=value))
        if changed.rowcount == 0:
            connection.execute(insert(rule).values(name=name, value=value))

    def _prepare(self, connection: Connection) -> None:
        tables.METADATA.create_all(connection)
        known = self.rule(connection, "format")
        if not known:
            self.set_rule(connection, "format", tables.FORMAT)
        elif known != tables.FORMAT:
            raise InputError(Problem(self.name, f"the format {known}", tables.FORMAT))
        if connection.dialect.name not in ("sqlite", "postgresql"):
            rule = tables.RULE
            connection.execute(select(rule).where(rule.c.name == "format").with_for_update())

    def _problem(self, error: Exception) -> InputError:
        lines = str(getattr(error, "orig", None) or error).strip().splitlines()
        found = lines[0].removeprefix("(").rstrip(":") if lines else type(error).__name__
        expected = "a history that can be opened: a file, a folder or a database URL"
        return InputError(Problem(self.name, found, expected))


def insert_rows(connection: Connection, table: Any, rows: Sequence[dict[str, Any]]) -> None:
    """Insert rows, some at a time."""
    for start in range(0, len(rows), ROWS_AT_ONCE):
        connection.execute(insert(table), list(rows[start : start + ROWS_AT_ONCE]))


def _located(place: str) -> tuple[str, Path | None, URL]:
    """Return the name to show (no password in it), the file if it is one, and the URL."""
    if "://" in place:
        try:
            url = make_url(place)
        except ArgumentError as error:
            shown = place.partition("://")[0] + "://..."
            raise InputError(Problem(shown, "no database URL", "dialect://host/name")) from error
        file = Path(url.database) if url.get_backend_name() == "sqlite" and url.database else None
        return url.render_as_string(hide_password=True), file, url
    path = Path(place)
    if path.is_dir() or not path.suffix:
        path = path / FILE_NAME
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        found = error.strerror or "an error"
        raise InputError(Problem(str(path.parent), found, "a folder that can be made")) from error
    return str(path), path, URL.create("sqlite", database=str(path))


def _engine(url: URL) -> Engine:
    if url.get_backend_name() != "sqlite":
        return create_engine(url)
    engine = create_engine(url, connect_args={"timeout": WAIT_SECONDS})

    @event.listens_for(engine, "connect")
    def _manual(connection: Any, _: object) -> None:
        # The driver would open transactions late; the next listener opens them at once.
        connection.isolation_level = None
        connection.execute("PRAGMA foreign_keys = ON")

    @event.listens_for(engine, "begin")
    def _immediate(connection: Connection) -> None:
        connection.execute(text("BEGIN IMMEDIATE"))

    return engine
