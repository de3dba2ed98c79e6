"""Units of work on local threads or processes, or on an existing dask.distributed cluster; results never depend on which."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from typing import Any, TypeVar

from inundate.batch.pipeline import Compute
from inundate.common.errors import InputError

IN_FLIGHT = 4  # units on their way for each thread of the workers
Job = TypeVar("Job")
Result = TypeVar("Result")


@dataclass(frozen=True, slots=True)
class Outcome:
    """What one unit of work left: its result, or the sentence of the error that set it aside."""

    index: int
    result: Any = None
    error: str | None = None


def _guarded(function: Callable[[Job], Result], index: int, job: Job) -> Outcome:
    """Run one unit; bad input becomes an outcome, a fault of the program stays an exception."""
    try:
        return Outcome(index, result=function(job))
    except InputError as err:
        return Outcome(index, error=str(err))


def run_units(
    function: Callable[[Job], Result],
    jobs: Sequence[Job],
    compute: Compute,
    say: Callable[[str], None] = lambda _: None,
) -> Iterator[Outcome]:
    """Run a function over jobs and yield outcomes as they end.

    Parameters
    ----------
    function : callable
        A module-level function of one job; it may raise ``InputError`` to set its unit aside.
    jobs : sequence
        Picklable job values.
    compute : Compute
        Scheduler and number of workers.
    say : callable
        Receives one line when a cluster is lost and the rest goes on locally.

    Yields
    ------
    Outcome
        One a job, in any order; ``index`` is the job's position.

    Raises
    ------
    InputError
        When a cluster's address cannot be reached at the start.
    """
    todo = list(range(len(jobs)))
    if "://" in compute.scheduler and jobs:
        done: set[int] = set()
        try:
            for outcome in _on_cluster(function, jobs, compute.scheduler):
                done.add(outcome.index)
                yield outcome
        except _ClusterLostError as err:
            say(f"the cluster at {compute.scheduler} was lost ({err}); the remaining units run here")
        todo = [i for i in todo if i not in done]
    yield from _locally(function, jobs, todo, compute)


def _locally(
    function: Callable[[Job], Result], jobs: Sequence[Job], todo: list[int], compute: Compute
) -> Iterator[Outcome]:
    if compute.scheduler == "serial" or compute.workers == 1 or len(todo) <= 1:
        for index in todo:
            yield _guarded(function, index, jobs[index])
        return
    import dask

    with _pool(compute) as how:
        batch = compute.workers * IN_FLIGHT
        for start in range(0, len(todo), batch):
            units = [dask.delayed(_guarded, pure=False)(function, i, jobs[i]) for i in todo[start : start + batch]]
            yield from dask.compute(*units, **how)


@contextmanager
def _pool(compute: Compute) -> Iterator[dict[str, Any]]:
    """Give dask's settings for local work; processes are started once for all units, since each loads the libraries."""
    if compute.scheduler != "processes":
        yield {"scheduler": "threads", "num_workers": compute.workers}
        return
    from concurrent.futures import ProcessPoolExecutor
    from multiprocessing import get_context

    with ProcessPoolExecutor(compute.workers, mp_context=get_context("spawn")) as pool:
        yield {"scheduler": "processes", "pool": pool}


class _ClusterLostError(Exception):
    pass


def _on_cluster(function: Callable[[Job], Result], jobs: Sequence[Job], address: str) -> Iterator[Outcome]:
    try:
        from distributed import Client, as_completed
    except ImportError as err:
        message = (
            f"compute.scheduler is {address!r}, but dask.distributed is not installed; install inundate[distributed]"
        )
        raise InputError(message) from err
    try:
        client = Client(address, timeout="10s", set_as_default=False)
    except (OSError, TimeoutError, ValueError) as err:
        message = f"compute.scheduler: no cluster answers at {address!r} ({err}); start it, or use 'threads'"
        raise InputError(message) from err
    try:
        flight = IN_FLIGHT * max(sum(client.nthreads().values()), 1)  # jobs hold arrays: few on their way at a time
        waiting = iter(enumerate(jobs))

        def submit() -> Any:
            i, job = next(waiting)
            return client.submit(_guarded, function, i, job, pure=False, retries=3, key=f"unit-{i}-{id(jobs)}")

        ended = as_completed([submit() for _ in range(min(flight, len(jobs)))], loop=client.loop)
        for future in ended:
            if future.status == "finished":
                yield future.result()
                with suppress(StopIteration):
                    ended.add(submit())
            elif future.status in ("cancelled", "lost"):
                message = f"{future.key} {future.status}"
                raise _ClusterLostError(message)
            else:
                from distributed.scheduler import KilledWorker

                problem = future.exception()
                if isinstance(problem, KilledWorker):
                    message = "its workers died"
                    raise _ClusterLostError(message)
                raise problem
    except (OSError, TimeoutError, RuntimeError) as err:
        raise _ClusterLostError(str(err)) from err
    finally:
        client.close(timeout=2)
