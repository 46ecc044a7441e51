"""Many recordings checked at once, a process for each core; results as they come.

A worker takes one file after the other down its pipe. One that dies takes only the file it was at with it: that is
reported and another worker goes on.
"""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import signal
import time
from collections import deque
from collections.abc import Callable, Generator, Iterator, Sequence
from dataclasses import dataclass, field
from multiprocessing.connection import Connection, wait
from multiprocessing.process import BaseProcess
from pathlib import Path

from preview.engine.check.record import stamp
from preview.engine.check.results import CheckPlan, FileCheck, FileFailure
from preview.engine.check.run import Stages
from preview.engine.check.single import check_file
from preview.errors import PreviewError, printable

__all__ = ["Finished", "check_all", "cores"]

TELL_S = 0.2
"""Time between two words of a worker about how far it is [s]."""

Finished = FileCheck | FileFailure
Share = tuple[int, float]
"""Which file, and how much of it is done."""


def cores() -> int:
    """Cores that this process may use."""
    try:
        return len(os.sched_getaffinity(0))
    except AttributeError:  # not on this system
        return os.cpu_count() or 1


def check_all(
    paths: Sequence[Path], plan: CheckPlan, workers: int, tell: Callable[[dict[int, float]], None]
) -> Generator[tuple[int, Finished]]:
    """Check every file; its place in ``paths`` and its result, in the order in which they finish.

    Parameters
    ----------
    paths : sequence of Path
        The files.
    plan : CheckPlan
        What they are put through.
    workers : int
        Processes at once; with 1 everything is done in this one.
    tell : callable
        Told now and then how much of each unfinished file is done, by its place.
    """
    if min(workers, len(paths)) <= 1:
        yield from _one_by_one(paths, plan, tell)
    else:
        yield from _Pool(paths, plan, min(workers, len(paths)), tell).run()


def _one_by_one(
    paths: Sequence[Path], plan: CheckPlan, tell: Callable[[dict[int, float]], None]
) -> Iterator[tuple[int, Finished]]:
    stages = Stages(plan.session)
    for i, path in enumerate(paths):

        def say(share: float, i: int = i) -> None:
            tell({i: share})

        yield i, _checked(path, plan, stages, _Teller(say))


def _checked(path: Path, plan: CheckPlan, stages: Stages, teller: _Teller) -> Finished:
    """The result of one file, or why there is none."""
    try:
        teller.begin(path)
        return check_file(path, plan, stages, teller)
    except PreviewError as error:
        return FileFailure(str(path), error.message, error.hint, error.exit_code)
    except BrokenPipeError:  # of the teller: nobody listens any more
        raise
    except Exception as error:
        if os.environ.get("PREVIEW_DEBUG") == "1":
            raise
        said = f"{path}: an error inside the program ({type(error).__name__}: {printable(str(error))})"
        return FileFailure(str(path), said, "PREVIEW_DEBUG=1 shows where", 1)


class _Teller:
    """Turns frames done into a share of the file, and says it now and then."""

    def __init__(self, say: Callable[[float], None]) -> None:
        self._say = say
        self._done = self._all = 0
        self._next_s = 0.0

    def begin(self, path: Path) -> None:
        """Another file."""
        from preview.audio.files import probe
        from preview.audio.logs import is_log

        self._done, self._all, self._next_s = 0, 0, 0.0
        if not is_log(path):
            with contextlib.suppress(PreviewError):
                self._all = max(probe(path).frames, 0)

    def __call__(self, done: int, more: int) -> None:
        self._done += done
        self._all += more
        now_s = time.monotonic()
        if self._all and now_s >= self._next_s:
            self._next_s = now_s + TELL_S
            self._say(min(self._done / self._all, 1.0))


@dataclass(slots=True)
class _Worker:
    process: BaseProcess
    pipe: Connection
    at: int | None = None
    """The file it is at."""


@dataclass(slots=True)
class _Pool:
    paths: Sequence[Path]
    plan: CheckPlan
    count: int
    tell: Callable[[dict[int, float]], None]
    workers: list[_Worker] = field(default_factory=list)
    shares: dict[int, float] = field(default_factory=dict)

    def run(self) -> Iterator[tuple[int, Finished]]:
        # the largest first, so that none is left with one core at the end
        waiting = deque(sorted(range(len(self.paths)), key=lambda i: -(stamp(self.paths[i]) or [0])[0]))
        try:
            self.workers = [self._started() for _ in range(self.count)]
            while True:
                for worker in self.workers:
                    if worker.at is None and waiting:
                        worker.at = waiting.popleft()
                        with contextlib.suppress(OSError):  # its end is seen below
                            worker.pipe.send(self.paths[worker.at])
                busy = [w for w in self.workers if w.at is not None]
                if not busy:
                    return
                for ready in wait([w.pipe for w in busy]):
                    worker = next(w for w in busy if w.pipe is ready)
                    yield from self._heard(worker)
                self.tell(self.shares)
        finally:
            self._end()

    def _heard(self, worker: _Worker) -> Iterator[tuple[int, Finished]]:
        at = worker.at
        assert at is not None
        try:
            said: float | Finished = worker.pipe.recv()
        except (EOFError, OSError):
            worker.process.join(5)
            code = worker.process.exitcode
            how = f"signal {-code}" if code is not None and code < 0 else f"code {code}"
            name = self.paths[at]
            said = FileFailure(str(name), f"{name}: the process that checked it ended ({how})", "", 1)
            worker.pipe.close()
            self.workers[self.workers.index(worker)] = self._started()
        if isinstance(said, float):
            self.shares[at] = said
            return
        worker.at = None
        self.shares.pop(at, None)
        yield at, said

    def _started(self) -> _Worker:
        context = multiprocessing.get_context("spawn")
        ours, theirs = context.Pipe(duplex=True)
        process = context.Process(target=_work, args=(theirs, self.plan), name="preview-check", daemon=True)
        process.start()
        theirs.close()
        return _Worker(process, ours)

    def _end(self) -> None:
        for worker in self.workers:
            worker.pipe.close()
            if worker.at is not None:
                worker.process.terminate()
        for worker in self.workers:
            worker.process.join(2)
            if worker.process.is_alive():
                worker.process.kill()
                worker.process.join(2)
            worker.process.close()


def _work(pipe: Connection, plan: CheckPlan) -> None:
    """What a worker does: a file comes in, shares of it and its result go out."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # the terminal sends it to all; the parent ends this process
    signal.signal(signal.SIGTERM, signal.SIG_DFL)
    with contextlib.suppress(EOFError, OSError):  # nobody listens any more
        stages = Stages(plan.session)
        teller = _Teller(pipe.send)
        while True:
            pipe.send(_checked(pipe.recv(), plan, stages, teller))
