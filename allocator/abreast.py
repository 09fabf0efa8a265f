"""Independent pieces of long work, on as many processes as there are cores.

The workers are interpreters of their own that import this package only: nothing of the caller's program is run again,
so it works from a script, a notebook and the command line alike, and no thread of a solver is forked.
"""

from __future__ import annotations

import os
import pickle
import struct
import subprocess
import sys
from collections.abc import Callable, Iterable
from concurrent.futures import ThreadPoolExecutor
from queue import SimpleQueue
from typing import IO, Any, TypeVar

from allocator.errors import SolverError

Task = TypeVar("Task")
Answer = TypeVar("Answer")
LENGTH = struct.Struct(">Q")
MOST_WORKERS = 8
START = "from allocator.abreast import serve; serve()"


def cores() -> int:
    """Return how many processes are worth starting."""
    return min(len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1, MOST_WORKERS)


def abreast(
    work: Callable[[Task], Answer], tasks: Iterable[Task], workers: int, done: Callable[[], None]
) -> list[Answer]:
    """Return what a function of this package answers to every task, in their order.

    Parameters
    ----------
    work : callable
        A function of a module; it and its tasks and answers must be picklable.
    tasks : iterable
        Started in this order, so the longest had better come first.
    workers : int
        Processes; 1 does the work here.
    done : callable
        Called after every task.

    Raises
    ------
    SolverError
        When a worker ends before it has answered.
    """
    tasks = list(tasks)
    if workers <= 1 or len(tasks) <= 1:
        return [_then(work(task), done) for task in tasks]
    idle: SimpleQueue[subprocess.Popen[bytes]] = SimpleQueue()
    started = [_start() for _ in range(min(workers, len(tasks)))]
    for worker in started:
        idle.put(worker)

    def ask(task: Task) -> Answer:
        worker = idle.get()
        try:
            return _then(_asked(worker, work, task), done)
        finally:
            idle.put(worker)

    try:
        with ThreadPoolExecutor(len(started)) as pool:
            return list(pool.map(ask, tasks))
    finally:
        for worker in started:
            worker.kill()
            worker.communicate()


def _then(answer: Answer, done: Callable[[], None]) -> Answer:
    done()
    return answer


def _start() -> subprocess.Popen[bytes]:
    found = os.pathsep.join(entry or os.getcwd() for entry in sys.path)
    return subprocess.Popen(
        [sys.executable, "-c", START], stdin=subprocess.PIPE, stdout=subprocess.PIPE,
        env={**os.environ, "PYTHONPATH": found, "OPENBLAS_NUM_THREADS": "1"},
    )  # fmt: skip


def _asked(worker: subprocess.Popen[bytes], work: Callable[[Task], Answer], task: Task) -> Answer:
    assert worker.stdin is not None
    assert worker.stdout is not None
    try:
        _send(worker.stdin, (work, task))
        kind, answer = _received(worker.stdout)
    except (BrokenPipeError, EOFError) as error:
        raise SolverError("a worker process ended before it had answered; is there enough memory?") from error
    if kind == "raised":
        raise answer
    answered: Answer = answer
    return answered


def serve() -> None:
    """Answer tasks from standard input until it ends; what a solver prints is kept out of the answers."""
    answers = os.fdopen(os.dup(1), "wb")
    os.dup2(os.open(os.devnull, os.O_WRONLY), 1)
    while True:
        try:
            work, task = _received(sys.stdin.buffer)
        except EOFError:
            return
        try:
            answer: tuple[str, Any] = ("answered", work(task))
        except Exception as error:  # whatever it is, it belongs to whoever asked
            answer = ("raised", error)
        _send(answers, answer)


def _send(stream: IO[bytes], thing: Any) -> None:
    packed = pickle.dumps(thing)
    stream.write(LENGTH.pack(len(packed)) + packed)
    stream.flush()


def _received(stream: IO[bytes]) -> Any:
    head = stream.read(LENGTH.size)
    if len(head) < LENGTH.size:
        raise EOFError
    return pickle.loads(stream.read(*LENGTH.unpack(head)))
