"""Who does the work of a campaign: this process, processes of our own, or any executor.

A piece of work whose worker died is given out again: processes of our own are replaced, while an executor
that was handed in is its owner's, so a broken one ends the run (what was finished is kept by the caller).
"""

from __future__ import annotations

import multiprocessing
import os
import signal
import sys
import threading
from collections import Counter, deque
from collections.abc import Callable, Iterator
from concurrent.futures import FIRST_COMPLETED, BrokenExecutor, Executor, Future, ProcessPoolExecutor, wait
from contextlib import suppress
from dataclasses import replace
from multiprocessing.connection import Connection
from types import TracebackType

from schemesim.errors import RunError, SchemesimError
from schemesim.study.campaign_work import Chunk, Missing, Work, run_work

AHEAD = 256
"""Pieces of work handed to an executor before the first comes back; they are small."""

AHEAD_EACH = 3
"""The same for each process of our own."""

WITH_SCHEME = 8
"""Pieces that carry the scheme of a variant with them from the start, so that workers have it soon."""

MAX_DEATHS = 8
"""Crews of processes in a row that may die with no piece of work finished between."""

Packed = Callable[[int], bytes]
"""The scheme of a place, ready to travel."""


class Crew:
    """Yields chunks as they finish; a context manager that lets go of the workers.

    Parameters
    ----------
    work : iterator of Work
    packed : callable
        From the number of a place to its scheme.
    executor : Executor or None
    workers : int
        Without an executor; more than one are processes.
    pieces : int
        How many pieces of work there are.
    """

    def __init__(
        self, work: Iterator[Work], packed: Packed, executor: Executor | None, workers: int, pieces: int
    ) -> None:
        self._work, self._packed, self._given = work, packed, executor
        self._own: _Processes | None = None
        self._workers = min(workers, pieces)
        self._again: deque[Work] = deque()
        self._waiting: dict[Future[Chunk | Missing], Work] = {}
        self._sent: Counter[str] = Counter()
        self._deaths = 0

    def __enter__(self) -> Crew:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        for future in self._waiting:
            future.cancel()
        if self._own is not None:
            self._own.close(at_once=bool(self._waiting))

    def __iter__(self) -> Iterator[Chunk]:
        if self._given is None and self._workers <= 1:
            for work in self._work:
                yield self._here(work)
            return
        while True:
            broken = self._fill()
            if not self._waiting and not broken:
                return
            if self._waiting:
                wait(self._waiting, return_when=FIRST_COMPLETED)
            for future in [f for f in self._waiting if f.done()]:
                found = self._take(future)
                broken |= found is None
                if isinstance(found, Chunk):
                    self._deaths = 0
                    yield found
            if broken:
                yield from self._replace()

    def finished(self) -> Iterator[Chunk]:
        """Chunks that are finished and were not yielded, once nothing more is wanted."""
        for future in [f for f in self._waiting if f.done() and not f.cancelled()]:
            del self._waiting[future]
            if future.exception() is None and isinstance(done := future.result(), Chunk):
                yield done

    def _here(self, work: Work) -> Chunk:
        done = run_work(work)
        if isinstance(done, Missing):
            done = run_work(replace(work, packed=self._packed(work.place)))
        if isinstance(done, Missing):
            raise RunError(f"{work}: the scheme was handed over and is missing")
        return done

    def _fill(self) -> bool:
        """Hand out work; True if the executor is broken."""
        ahead = AHEAD if self._given is not None else AHEAD_EACH * self._workers
        while len(self._waiting) < ahead:
            work = self._again.popleft() if self._again else next(self._work, None)
            if work is None:
                return False
            if self._sent[work.key] < WITH_SCHEME and work.packed is None:
                work = replace(work, packed=self._packed(work.place))
            self._sent[work.key] += 1
            try:
                self._waiting[self._executor().submit(run_work, work)] = work
            except BrokenExecutor:
                self._again.appendleft(work)
                return True
            except RuntimeError as error:  # shut down by its owner
                raise RunError(f"the executor takes no work: {error}; {_KEPT}") from error
        return False

    def _executor(self) -> Executor:
        if self._given is not None:
            return self._given
        if self._own is None:
            self._own = _Processes(self._workers)
        return self._own.pool

    def _take(self, future: Future[Chunk | Missing]) -> Chunk | Missing | None:
        """What came of a piece of work; None if its worker died."""
        work = self._waiting.pop(future)
        try:
            done = future.result()
        except BrokenExecutor as error:
            if self._given is not None:
                raise RunError(f"the executor lost a worker and is broken ({error}); {_KEPT}") from error
            self._again.append(work)
            return None
        except SchemesimError:
            raise
        except Exception as error:
            raise RunError(f"{work} came to nothing: {type(error).__name__}: {error}; {_KEPT}") from error
        if isinstance(done, Missing):
            self._again.appendleft(replace(work, packed=self._packed(work.place)))
        return done

    def _replace(self) -> Iterator[Chunk]:
        """New processes for those that died; what had come back by then is yielded."""
        if self._given is not None:
            raise RunError(f"the executor is broken; {_KEPT}")
        wait(self._waiting)  # a broken pool gives up all of them at once
        for future in list(self._waiting):
            if isinstance(done := self._take(future), Chunk):
                self._deaths = 0
                yield done
        if self._own is not None:
            self._own.close(at_once=True)
            self._own = None
        self._deaths += 1
        if self._deaths > MAX_DEATHS:
            stuck = "; ".join(sorted({str(w) for w in self._again})[:4])
            raise RunError(f"worker processes died {self._deaths} times in a row, at work on: {stuck}; {_KEPT}")


_KEPT = "what was finished is in the store, and the same call goes on from there"


class _Processes:
    """A pool of processes that end when this one does, however it ends."""

    def __init__(self, workers: int) -> None:
        context = multiprocessing.get_context("spawn")
        theirs, self._ours = context.Pipe(duplex=False)
        self._theirs = theirs
        self.pool = ProcessPoolExecutor(workers, context, initializer=_follow, initargs=(theirs,))

    def close(self, at_once: bool) -> None:
        """End the processes; at once: what they are at is given up."""
        if at_once:
            self._ours.close()
        self.pool.shutdown(wait=True, cancel_futures=True)
        self._ours.close()
        self._theirs.close()


def _follow(parent: Connection) -> None:
    """In a worker: leave interrupts to the parent, and end with it, even where it is killed."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    sys.stderr = open(os.devnull, "w")  # noqa: SIM115 - lives as long as the process

    def watch() -> None:
        with suppress(OSError, EOFError):
            parent.recv_bytes()  # nothing is ever sent: this returns when the other end is closed
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()
