"""Tasks to workers and outcomes back: in this process, in a pool of processes, or on a Dask cluster.

The parent keeps no more fields in flight than there are workers. When a worker dies (killed for memory, say) every
field that was in flight is suspect: each is tried again alone, so that the one that kills its worker is named and no
other is blamed for it.
"""

from __future__ import annotations

import concurrent.futures as cf
import multiprocessing as mp
import os
import signal
import threading
import time
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures.process import BrokenProcessPool
from pathlib import Path
from typing import Any

from tfm.batch.atomic import StorageError
from tfm.batch.store import Store
from tfm.batch.task import Outcome, Task, execute
from tfm.errors import InputError

__all__ = ["run_tasks"]

_TICK = 0.25
#: The parent waits this much longer than the worker's own limit before it kills the worker.
_GRACE = 30.0
_PRELOAD = ["tfm.batch.field", "tfm.batch.task"]


def run_tasks(
    tasks: Sequence[Task],
    *,
    workers: int = 1,
    scheduler: str | None = None,
    work: Callable[[Task], Outcome] = execute,
) -> Iterator[Outcome]:
    """Outcomes in the order in which they are ready.

    Parameters
    ----------
    tasks
        What to do.
    workers
        Number of processes; 1 computes in this one.
    scheduler
        Address of a Dask scheduler, instead of local workers. Inputs and results have to be on a file system that its
        workers share.
    work
        What a worker does.

    Raises
    ------
    StorageError
        When results cannot be written.
    InputError
        When the scheduler cannot be reached.
    """
    if scheduler is not None:
        yield from _on_dask(tasks, scheduler, work)
    elif workers <= 1 or len(tasks) <= 1:
        yield from map(work, tasks)
    else:
        yield from _Pool(tasks, min(workers, len(tasks)), work).outcomes()


def _lost(task: Task, message: str, code: str, attempts: int) -> Outcome:
    given = {"settings": task.settings.model_dump(), "sheet": task.row.used()}
    Store(task.results).write_failure(task.stem, task.row.field, message, code, given)
    return Outcome(task.stem, task.row.field, "failed", message, code, attempts=attempts)


def _start_worker() -> None:
    """In every worker: leave Ctrl-C to the parent, and end when the parent is gone in whatever way."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    signal.signal(signal.SIGTERM, signal.SIG_DFL)
    parent = mp.parent_process()
    if parent is not None:
        threading.Thread(target=_follow, args=(parent,), daemon=True).start()


def _follow(parent: Any) -> None:
    parent.join()
    os._exit(1)


class _Pool:
    """A process pool that survives the death and the hanging of its workers."""

    def __init__(self, tasks: Sequence[Task], workers: int, work: Callable[[Task], Outcome]) -> None:
        self.waiting: deque[Task] = deque(tasks)
        self.suspects: deque[Task] = deque()
        self.workers, self.work = workers, work
        self.running: dict[cf.Future[Outcome], tuple[Task, float]] = {}
        self.pool: cf.ProcessPoolExecutor | None = None
        self.alone = False

    def outcomes(self) -> Iterator[Outcome]:
        try:
            while self.waiting or self.suspects or self.running:
                self._submit()
                done, _ = cf.wait(self.running, timeout=_TICK, return_when=cf.FIRST_COMPLETED)
                yield from self._collect(done)
                yield from self._watch()
        finally:
            self._stop()

    def _submit(self) -> None:
        if self.pool is None:
            context = mp.get_context("forkserver")
            context.set_forkserver_preload(_PRELOAD)
            self.pool = cf.ProcessPoolExecutor(self.workers, mp_context=context, initializer=_start_worker)
        if self.suspects:  # a suspect runs with nobody beside it
            if not self.running:
                self.alone = True
                self._start(self.pool, self.suspects)
            return
        if self.alone and self.running:
            return
        self.alone = False
        while self.waiting and len(self.running) < self.workers and self._start(self.pool, self.waiting):
            continue

    def _start(self, pool: cf.ProcessPoolExecutor, queue: deque[Task]) -> bool:
        """Hand the queue's first task to the pool; it stays in the queue when the pool turns out to be broken."""
        try:
            future = pool.submit(self.work, queue[0])
        except BrokenProcessPool:
            if not self.running:
                self._stop()  # a worker died between two fields: nobody's fault
            return False
        self.running[future] = (queue.popleft(), time.time())
        return True

    def _collect(self, done: set[cf.Future[Outcome]]) -> Iterator[Outcome]:
        broken: list[Task] = []
        ready = []
        for future in done:
            task, _ = self.running.pop(future)
            try:
                ready.append(future.result())
            except BrokenProcessPool:
                broken.append(task)
        yield from ready
        if not broken:
            return
        broken += [task for task, _ in self.running.values()]
        was_alone = self.alone
        self._stop()
        self.running.clear()
        if was_alone:
            for task in broken:
                text = "its worker process died twice (killed, perhaps for memory); run this field on a larger machine"
                yield _lost(task, text, "worker-died", 2)
        else:
            self.suspects.extend(broken)

    def _watch(self) -> Iterator[Outcome]:
        """Kill workers whose field shows no sign of life although its own alarm should have ended it."""
        now = time.time()
        hung = [
            (future, task)
            for future, (task, began) in self.running.items()
            if task.limit is not None and now - max(began, _last_line(task)) > task.limit * 1.1 + _GRACE
        ]
        if not hung:
            return
        names = {future for future, _ in hung}
        others = [task for future, (task, _) in self.running.items() if future not in names]
        self._stop()
        self.running.clear()
        self.waiting.extendleft(others)
        for _, task in hung:
            yield _lost(task, f"gave up after {task.limit:g} s without progress; see --timeout", "timeout", 1)

    def _stop(self) -> None:
        """End the pool at once; what its workers were writing leaves temporary files only."""
        pool, self.pool = self.pool, None
        if pool is None:
            return
        pids = [p.pid for p in mp.active_children() if p.pid is not None]
        idle = not self.running
        if not idle:
            for pid in pids:
                try:
                    os.kill(pid, signal.SIGKILL)
                except ProcessLookupError:
                    continue
        pool.shutdown(wait=True, cancel_futures=True)


def _last_line(task: Task) -> float:
    path: Path = Store(task.results).log_path(task.stem)
    try:
        return path.stat().st_mtime
    except FileNotFoundError:
        return 0.0


def _on_dask(tasks: Sequence[Task], scheduler: str, work: Callable[[Task], Outcome]) -> Iterator[Outcome]:
    try:
        from distributed import Client
    except ImportError as error:
        raise InputError(
            "--scheduler needs the extra 'cluster'", code="missing-extra", remedy="pip install 'tugtensor[cluster]'"
        ) from error
    try:
        client: Any = Client(scheduler, timeout=10)  # type: ignore[no-untyped-call]
    except (OSError, ValueError, TimeoutError) as error:
        raise InputError(
            f"no Dask scheduler answers at '{scheduler}' ({error})", code="no-scheduler", remedy="check the address"
        ) from error
    with client:
        executor = client.get_executor(pure=False)
        running = {executor.submit(work, task): (task, 1) for task in tasks}
        try:
            while running:
                done, _ = cf.wait(running, timeout=_TICK, return_when=cf.FIRST_COMPLETED)
                for future in done:
                    task, attempt = running.pop(future)
                    try:
                        yield future.result()
                    except StorageError:
                        raise
                    except Exception as error:  # what a cluster does to a task has many names (killed, lost, cancelled)
                        if attempt == 1:
                            running[executor.submit(work, task)] = (task, 2)
                            continue
                        text = f"its worker on the cluster was lost twice ({type(error).__name__})"
                        yield _lost(task, text, "worker-died", 2)
        finally:
            for future in running:
                future.cancel()
            executor.shutdown(wait=False)
