"""Worker processes: jobs of a search done beside it, with the same answers for any number of processes.

The searching process is one of the workers. Each other one is a fresh interpreter that is handed the desk, whose
tables all of them share, and then jobs by a pipe. It ends with the process that started it, however that ends,
because its pipe does. Jobs give the same arrays wherever they are done, so nothing depends on which process was
ready first; a job whose worker is lost or fails is done again here, where its error is raised as it is.
"""

from __future__ import annotations

import contextlib
import mmap
import os
import pickle
import queue
import subprocess
import sys
import tempfile
import threading
import time
from collections import deque
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from pathlib import Path
from types import TracebackType
from typing import IO, Any, Concatenate, Self

import archopt
from archopt.search.jobs import Arrays, Desk

MOST_WORKERS = 4  # more stand idle: a generation waits for the completion of its one batch
START_AFTER_S = 5.0  # a search that is over by then needs no workers
PASSES_FILES = os.name == "posix"
ALIGNED = 64
LENGTH_BYTES = 8
ONE_THREAD = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS")
CHILD = "import sys; sys.path.append(sys.argv[1]); from archopt.search.workers import serve; serve()"

Job = Callable[Concatenate[Desk, ...], Arrays]


def usable_cores() -> int:
    """Return the processors this process may use."""
    if sys.platform == "linux":
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def default_workers() -> int:
    """Return as many processes as there are processors, up to the few that help."""
    return max(min(usable_cores(), MOST_WORKERS), 1)


@dataclass(eq=False)
class Ticket:
    """A job handed in: where it is, and its answer when there is one."""

    job: Job
    given: Arrays
    answer: Arrays | None = None
    failed: bool = False


@dataclass
class _Worker:
    process: subprocess.Popen[bytes]
    thread: threading.Thread | None = None


@dataclass
class Counts:
    """How many jobs each process did: here, and the other workers; workers lost on the way."""

    here: int = 0
    there: int = 0
    lost: int = 0


@dataclass
class _Shared:
    """What threads share, under one condition."""

    waiting: deque[Ticket] = field(default_factory=deque)
    changed: threading.Condition = field(default_factory=threading.Condition)
    closing: bool = False
    ready: int = 0


class Crew:
    """A few processes that do jobs; a context that ends them.

    Parameters
    ----------
    desk : what the jobs work with
    workers : processes, this one included
    start_after_s : seconds before the others are started
    """

    def __init__(self, desk: Desk, workers: int = 1, *, start_after_s: float = START_AFTER_S) -> None:
        self.desk = desk
        self.workers = max(workers, 1)
        self.counts = Counts()
        self._starts_s = time.monotonic() + start_after_s
        self._started = False
        self._others: list[_Worker] = []
        self._parcel: _Parcel | None = None
        self._shared = _Shared()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def submit(self, job: Job, *given: Any) -> Ticket:
        """Hand a job in; any process may take it from now on. ``job`` is a function of a module."""
        if not self._started and self.workers > 1 and time.monotonic() >= self._starts_s:
            self.start()
        ticket = Ticket(job, given)
        with self._shared.changed:
            self._shared.waiting.append(ticket)
            self._shared.changed.notify()
        return ticket

    def take(self, ticket: Ticket) -> Arrays:
        """Return a job's answer; done here if nobody has begun it. Raises what the job raises."""
        while True:
            mine = self._next(ticket)
            if mine is None:
                break
            mine.answer = mine.job(self.desk, *mine.given)
            self.counts.here += 1
        if ticket.answer is None:
            raise RuntimeError("a job was neither done nor waiting")
        return ticket.answer

    def map(self, job: Job, chunks: Iterable[tuple[Any, ...]]) -> list[Arrays]:
        """Return a job's answers for several sets of arrays, in their order."""
        tickets = [self.submit(job, *given) for given in chunks]
        return [self.take(ticket) for ticket in tickets]

    def _next(self, ticket: Ticket) -> Ticket | None:
        """Return what to do here until a ticket has its answer: it, or another while it is under way."""
        shared = self._shared
        with shared.changed:
            while ticket.answer is None:
                if ticket in shared.waiting:
                    shared.waiting.remove(ticket)
                    return ticket
                if ticket.failed:
                    return ticket
                if shared.waiting:
                    return shared.waiting.popleft()
                shared.changed.wait()
            return None

    def start(self, *, wait: bool = False) -> None:
        """Start the other workers; ``wait`` until they are ready or lost."""
        self._started = True
        try:
            self._parcel = parcel = _Parcel.of(self.desk)
        except Exception:  # a desk that cannot be handed over is no reason to end a search
            self.counts.lost += self.workers - 1
            return
        for _ in range(self.workers - 1):
            try:
                other = _Worker(parcel.start_process())
            except (OSError, TypeError):  # no interpreter to be found, as in a frozen program
                self.counts.lost += 1
                continue
            other.thread = threading.Thread(target=self._drive, args=(other, parcel), daemon=True)
            self._others.append(other)
            other.thread.start()
        shared = self._shared
        with shared.changed:
            while wait and shared.ready + self.counts.lost < self.workers - 1:
                shared.changed.wait()

    def processes(self) -> list[int]:
        """Return the process numbers of the other workers."""
        return [other.process.pid for other in self._others]

    def close(self) -> None:
        """End the other workers, whatever they are doing."""
        with self._shared.changed:
            self._shared.closing = True
            self._shared.changed.notify_all()
        for other in self._others:
            other.process.kill()
        for other in self._others:
            if other.thread is not None:
                other.thread.join()
            for stream in (other.process.stdin, other.process.stdout):
                if stream is not None:
                    with contextlib.suppress(OSError):
                        stream.close()
            other.process.wait()
        self._others = []
        if self._parcel is not None and self._parcel.file is not None:
            self._parcel.file.close()

    def _drive(self, other: _Worker, parcel: _Parcel) -> None:
        """Thread of one worker: pass it jobs and take its answers until it is lost or the crew closes."""
        shared = self._shared
        ticket: Ticket | None = None
        try:
            pipe = _Pipe.of(other.process)
            parcel.send(pipe)
            pipe.receive()
            with shared.changed:
                shared.ready += 1
                shared.changed.notify_all()
            while (ticket := self._wait_for_work()) is not None:
                pipe.send(pickle.dumps((ticket.job, ticket.given), protocol=5))
                answer = pickle.loads(pipe.receive())
                with shared.changed:
                    ticket.answer, ticket.failed = answer, answer is None
                    self.counts.there += answer is not None
                    ticket = None
                    shared.changed.notify_all()
        except (OSError, EOFError, ValueError, pickle.PickleError, AttributeError):
            with shared.changed:
                if ticket is not None:
                    shared.waiting.appendleft(ticket)
                self.counts.lost += not shared.closing
                shared.changed.notify_all()

    def _wait_for_work(self) -> Ticket | None:
        shared = self._shared
        with shared.changed:
            while not shared.waiting and not shared.closing:
                shared.changed.wait()
            return None if shared.closing else shared.waiting.popleft()


@dataclass(frozen=True)
class _Pipe:
    """Frames of bytes, each after its length, over two streams."""

    out: IO[bytes]
    into: IO[bytes]

    @classmethod
    def of(cls, process: subprocess.Popen[bytes]) -> _Pipe:
        if process.stdin is None or process.stdout is None:
            raise EOFError
        return cls(process.stdin, process.stdout)

    def send(self, content: bytes) -> None:
        self.out.write(len(content).to_bytes(LENGTH_BYTES, "little"))
        self.out.write(content)
        self.out.flush()

    def receive(self) -> bytes:
        length = int.from_bytes(self._exactly(LENGTH_BYTES), "little")
        return self._exactly(length)

    def _exactly(self, count: int) -> bytes:
        content = self.into.read(count)
        if len(content) < count:
            raise EOFError
        return content


@dataclass(frozen=True)
class _Parcel:
    """A desk to hand over: its objects pickled, its arrays in a file without a name that all workers map.

    Where files cannot be passed on (``file`` is None) the arrays travel inside ``objects``.
    """

    objects: bytes
    spans: tuple[tuple[int, int], ...]
    file: IO[bytes] | None

    @classmethod
    def of(cls, desk: Desk) -> _Parcel:
        desk.prepare()
        if not PASSES_FILES:
            return cls(pickle.dumps(desk, protocol=5), (), None)
        buffers: list[pickle.PickleBuffer] = []
        objects = pickle.dumps(desk, protocol=5, buffer_callback=buffers.append)
        file = unnamed_file()
        spans, place = [], 0
        for buffer in buffers:
            raw = buffer.raw()
            file.seek(place)
            file.write(raw)
            spans.append((place, raw.nbytes))
            place += -(-raw.nbytes // ALIGNED) * ALIGNED
        file.truncate(max(place, 1))
        file.flush()
        return cls(objects, tuple(spans), file)

    def start_process(self) -> subprocess.Popen[bytes]:
        """Start a fresh interpreter out of reach of the terminal's interrupts, which are for the search."""
        root = str(Path(archopt.__file__).resolve().parents[1])
        options: dict[str, Any] = {}
        if sys.platform == "win32":
            options["creationflags"] = subprocess.CREATE_NEW_PROCESS_GROUP
        else:
            options["process_group"] = 0
        if self.file is not None:
            options["pass_fds"] = (self.file.fileno(),)
        return subprocess.Popen(
            [sys.executable, "-P", "-c", CHILD, root],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=None if os.environ.get("ARCHOPT_DEBUG") == "1" else subprocess.DEVNULL,
            env={**os.environ, **dict.fromkeys(ONE_THREAD, "1")},
            **options,
        )

    def send(self, pipe: _Pipe) -> None:
        number = -1 if self.file is None else self.file.fileno()
        pipe.send(pickle.dumps((number, self.spans), protocol=5))
        pipe.send(self.objects)


def unnamed_file() -> IO[bytes]:
    """Return a file that is gone with the last process that has it open; in memory where that is possible."""
    if sys.platform == "linux":
        with contextlib.suppress(OSError):
            return os.fdopen(os.memfd_create("archopt"), "w+b")
    return tempfile.TemporaryFile()


def serve() -> None:
    """Be a worker: take a desk and then jobs from standard input, answer on standard output, end with the input."""
    out = os.fdopen(os.dup(1), "wb")
    into = os.fdopen(os.dup(0), "rb")
    os.dup2(2, 1)  # whatever prints must not get between the answers
    pipe = _Pipe(out, into)
    frames: queue.SimpleQueue[bytes] = queue.SimpleQueue()

    def listen() -> None:
        try:
            while True:
                frames.put(pipe.receive())
        except (EOFError, OSError):
            os._exit(0)  # whoever started us is gone, in the middle of a job too

    threading.Thread(target=listen, daemon=True).start()
    number, spans = pickle.loads(frames.get())
    desk: Desk = pickle.loads(frames.get(), buffers=mapped(number, spans))
    pipe.send(b"ready")
    while True:
        job, given = pickle.loads(frames.get())
        try:
            answer = job(desk, *given)
        except Exception:  # the job is done again where its error can be raised
            answer = None
        pipe.send(pickle.dumps(answer, protocol=5))


def mapped(number: int, spans: tuple[tuple[int, int], ...]) -> list[memoryview]:
    """Return the arrays of a shared file; what a worker writes into them it alone sees."""
    if number < 0:
        return []
    whole = memoryview(mmap.mmap(number, 0, access=mmap.ACCESS_COPY))
    os.close(number)
    return [whole[start : start + size] for start, size in spans]
