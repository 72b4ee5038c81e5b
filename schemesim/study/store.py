"""The store of a campaign: one SQLite file, to which each chunk is added in one transaction.

What was added survives an interrupt, and the death of the process or machine: the journal is a
write-ahead log, synchronised at each commit. A chunk is in the file whole or not at all, and a
trial never twice, even with two processes at work on one store. The file holds no pickles, so a
store may be opened whoever made it.

Tables
------
``meta (key, value)``
    ``form``: version of these tables; ``about``: what the campaign rests on, as JSON (a store is taken
    on with the same only); ``trials``: the most asked for; ``source``: text to make the campaign from again.
``place (id, variant, event, limit_us, facts)``
    ``facts`` as JSON, once the first chunk is in.
``ending (id, text)``
    Distinct endings, as JSON.
``chunk (place, first, end, seconds, counts)``
    ``counts``: JSON packed by zlib: for each ending its id, clearing times in microseconds (null: not
    cleared) with their counts, the sums of times and of their squares; with given failure sets the number of
    the tally, and the clearing time, of each trial.
"""

from __future__ import annotations

import json
import os
import sqlite3
import zlib
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from types import TracebackType
from typing import Any
from urllib.parse import quote

from schemesim.errors import ErrorList, RunError, reject
from schemesim.study.campaign_counts import PlaceCounts
from schemesim.study.campaign_tallies import CampaignEnding, PlaceFacts, Tally, joined_ranges, merged
from schemesim.study.campaign_work import Chunk

FORM = 1
"""Version of the tables."""

WAIT_S = 60.0
"""How long another process at work on the store is waited for."""

_TABLES = """
CREATE TABLE meta (key TEXT PRIMARY KEY, value TEXT NOT NULL) WITHOUT ROWID;
CREATE TABLE place (id INTEGER PRIMARY KEY, variant TEXT NOT NULL, event TEXT NOT NULL, limit_us INTEGER NOT NULL,
                    facts TEXT, UNIQUE (variant, event));
CREATE TABLE ending (id INTEGER PRIMARY KEY, text TEXT NOT NULL UNIQUE);
CREATE TABLE chunk (place INTEGER NOT NULL REFERENCES place, first INTEGER NOT NULL, "end" INTEGER NOT NULL,
                    seconds REAL NOT NULL, counts BLOB NOT NULL, PRIMARY KEY (place, first));
"""


@dataclass(frozen=True)
class Place:
    """An event under a variant, as the store lists it."""

    variant: str
    event: str
    limit_us: int


class Store:
    """A store that is open; a context manager that closes it.

    Parameters
    ----------
    path : str
    write : bool
        Make the file where there is none, and add to it; else it is only read.

    Raises
    ------
    InputError
        For a file that is no store, cannot be opened, or is not there and only to be read.
    """

    def __init__(self, path: str | os.PathLike[str], *, write: bool = False) -> None:
        self.path = os.fspath(path)
        self.write = write
        if os.path.isdir(self.path) or not os.path.isdir(os.path.dirname(os.path.abspath(self.path))):
            raise reject("store", self.path, "a file in a folder that is there")
        if not write and not os.path.exists(self.path):
            raise reject("store", self.path, "a store that is there")
        with self._told():
            self._db = self._open()
        try:
            with self._told():
                self._check()
        except BaseException:
            self._db.close()
            raise

    def _open(self) -> sqlite3.Connection:
        uri = f"file:{quote(os.path.abspath(self.path))}"
        if self.write:
            return sqlite3.connect(uri, WAIT_S, isolation_level=None, uri=True)
        db = sqlite3.connect(f"{uri}?mode=ro", WAIT_S, isolation_level=None, uri=True)
        try:
            db.execute("SELECT count(*) FROM sqlite_master").fetchone()
        except sqlite3.OperationalError:  # a folder that cannot be written has no room for the shared memory of the log
            db.close()
            db = sqlite3.connect(f"{uri}?mode=ro&immutable=1", WAIT_S, isolation_level=None, uri=True)
        except BaseException:
            db.close()
            raise
        return db

    def _check(self) -> None:
        tables = {name for (name,) in self._db.execute("SELECT name FROM sqlite_master WHERE type = 'table'")}
        self.fresh = not tables
        if self.fresh and not self.write:
            raise reject("store", self.path, "a store with a campaign in it; this one is empty")
        if tables and not {"meta", "place", "ending", "chunk"} <= tables:
            raise reject("store", self.path, "a store of a campaign; this is another database")
        if tables and (form := self._meta("form")) != str(FORM):
            raise reject("store", self.path, f"a store of form {FORM}; this one has form {form}")

    def __enter__(self) -> Store:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        self.close()

    def close(self) -> None:
        """Close the file."""
        self._db.close()

    @contextmanager
    def _told(self) -> Iterator[None]:
        """What goes wrong with the file, in plain words."""
        try:
            yield
        except sqlite3.DatabaseError as error:
            if "not a database" in str(error) or "malformed" in str(error):
                raise reject("store", self.path, f"a store of a campaign ({error})") from None
            if "unable to open" in str(error):
                raise reject("store", self.path, f"a file that can be opened ({error})") from None
            raise RunError(f"store {self.path}: {error}; what was added before is kept") from None

    @contextmanager
    def _transaction(self) -> Iterator[None]:
        with self._told():
            self._db.execute("BEGIN IMMEDIATE")
            try:
                yield
                self._db.execute("COMMIT")
            except BaseException:
                with suppress(sqlite3.Error):  # it may have been rolled back already
                    self._db.execute("ROLLBACK")
                raise

    def _meta(self, key: str) -> str:
        row = self._db.execute("SELECT value FROM meta WHERE key = ?", (key,)).fetchone()
        return "" if row is None else str(row[0])

    @property
    def about(self) -> dict[str, Any]:
        """What the campaign rests on."""
        with self._told():
            found: dict[str, Any] = json.loads(self._meta("about"))
        return found

    @property
    def source(self) -> str:
        """The text from which the campaign can be made again; empty where none was given."""
        with self._told():
            return self._meta("source")

    @property
    def trials(self) -> int:
        """The most trials asked for at each place."""
        with self._told():
            return int(self._meta("trials"))

    def take_on(self, about: Mapping[str, object], places: Sequence[Place], trials: int, source: str = "") -> None:
        """Make the store that of a campaign, or check that it is.

        Raises
        ------
        InputError
            If the store is that of a campaign that rests on something else; all that differs is told.
        """
        text = json.dumps(about, sort_keys=True)
        if self.fresh:
            with self._told():
                self._db.execute("PRAGMA journal_mode = WAL")
        with self._transaction():
            if self._db.execute("SELECT 1 FROM sqlite_master WHERE name = 'meta'").fetchone() is None:
                for statement in _TABLES.split(";"):
                    self._db.execute(statement)
                head = {"form": str(FORM), "about": text, "trials": str(trials), "source": source}
                self._db.executemany("INSERT INTO meta VALUES (?, ?)", head.items())
                rows = [(i, p.variant, p.event, p.limit_us) for i, p in enumerate(places)]
                self._db.executemany("INSERT INTO place VALUES (?, ?, ?, ?, NULL)", rows)
            else:
                _compare(self.path, json.loads(self._meta("about")), json.loads(text))
                most = str(max(trials, int(self._meta("trials"))))
                self._db.execute("UPDATE meta SET value = ? WHERE key = 'trials'", (most,))
                limits = [(p.limit_us, i) for i, p in enumerate(places)]
                self._db.executemany("UPDATE place SET limit_us = ? WHERE id = ?", limits)
        self.fresh = False
        with self._told():
            self._db.execute("PRAGMA synchronous = FULL")

    def done(self) -> dict[int, list[tuple[int, int]]]:
        """Ranges of trials that are in, by the number of the place."""
        found: dict[int, list[tuple[int, int]]] = {}
        with self._told():
            for place, first, end in self._db.execute('SELECT place, first, "end" FROM chunk ORDER BY place, first'):
                found.setdefault(place, []).append((first, end))
        return found

    def add(self, chunk: Chunk) -> bool:
        """Add a chunk in one transaction; False (and nothing is added) if a trial of it is in already."""
        with self._transaction():
            twice = 'SELECT 1 FROM chunk WHERE place = ? AND first < ? AND "end" > ?'
            if self._db.execute(twice, (chunk.place, chunk.end, chunk.first)).fetchone() is not None:
                return False
            texts = [(t.ending.to_text(),) for t in chunk.tallies]
            self._db.executemany("INSERT OR IGNORE INTO ending (text) VALUES (?)", texts)
            ids = [self._db.execute("SELECT id FROM ending WHERE text = ?", text).fetchone()[0] for text in texts]
            data = [
                [i, t.times, str(t.sum_us), str(t.sum_us2)] for i, t in zip(ids, chunk.tallies, strict=True)
            ]
            packed = zlib.compress(json.dumps([data, chunk.each], separators=(",", ":")).encode())
            row = (chunk.place, chunk.first, chunk.end, chunk.seconds, packed)
            self._db.execute("INSERT INTO chunk VALUES (?, ?, ?, ?, ?)", row)
            facts = json.dumps(chunk.facts.to_data())
            self._db.execute("UPDATE place SET facts = ? WHERE id = ? AND facts IS NULL", (facts, chunk.place))
        return True

    def places(self) -> list[Place]:
        """Every place of the campaign, in order."""
        with self._told():
            rows = self._db.execute("SELECT variant, event, limit_us FROM place ORDER BY id").fetchall()
        return [Place(*row) for row in rows]

    def chunks(self, place: int) -> Iterator[Chunk]:
        """The chunks of a place that are in, by their first trial."""
        with self._told():
            told = self._db.execute("SELECT facts FROM place WHERE id = ?", (place,)).fetchone()
            if told is None or told[0] is None:
                return
            facts = PlaceFacts.from_data(json.loads(told[0]))
            query = 'SELECT first, "end", seconds, counts FROM chunk WHERE place = ? ORDER BY first'
            for first, end, seconds, packed in self._db.execute(query, (place,)).fetchall():
                data, each = json.loads(zlib.decompress(packed))
                tallies = tuple(
                    Tally(self._ending(i), tuple((us, n) for us, n in times), int(one), int(two))
                    for i, times, one, two in data
                )
                told_each = None if each is None else tuple((i, us) for i, us in each)
                yield Chunk(place, first, end, facts, tallies, told_each, seconds)

    def _ending(self, number: int) -> CampaignEnding:
        (text,) = self._db.execute("SELECT text FROM ending WHERE id = ?", (number,)).fetchone()
        return CampaignEnding.from_text(text)

    def counts(self, number: int) -> PlaceCounts | None:
        """Everything counted at a place; None where nothing is in."""
        place, chunks = self.places()[number], list(self.chunks(number))
        if not chunks:
            return None
        ranges = joined_ranges((c.first, c.end) for c in chunks)
        tallies = merged(t for c in chunks for t in c.tallies)
        return PlaceCounts(place.variant, place.event, place.limit_us, chunks[0].facts, ranges, tallies)

    def __repr__(self) -> str:
        return f"Store({self.path})"


def _compare(path: str, old: Mapping[str, Any], new: Mapping[str, Any]) -> None:
    errors = ErrorList()
    for key in sorted({*old, *new}):
        if old.get(key) == new.get(key):
            continue
        before, now = old.get(key), new.get(key)
        if isinstance(before, dict) and isinstance(now, dict):
            for name in sorted({*before, *now}):
                if before.get(name) != now.get(name):
                    told = f"{before.get(name, 'none')} as in the store {path}, or another store"
                    errors.add(f"campaign, {key}: {name}", now.get(name, "none"), told)
        else:
            errors.add(f"campaign, {key}", now, f"{_brief(before)} as in the store {path}, or another store")
    errors.raise_if_any()


def _brief(value: object) -> str:
    text = repr(value)
    return text if len(text) <= 80 else text[:77] + "..."
