"""
Where durable layers outlast the daemon: one SQLite file with what is there now.

Not a log of changes: each obstacle has one row, which is overwritten when it is put again, and a
patch goes when a newer one covers it. A row holds the body of a change of this one obstacle or
patch, as the protocol has it, with a checksum, so that what is recalled is given to the site
exactly as its source would send it. Times are kept on the wall clock, for nothing else goes on
while the machine is off.

One connection writes and checkpoints, and keeps the file to itself: a second daemon on the same
file is refused, and the write-ahead log of SQLite versions before 3.51.3 is only safe like this.
"""

from __future__ import annotations

import os
import sqlite3
from collections.abc import Iterable, Iterator, Mapping, Sequence
from contextlib import suppress
from pathlib import Path
from typing import Any, Final, TypeAlias

import msgpack

from bywayd.crew.keep_rows import Ground, checksum, grown, obstacle_rows, patch_row

#: What a file of ours says it is ("Byws").
application_id: Final = 0x42797773
#: Of the tables below. A file of a later version is left alone.
schema_version: Final = 1

#: How long the one before us may take to let go of the file: it may just have been killed.
lock_wait_s: Final = 2.0

#: The write-ahead log is copied into the file when nothing else is to be done, or when it has
#: grown to so many pages of 4 KiB.
wal_pages_max: Final = 4096

_SCHEMA: Final = """
CREATE TABLE layers (
    number INTEGER PRIMARY KEY, layer TEXT NOT NULL UNIQUE, body BLOB NOT NULL,
    checksum INTEGER NOT NULL) STRICT;
CREATE TABLE obstacles (
    number INTEGER PRIMARY KEY, layer TEXT NOT NULL, id TEXT NOT NULL, expires_s REAL,
    body BLOB NOT NULL, packed BLOB NOT NULL, checksum INTEGER NOT NULL,
    UNIQUE (layer, id)) STRICT;
CREATE INDEX obstacles_expire ON obstacles (expires_s) WHERE expires_s IS NOT NULL;
CREATE TABLE patches (
    number INTEGER PRIMARY KEY AUTOINCREMENT, layer TEXT NOT NULL,
    x_m_min REAL NOT NULL, y_m_min REAL NOT NULL, x_m_max REAL NOT NULL, y_m_max REAL NOT NULL,
    body BLOB NOT NULL, packed BLOB NOT NULL, checksum INTEGER NOT NULL) STRICT;
CREATE INDEX patches_by_layer ON patches (layer);
"""

_PUT: Final = """
INSERT INTO obstacles (layer, id, expires_s, body, packed, checksum) VALUES (?, ?, ?, ?, ?, ?)
ON CONFLICT (layer, id) DO UPDATE SET expires_s = excluded.expires_s, body = excluded.body,
    packed = excluded.packed, checksum = excluded.checksum
"""

#: One change, as the front's channel carries it.
Change: TypeAlias = Mapping[str, Any]

#: Where a recall goes on: which table, and after which row.
Place: TypeAlias = tuple[int, int]
_TABLES: Final = ("layers", "obstacles", "patches")
recall_begin: Final[Place] = (0, 0)


class KeepFault(Exception):
    """The file cannot be used: foreign, damaged, too new, in use, out of reach."""


class Hindered(Exception):
    """Nothing can be written at the moment; what was to be kept is not, none of it."""


class KeepStore:
    """The file, open. One owner, one thread."""

    def __init__(self, file: Path, connection: sqlite3.Connection) -> None:
        self.file = file
        self._connection = connection
        self._page_bytes = self._number("PRAGMA page_size")
        #: Kept, for the bound that the front sets.
        self.patch_count = self._number("SELECT count(*) FROM patches")
        self.size_bytes = self._measured_bytes()
        #: There is something in the write-ahead log.
        self._untidy = True

    @classmethod
    def open(cls, file: Path, wall_s: float, wait_s: float = lock_wait_s) -> KeepStore:
        """
        Open a file, or make it, and look through all of it.

        Args:
            wall_s: The wall clock; what has expired by then is forgotten.
            wait_s: How long to wait for another process to let go of it.

        Raises:
            KeepFault: If it cannot be used, with the reason and what can be done.
        """
        try:
            return cls._open(file, wall_s, wait_s)
        except (sqlite3.Error, OSError, UnicodeError) as fault:
            raise KeepFault(_why_not(file, fault)) from fault

    @classmethod
    def _open(cls, file: Path, wall_s: float, wait_s: float) -> KeepStore:
        is_new = not file.exists() or file.stat().st_size == 0
        connection = sqlite3.connect(file, timeout=wait_s, isolation_level=None)
        try:
            # Before anything is read: the lock is taken with the first look, and then kept.
            connection.execute("PRAGMA locking_mode = EXCLUSIVE")
            _check_identity(file, connection, is_new=is_new)
            connection.execute("PRAGMA journal_mode = WAL")
            connection.execute("PRAGMA synchronous = FULL")
            connection.execute(f"PRAGMA wal_autocheckpoint = {wal_pages_max}")
            connection.execute("PRAGMA temp_store = MEMORY")
            connection.execute("BEGIN IMMEDIATE")
            if is_new:
                _make_tables(connection)
            connection.execute("DELETE FROM obstacles WHERE expires_s <= ?", (wall_s,))
            connection.execute("COMMIT")
            if is_new:
                _sync_folder(file.parent)  # otherwise a loss of power could take the name away
            found = connection.execute("PRAGMA integrity_check(1)").fetchone()[0]
            if found != "ok":
                raise KeepFault(f"{file} is damaged: {found}. {_REPAIR}")
            return cls(file, connection)
        except BaseException:
            connection.close()
            raise

    def close(self) -> None:
        """Let go of the file."""
        self._connection.close()

    # -- keeping ------------------------------------------------------------------------------

    def commit(self, changes: Iterable[Change]) -> Iterator[None]:
        """
        Keep some changes, all of them or none; a pause after each, for a sign of life.

        When the last pause is over they are on the disk. Doing it a second time does no harm.

        Raises:
            Hindered: If there is no room, or the file cannot be written or locked just now.
        """
        try:
            self._connection.execute("BEGIN IMMEDIATE")
            for change in changes:
                self._apply(change)
                yield
            patch_count = self._number("SELECT count(*) FROM patches")
            self._connection.execute("COMMIT")
        except sqlite3.Error as fault:
            self._roll_back()
            if isinstance(fault, sqlite3.OperationalError) and _is_passing(fault):
                raise Hindered(_why_not(self.file, fault)) from fault
            raise
        except BaseException:
            self._roll_back()
            raise
        self.patch_count = patch_count
        self.size_bytes = self._measured_bytes()
        self._untidy = True

    def _roll_back(self) -> None:
        # A full disk has rolled back already, and says so with another error.
        with suppress(sqlite3.Error):
            self._connection.execute("ROLLBACK")

    def _apply(self, change: Change) -> None:
        what, layer, execute = change["what"], change["layer"], self._connection.execute
        if what == "replace" or not change["settings"]["durable"]:
            execute("DELETE FROM obstacles WHERE layer = ?", (layer,))
            execute("DELETE FROM patches WHERE layer = ?", (layer,))
        if not change["settings"]["durable"]:
            execute("DELETE FROM layers WHERE layer = ?", (layer,))
            return
        self._keep_layer(layer, msgpack.packb(change["settings"]))
        if what in ("put", "replace"):
            self._put(layer, change)
        elif what == "patch":
            self._patch(layer, change)
        elif what == "drop":
            gone = ((layer, each) for each in change["ids"])
            self._connection.executemany("DELETE FROM obstacles WHERE layer = ? AND id = ?", gone)

    def _keep_layer(self, layer: str, body: bytes) -> None:
        self._connection.execute(
            "INSERT INTO layers (layer, body, checksum) VALUES (?1, ?2, ?3) ON CONFLICT (layer) "
            "DO UPDATE SET body = ?2, checksum = ?3 WHERE body <> ?2",
            (layer, body, checksum(layer, body)),
        )

    def _put(self, layer: str, change: Change) -> None:
        expires_s: float | None = change["expires_s"]
        rows = []
        for obstacle_id, body, packed in obstacle_rows(layer, change["message"], change["packed"]):
            check = checksum(layer, obstacle_id, repr(expires_s), body, packed)
            rows.append((layer, obstacle_id, expires_s, body, packed, check))
        self._connection.executemany(_PUT, rows)

    def _patch(self, layer: str, change: Change) -> None:
        ground = Ground(change["message"])
        older = self._connection.execute(
            "SELECT number, body FROM patches WHERE layer = ? AND x_m_min >= ? AND y_m_min >= ? "
            "AND x_m_max <= ? AND y_m_max <= ?",
            (layer, *grown(ground.box_m)),
        ).fetchall()
        covered = [(n,) for n, body in older if ground.covers(Ground(msgpack.unpackb(body)))]
        self._connection.executemany("DELETE FROM patches WHERE number = ?", covered)
        body, packed = patch_row(change["message"], change["packed"])
        self._connection.execute(
            "INSERT INTO patches (layer, x_m_min, y_m_min, x_m_max, y_m_max, body, packed, "
            "checksum) VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
            (layer, *ground.box_m, body, packed, checksum(layer, body, packed)),
        )

    def tidy(self) -> bool:
        """Copy the write-ahead log into the file, if there is anything in it. May take a while."""
        if not self._untidy:
            return False
        with suppress(sqlite3.OperationalError):  # no room for it now: the log keeps it as well
            self._connection.execute("PRAGMA wal_checkpoint(PASSIVE)")
        self._untidy = False
        return True

    # -- recalling ----------------------------------------------------------------------------

    def recall(
        self, place: Place, wall_s: float, count_max: int, bytes_max: int
    ) -> tuple[list[dict[str, Any]], Place | None]:
        """
        Return some of what is kept, as changes of one obstacle or patch each, and where to go on.

        The layers come first, then the obstacles, then the patches in their order. The place is
        None when there is no more.

        Raises:
            KeepFault: If a row is not what was written.
        """
        found: list[dict[str, Any]] = []
        size = 0
        table, after = place
        while table < len(_TABLES):
            for number, change, row_bytes in self._rows(table, after, wall_s):
                found.append(change)
                after, size = number, size + row_bytes
                if len(found) >= count_max or size >= bytes_max:
                    return found, (table, after)
            table, after = table + 1, 0
        return found, None

    def _rows(
        self, table: int, after: int, wall_s: float
    ) -> Iterator[tuple[int, dict[str, Any], int]]:
        name = _TABLES[table]
        try:
            rows = self._connection.execute(
                f"SELECT * FROM {name} WHERE number > ? ORDER BY number", (after,)
            )
            settings = self._settings()
            for row in rows:
                yield row[0], self._change_of(name, row, settings, wall_s), _size_of(row)
        except sqlite3.DatabaseError as fault:
            raise KeepFault(f"{self.file} is damaged: {fault}. {_REPAIR}") from fault

    def _settings(self) -> dict[str, dict[str, Any]]:
        rows = self._connection.execute("SELECT number, layer, body, checksum FROM layers")
        found = {}
        for number, layer, body, check in rows:
            self._check("layers", number, check, layer, body)
            found[layer] = msgpack.unpackb(body)
        return found

    def _change_of(
        self, table: str, row: Sequence[Any], settings: Mapping[str, Any], wall_s: float
    ) -> dict[str, Any]:
        number, layer, check = row[0], row[1], row[-1]
        if table != "layers" and layer not in settings:
            raise KeepFault(f"{self.file} is damaged: row {number} of {table}. {_REPAIR}")
        change = {"layer": layer, "message": None, "packed": b"", "ids": [], "expires_in_s": None}
        if table == "layers":
            return {**change, "what": "claim", "settings": settings[layer]}
        change["settings"] = settings[layer]
        body, packed = row[-3], row[-2]
        if table == "patches":
            self._check(table, number, check, layer, body, packed)
            return {**change, "what": "patch", "message": msgpack.unpackb(body), "packed": packed}
        obstacle_id, expires_s = row[2], row[3]
        self._check(table, number, check, layer, obstacle_id, repr(expires_s), body, packed)
        change |= {"what": "put", "message": msgpack.unpackb(body), "packed": packed}
        change |= {"ids": [obstacle_id]}
        if expires_s is not None:
            change["expires_in_s"] = max(0.0, expires_s - wall_s)
        return change

    def _check(self, table: str, number: int, expected: int, *parts: str | bytes) -> None:
        if checksum(*parts) != expected:
            raise KeepFault(
                f"{self.file} is damaged: row {number} of {table} is not what was written. "
                f"{_REPAIR}"
            )

    # -- within -------------------------------------------------------------------------------

    def _number(self, question: str) -> int:
        return int(self._connection.execute(question).fetchone()[0])

    def _measured_bytes(self) -> int:
        pages = self._number("PRAGMA page_count") - self._number("PRAGMA freelist_count")
        return pages * self._page_bytes


_REPAIR: Final = "Put a copy in its place, or move it away and send its layers again."


def _check_identity(file: Path, connection: sqlite3.Connection, *, is_new: bool) -> None:
    claimed = connection.execute("PRAGMA application_id").fetchone()[0]
    version = connection.execute("PRAGMA user_version").fetchone()[0]
    if is_new:
        return
    if claimed != application_id:
        raise KeepFault(f"{file} is a database of something else. Name another file.")
    if version != schema_version:
        raise KeepFault(
            f"{file} has tables of version {version}, this daemon has version {schema_version}. "
            "Use the daemon that made it, or name another file."
        )


def _make_tables(connection: sqlite3.Connection) -> None:
    # Not executescript: it would commit first.
    for statement in filter(str.strip, _SCHEMA.split(";")):
        connection.execute(statement)
    connection.execute(f"PRAGMA application_id = {application_id}")
    connection.execute(f"PRAGMA user_version = {schema_version}")


def _sync_folder(folder: Path) -> None:
    descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


#: Errors after which the same may work later: no room, another process at it, read-only for now.
_PASSING: Final = ("SQLITE_FULL", "SQLITE_BUSY", "SQLITE_LOCKED", "SQLITE_READONLY")


def _is_passing(fault: sqlite3.OperationalError) -> bool:
    return _name_of(fault).startswith(_PASSING)


def _name_of(fault: BaseException) -> str:
    return str(getattr(fault, "sqlite_errorname", None) or "")


def _why_not(file: Path, fault: Exception) -> str:
    name = _name_of(fault)
    if name.startswith(("SQLITE_BUSY", "SQLITE_LOCKED")):
        return f"{file} is in use: another daemon keeps its layers there ({fault})"
    if name.startswith("SQLITE_FULL"):
        return f"there is no room for {file} ({fault})"
    if name.startswith(("SQLITE_READONLY", "SQLITE_CANTOPEN")) or isinstance(fault, OSError):
        return f"{file} cannot be written: file and folder must be there and ours ({fault})"
    if name.startswith("SQLITE_NOTADB"):
        return f"{file} is not a database. Name another file."
    return f"{file} cannot be used: {fault} {name}. {_REPAIR}"


def _size_of(row: Sequence[Any]) -> int:
    return sum(len(part) for part in row if isinstance(part, str | bytes))
