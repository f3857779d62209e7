"""What was done, from what? SQLite; an index that can be rebuilt from the products."""

from __future__ import annotations

import datetime as dt
import sqlite3
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

from firnlight.core.errors import InputProblem, NoRoom, SettingsProblem

SCHEMA = 1

_TABLES = """
create table product (
  tile text not null, day text not null, name text not null, path text not null, key text not null,
  size integer not null, mtime_ns integer not null, digest text not null, primary key (tile, day, name));
create table content (
  path text primary key, size integer not null, mtime_ns integer not null, inode integer not null, stated text not null,
  id text not null);
create table refusal (
  subject text primary key, day text, tile text, reason text not null, since text not null);
create table tile_day (
  tile text not null, day text not null, scenes text not null, finished text not null, seconds real not null,
  primary key (tile, day));
create table run (
  id integer primary key, started text not null, finished text, command text not null, done integer, already integer,
  refused integer, failed integer, exit_code integer);
"""


@dataclass(frozen=True)
class Product:
    """One file of the store and the key of what it was made from."""

    tile: str
    day: dt.date
    name: str
    path: str
    key: str
    size: int
    mtime_ns: int
    digest: str


@dataclass(frozen=True)
class Refusal:
    """An input that could not be used, and why."""

    subject: str
    reason: str
    day: dt.date | None = None
    tile: str | None = None
    since: str = ""


class Ledger:
    """One writer, the main process; a write is one transaction and nothing is written when nothing happened."""

    def __init__(self, path: Path, read_only: bool = False) -> None:
        self.path = path
        try:
            if read_only and not path.exists():
                self._db = sqlite3.connect(":memory:")
                self._db.executescript(f"{_TABLES} pragma user_version = {SCHEMA};")
            elif read_only:
                self._db = sqlite3.connect(f"{path.as_uri()}?mode=ro", uri=True, timeout=30)
            else:
                self._db = sqlite3.connect(path, timeout=30)
            self._db.isolation_level = None
            self._db.execute("pragma synchronous = full")
            version = self._db.execute("pragma user_version").fetchone()[0]
            if version == 0 and not read_only:
                self._db.executescript(f"begin; {_TABLES} pragma user_version = {SCHEMA}; commit;")
            elif version != SCHEMA:
                raise SettingsProblem(
                    str(path), "version", version, f"a ledger of version {SCHEMA}",
                    "use the firnlight that wrote it, or delete the file: the next night rebuilds it from the maps",
                )  # fmt: skip
        except sqlite3.DatabaseError as error:
            raise self._trouble(error) from error

    def close(self) -> None:
        self._db.close()

    @contextmanager
    def _transaction(self) -> Iterator[sqlite3.Connection]:
        self._db.execute("begin immediate")
        try:
            yield self._db
            self._db.execute("commit")
        except BaseException as error:
            if self._db.in_transaction:
                self._db.execute("rollback")
            if isinstance(error, sqlite3.OperationalError):
                raise self._trouble(error) from error
            raise

    def _trouble(self, error: sqlite3.Error) -> InputProblem:
        """What an error of SQLite asks of the user: room on the disk, or a new ledger."""
        if "full" in str(error) or "I/O" in str(error):
            return NoRoom(
                str(self.path), "free disk space", str(error), "room for the ledger",
                "make room (or mend the disk), then run the same command: it goes on where it stopped",
            )  # fmt: skip
        return SettingsProblem(
            str(self.path), "ledger", str(error), "a readable ledger",
            "delete the file: the next night rebuilds it from the maps",
        )  # fmt: skip

    def products(self) -> dict[tuple[str, dt.date, str], Product]:
        rows = self._db.execute("select tile, day, name, path, key, size, mtime_ns, digest from product")
        found = (Product(row[0], dt.date.fromisoformat(row[1]), *row[2:]) for row in rows)
        return {(one.tile, one.day, one.name): one for one in found}

    def content(self, path: str, size: int, mtime_ns: int, inode: int, stated: str) -> str | None:
        """The content id taken earlier of a file that has not changed since, else None."""
        row = self._db.execute(
            "select id from content where path = ? and size = ? and mtime_ns = ? and inode = ? and stated = ?",
            (path, size, mtime_ns, inode, stated),
        ).fetchone()
        return row[0] if row else None

    def record_contents(self, rows: Iterable[tuple[str, int, int, int, str, str]]) -> None:
        """Keep content ids: path, size, mtime_ns, inode, stated checksum, id."""
        rows = list(rows)
        if rows:
            with self._transaction() as db:
                db.executemany("insert or replace into content values (?, ?, ?, ?, ?, ?)", rows)

    def record_products(self, products: Iterable[Product]) -> None:
        """Record products that are in place."""
        with self._transaction() as db:
            self._put(db, products)

    @staticmethod
    def _put(db: sqlite3.Connection, products: Iterable[Product]) -> None:
        db.executemany(
            "insert or replace into product values (?, ?, ?, ?, ?, ?, ?, ?)",
            [(p.tile, p.day.isoformat(), p.name, p.path, p.key, p.size, p.mtime_ns, p.digest) for p in products],
        )

    def record(
        self, tile: str, day: dt.date, products: Iterable[Product], scenes: str, finished: str, seconds: float
    ) -> None:
        """Record the products of a tile-day, after they are in place."""
        with self._transaction() as db:
            self._put(db, products)
            db.execute(
                "insert or replace into tile_day values (?, ?, ?, ?, ?)",
                (tile, day.isoformat(), scenes, finished, seconds),
            )
            db.execute("delete from refusal where tile = ? and day = ?", (tile, day.isoformat()))

    def refusals(self) -> list[Refusal]:
        rows = self._db.execute("select subject, reason, day, tile, since from refusal order by day, subject")
        return [Refusal(r[0], r[1], dt.date.fromisoformat(r[2]) if r[2] else None, r[3], r[4]) for r in rows]

    def record_refusals(self, refusals: list[Refusal], now: str, looked_at: Iterable[tuple[str, dt.date]]) -> None:
        """Make the list of refused inputs be `refusals`, and what is known of tile-days not looked at.

        An old refusal keeps the time it was first met.
        """
        old = {one.subject: one for one in self.refusals()}
        seen = set(looked_at)
        elsewhere = {s: r for s, r in old.items() if r.tile and r.day and (r.tile, r.day) not in seen}
        new = elsewhere | {one.subject: one for one in refusals}
        if {s: r.reason for s, r in old.items()} == {s: r.reason for s, r in new.items()}:
            return
        with self._transaction() as db:
            db.execute("delete from refusal")
            for subject, one in sorted(new.items()):
                same = subject in old and old[subject].reason == one.reason
                since = old[subject].since if same else now
                day = one.day.isoformat() if one.day else None
                db.execute("insert into refusal values (?, ?, ?, ?, ?)", (subject, day, one.tile, one.reason, since))

    def was_cut_short(self) -> bool:
        """True where the last run did not come to its end."""
        row = self._db.execute("select finished from run order by id desc limit 1").fetchone()
        return row is not None and row[0] is None

    def start_run(self, command: str, now: str) -> int:
        with self._transaction() as db:
            return int(db.execute("insert into run (started, command) values (?, ?)", (now, command)).lastrowid or 0)

    def end_run(self, run: int, now: str, done: int, already: int, refused: int, failed: int, exit_code: int) -> None:
        with self._transaction() as db:
            db.execute(
                "update run set finished = ?, done = ?, already = ?, refused = ?, failed = ?, exit_code = ? where id = ?",
                (now, done, already, refused, failed, exit_code, run),
            )

    def runs(self, most: int = 10) -> list[tuple[object, ...]]:
        """The latest runs: started, finished, done, already, refused, failed, exit code."""
        return self._db.execute(
            "select started, finished, done, already, refused, failed, exit_code from run order by id desc limit ?",
            (most,),
        ).fetchall()

    def tile_days(self) -> list[tuple[str, dt.date, str, str, float]]:
        """Finished tile-days: tile, day, scenes (JSON), when, seconds."""
        rows = self._db.execute("select tile, day, scenes, finished, seconds from tile_day order by day, tile")
        return [(r[0], dt.date.fromisoformat(r[1]), r[2], r[3], r[4]) for r in rows]
