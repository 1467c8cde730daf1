"""Units of work on ``dask.distributed``: deadlines, retries, and no image that pulls others down with it."""

from __future__ import annotations

import contextlib
import logging
import os
import queue
import socket
import threading
import time
import uuid
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime
from typing import Any

from layerscan.errors import InputError, LayerscanError, MissingExtraError
from layerscan.records import Progress
from layerscan.study.ledger import Ledger, TaskRecord
from layerscan.study.tables import RunTable
from layerscan.study.work import StepResult, Unit, UnitResult, versions

Work = Callable[[Unit], UnitResult]

_TOPIC = "layerscan-study"
_WINDOW_PER_WORKER = 2

LOCAL_OPTIONS = {
    "distributed.scheduler.allowed-failures": 0,  # we say ourselves what is tried again, and how
    "distributed.scheduler.worker-saturation": 1.0,  # a worker holds one task: its death accuses no other
    "distributed.worker.memory.target": False,
    "distributed.worker.memory.spill": False,
    "distributed.worker.memory.pause": False,
    # what dask watches by the fiftieth of a second costs more than our few long tasks, and keeps memory growing
    "distributed.admin.tick.interval": "1s",
    "distributed.admin.tick.limit": "60s",
    "distributed.admin.system-monitor.interval": "10s",
    "distributed.admin.low-level-log-length": 100,
    "distributed.admin.log-length": 100,
    "distributed.worker.memory.monitor-interval": "500ms",
    "distributed.worker.profile.enabled": False,
    "distributed.scheduler.work-stealing": False,
}
"""Settings of the scheduler and workers that a study starts on this machine."""

CLUSTER_LOST = "The cluster was lost. What was recorded is safe: run the same command again."


def run_units(
    units: Sequence[Unit],
    *,
    work: Work,
    ledger: Ledger,
    run: RunTable,
    cluster: Any = None,
    workers: int | None = None,
    progress: Progress | None = None,
) -> None:
    """Work on every unit and record each result as it comes.

    Parameters
    ----------
    units : sequence of Unit
    work : callable
        A function that workers can import; given a unit it returns a ``UnitResult``.
    ledger : Ledger
        Open for writing. This process is its only writer.
    run : RunTable
        Deadline, memory and retries.
    cluster : str or distributed.Client, optional
        Address of an existing scheduler, whose workers see the same files; None starts processes on this machine.
    workers : int, optional
        Processes on this machine; one a processor unless stated.
    progress : callable, optional
        Called after each result with the rate and the time that remains. Raising ``Interrupted`` in it stops the run.

    Raises
    ------
    InputError
        The cluster does not answer or has no worker.
    LayerscanError
        The disk is full, or the cluster was lost; everything recorded before stands.

    Notes
    -----
    A failure that layerscan raised on purpose would come again and is final. Anything else is tried ``run.retries``
    times more. A unit whose worker died is tried again with nothing else running: if the worker dies again, that unit
    did it. Deadlines are kept by the worker's own process, which ends itself; the cluster then replaces it (a worker
    without a nanny is not replaced). On a worker with several threads the memory limit is not kept.
    """
    if not units:
        return
    with _connect(cluster, min(workers or run.workers or _processors(), len(units)), run) as client:
        try:
            client.wait_for_workers(1, timeout=60)
        except TimeoutError:
            raise InputError("The cluster has no worker. Start one, or leave --cluster out.") from None
        _Engine(client, list(units), work, ledger, run, progress).run()


def _processors() -> int:
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


@contextlib.contextmanager
def _connect(cluster: Any, workers: int, run: RunTable) -> Iterator[Any]:
    """A client of the given cluster, or of one that lives as long as this context."""
    try:
        import dask
        from distributed import Client, LocalCluster
    except ImportError:
        raise MissingExtraError(
            "A study needs dask.distributed. Install it with: pip install 'layerscan[study]'"
        ) from None
    if cluster is not None and not isinstance(cluster, str):
        yield cluster
        return
    with dask.config.set(LOCAL_OPTIONS), contextlib.ExitStack() as stack:
        if cluster is None:
            cluster = stack.enter_context(
                LocalCluster(  # type: ignore[no-untyped-call]
                    n_workers=workers,
                    threads_per_worker=1,
                    processes=True,
                    host="127.0.0.1",
                    dashboard_address="127.0.0.1:0",  # any free port: a fixed one may be taken
                    memory_limit=int((run.memory_mib + 1024) * 2**20),
                    silence_logs=logging.CRITICAL,
                    preload=["layerscan.study.worker_setup"],
                    env={"OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1", "NUMBA_NUM_THREADS": "1"},
                )
            )
        try:
            client = stack.enter_context(Client(cluster, timeout="20 s", set_as_default=False))  # type: ignore[no-untyped-call]
        except (OSError, ValueError, TimeoutError) as error:
            raise InputError(f"Cluster '{cluster}' does not answer ({error}). Give the scheduler's address.") from None
        yield client


# --- in the worker --------------------------------------------------------------------------------------------------


def guarded(work: Work, unit: Unit, deadline_s: float, memory_mib: float, caller: tuple[str, int]) -> UnitResult:
    """Run ``work`` in a worker under a deadline and a memory limit.

    The process ends itself when the deadline passes: no exception could interrupt compiled code. A worker that shares
    the caller's process (threads in a notebook) keeps neither limit.
    """
    threads = _announce(unit)
    if caller == (socket.gethostname(), os.getpid()):
        return work(unit)
    with _deadline(deadline_s, alone=threads == 1), _memory_limit(memory_mib, alone=threads == 1):
        return work(unit)


def _announce(unit: Unit) -> int:
    """Tell the caller that this unit has started; returns the number of threads of this worker."""
    from distributed import get_worker

    worker = get_worker()
    worker.log_event(_TOPIC, unit.key)
    return int(worker.state.nthreads)


@contextlib.contextmanager
def _deadline(seconds: float, *, alone: bool) -> Iterator[None]:
    import signal

    timer = threading.Timer(seconds, os._exit, (75,))
    timer.daemon = True
    timer.start()
    # the kernel's alarm also ends compiled code that never lets a Python thread run
    alarm = alone and hasattr(signal, "setitimer")
    if alarm:
        signal.setitimer(signal.ITIMER_REAL, seconds + 5)
    try:
        yield
    finally:
        timer.cancel()
        if alarm:
            signal.setitimer(signal.ITIMER_REAL, 0)


@contextlib.contextmanager
def _memory_limit(memory_mib: float, *, alone: bool) -> Iterator[None]:
    """Let this process allocate ``memory_mib`` beyond what it has; more raises MemoryError (Linux only)."""
    used = _address_space_bytes() if alone else None
    if used is None:
        yield
        return
    import resource

    soft, hard = resource.getrlimit(resource.RLIMIT_AS)
    limit = used + int(memory_mib * 2**20)
    resource.setrlimit(resource.RLIMIT_AS, (limit if hard == resource.RLIM_INFINITY else min(limit, hard), hard))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_AS, (soft, hard))


def _address_space_bytes() -> int | None:
    try:
        with open("/proc/self/statm") as stream:
            return int(stream.read().split()[0]) * os.sysconf("SC_PAGE_SIZE")
    except (OSError, ValueError):
        return None


def _read_allowed_failures(dask_scheduler: Any) -> int:
    """How often the scheduler itself tries a task again whose worker died."""
    return int(dask_scheduler.allowed_failures)


# --- in the caller --------------------------------------------------------------------------------------------------


@dataclass
class _Attempt:
    unit: Unit
    number: int  # from 1
    alone: bool


@dataclass
class _Engine:
    client: Any
    waiting: list[Unit]
    work: Work
    ledger: Ledger
    run_table: RunTable
    progress: Progress | None
    running: dict[Any, _Attempt] = field(default_factory=dict)
    done: int = 0

    def __post_init__(self) -> None:
        self.total = len(self.waiting)
        self.fresh = deque((unit, 1) for unit in self.waiting)
        self.suspects: deque[tuple[Unit, int]] = deque()
        self.finished: queue.SimpleQueue[Any] = queue.SimpleQueue()
        self.started_at: dict[str, float] = {}
        self.caller = (socket.gethostname(), os.getpid())
        self.slots, self.slots_asked = 0, 0.0
        self.session = uuid.uuid4().hex[:8]
        self.scheduler_retries = int(self.client.run_on_scheduler(_read_allowed_failures))

    def run(self) -> None:
        """Submit in a small window until nothing is left."""
        self.client.subscribe_topic(_TOPIC, self._note_start)
        start = time.monotonic()
        try:
            self._report(start)
            while self.fresh or self.suspects or self.running:
                self._submit()
                self._collect(start)
        finally:
            for future in self.running:
                with contextlib.suppress(Exception):
                    future.cancel()
            with contextlib.suppress(Exception):
                self.client.unsubscribe_topic(_TOPIC)

    def _note_start(self, event: Any) -> None:
        self.started_at[event[1]] = time.monotonic()

    def _slots(self) -> int:
        """Threads of the cluster now; asked for at most once a second."""
        now = time.monotonic()
        if now - self.slots_asked > 1.0:
            self.slots, self.slots_asked = sum(self.client.nthreads().values()), now
        return self.slots

    def _submit(self) -> None:
        if any(attempt.alone for attempt in self.running.values()):
            return
        if self.fresh:
            window = max(1, _WINDOW_PER_WORKER * self._slots())
            while self.fresh and len(self.running) < window:
                self._send(*self.fresh.popleft(), alone=False)
        elif self.suspects and not self.running:
            self._send(*self.suspects.popleft(), alone=True)

    def _send(self, unit: Unit, number: int, *, alone: bool) -> None:
        self.started_at.pop(unit.key, None)
        future = self.client.submit(
            guarded,
            self.work,
            unit,
            self.run_table.deadline_s,
            self.run_table.memory_mib,
            self.caller,
            key=f"layerscan-{self.session}-{unit.key}-{number}",
            pure=False,
            retries=0,
        )
        self.running[future] = _Attempt(unit=unit, number=number, alone=alone)
        future.add_done_callback(self.finished.put)

    def _collect(self, start: float) -> None:
        """Wait for one result, take all that are there, and record them in one transaction."""
        futures = []
        with contextlib.suppress(queue.Empty):
            futures.append(self.finished.get(timeout=0.5))
            while True:
                futures.append(self.finished.get_nowait())
        records = []
        for future in futures:
            attempt = self.running.pop(future, None)
            if attempt is not None:  # a future may report twice: lost, then finished
                records += self._take(future, attempt)
                future.release()
        if records:
            self.ledger.record(records)
        if not futures and self.client.status not in ("running", "connecting"):
            raise LayerscanError(CLUSTER_LOST)
        self._report(start)

    def _take(self, future: Any, attempt: _Attempt) -> list[TaskRecord]:
        """Records of an ended attempt; none where the unit goes back to be tried again."""
        error: BaseException | None = None
        if future.status == "finished":
            try:
                return self._take_result(future.result(timeout=60), attempt)
            except LayerscanError:
                raise
            except Exception as failed:  # the worker died with the result, or cannot send it
                error = failed
        elif future.status == "error":
            error = future.exception()
        elif self.client.status not in ("running", "connecting"):
            raise LayerscanError(CLUSTER_LOST)
        lost = error is None or type(error).__name__ == "KilledWorker"
        # a scheduler that tried it on several workers by itself has done what our own retries are for
        tried_enough = lost and attempt.alone and self.scheduler_retries > 0
        if self._may_try_again(attempt) and not tried_enough:
            self.suspects.append((attempt.unit, attempt.number + 1))
            return []
        kind, reason = self._explain_loss(attempt) if lost else ("unexpected error", f"{type(error).__name__}: {error}")
        self.done += 1
        results = [
            StepResult(step=step, state="failed", failure=kind, reason=reason[:2000], by_chance=True)
            for step in attempt.unit.steps
        ]
        return [_make_record(r, attempt, versions()) for r in results]

    def _take_result(self, result: UnitResult, attempt: _Attempt) -> list[TaskRecord]:
        if result.disk_full:
            raise LayerscanError(
                f"The disk is full while '{attempt.unit.name}' was written. What was recorded before is safe: free "
                "some space and run the same command again; only what is missing is computed."
            )
        again = tuple(r.step for r in result.results if r.state != "done" and r.by_chance)
        settled = [r for r in result.results if r.step not in again]
        if again and self._may_try_again(attempt):
            from dataclasses import replace

            self.fresh.append((replace(attempt.unit, steps=again), attempt.number + 1))
            return [_make_record(r, attempt, result.versions) for r in settled]
        self.done += 1
        return [_make_record(r, attempt, result.versions) for r in result.results]

    def _may_try_again(self, attempt: _Attempt) -> bool:
        return attempt.number <= self.run_table.retries

    def _explain_loss(self, attempt: _Attempt) -> tuple[str, str]:
        started = self.started_at.get(attempt.unit.key)
        deadline = self.run_table.deadline_s
        if started is not None and time.monotonic() - started >= 0.95 * deadline:
            return "deadline", (
                f"it took longer than {deadline:g} s, tried {attempt.number} times. "
                "Raise deadline_s in [run], or measure a region of the image."
            )
        return "worker lost", (
            f"the worker process ended while it worked on this file, {attempt.number} times, the last time with "
            "nothing else running. The file may be damaged, or need more memory than [run] memory_mib allows."
        )

    def _report(self, start: float) -> None:
        if self.progress is None:
            return
        elapsed = time.monotonic() - start
        rate = self.done / elapsed if elapsed > 0 else 0.0
        text = f"{self.done} of {self.total} files"
        if self.done:
            text += f", {rate:.3g}/s, {_say_seconds((self.total - self.done) / rate)} left"
        self.progress(text, self.done / self.total)


def _say_seconds(seconds: float) -> str:
    if seconds < 90:
        return f"{seconds:.0f} s"
    return f"{seconds / 60:.0f} min" if seconds < 5400 else f"{seconds / 3600:.1f} h"


def _make_record(result: StepResult, attempt: _Attempt, found: Any) -> TaskRecord:
    settings = result.step.settings
    return TaskRecord(
        key=result.step.key,
        kind=result.step.kind,
        unit=attempt.unit.key,
        state=result.state,
        settings={} if settings is None else settings.model_dump(mode="json"),
        versions=found,
        input_sha256=result.step.input_sha256,
        failure=result.failure,
        reason=result.reason,
        by_chance=result.by_chance,
        attempts=attempt.number,
        document=result.document,
        extras=result.extras,
        picture=result.picture,
        folder=os.path.basename(attempt.unit.folder) or None,
        seconds=result.seconds,
        finished=datetime.now(UTC).isoformat(timespec="seconds"),
        layers=result.layers,
    )
