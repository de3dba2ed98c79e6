"""A dask.distributed cluster on loopback: same bytes as one local worker, and losses are survived."""

import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from inundate.batch.compute import run_units
from inundate.batch.pipeline import Compute
from inundate.batch.progress import Progress
from inundate.batch.run import run_month
from inundate.common.errors import InputError
from tests.test_batch_faults import cut_inputs, digests

pytestmark = pytest.mark.xdist_group("cluster")


@pytest.fixture
def cluster(tmp_path):
    """A scheduler and two worker processes on loopback; yields (address, scheduler, workers)."""
    where = {**os.environ, "PYTHONPATH": os.pathsep.join(map(str, Path(__file__).parents[:2])), "OMP_NUM_THREADS": "1"}
    port = 20_000 + os.getpid() % 20_000
    quiet = {"stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL, "env": where, "cwd": tmp_path}
    head = [sys.executable, "-m", "distributed.cli.dask_scheduler", "--host", "127.0.0.1", "--port", str(port)]
    scheduler = subprocess.Popen([*head, "--no-dashboard"], **quiet)
    address = f"tcp://127.0.0.1:{port}"
    line = [
        sys.executable,
        "-m",
        "distributed.cli.dask_worker",
        address,
        "--nthreads",
        "1",
        "--no-dashboard",
        "--no-nanny",
    ]
    workers = [subprocess.Popen([*line, "--host", "127.0.0.1"], **quiet) for _ in range(2)]
    from distributed import Client

    with Client(address, timeout="60s", set_as_default=False) as client:
        client.wait_for_workers(2, timeout=60)
    yield address, scheduler, workers
    for process in (*workers, scheduler):
        process.kill()
        process.wait()


def slow_double(number: int) -> int:
    """Double a number, taking a moment."""
    time.sleep(0.3)
    return 2 * number


def pid_of(number: int) -> tuple[int, int]:
    """Tell which process did a unit."""
    time.sleep(0.1)
    return number, os.getpid()


def test_products_of_a_cluster_equal_those_of_one_worker(small_reserve, tmp_path, cluster):
    """The same pipeline on a cluster and alone: same product, map and model bytes; and the cluster did work."""
    address, _, workers = cluster
    alone = cut_inputs(small_reserve, tmp_path / "alone")
    spread = cut_inputs(small_reserve, tmp_path / "spread")
    spread.write_text(spread.read_text() + f'scheduler = "{address}"\n')
    one = run_month(alone, month=None, progress=Progress(quiet=True))
    many = run_month(spread, month=None, progress=Progress(quiet=True))
    assert digests(Path(one["products"])) == digests(Path(many["products"]))
    for part in ("maps", "models"):
        assert digests(tmp_path / "alone" / "out" / part) == digests(tmp_path / "spread" / "out" / part)
    said: list[str] = []
    done = list(run_units(pid_of, list(range(6)), Compute(scheduler=address), said.append))
    assert not said
    assert {o.result[1] for o in done} <= {w.pid for w in workers}


def test_a_worker_killed_midway(cluster):
    """Its units go to the other worker; every unit is done once."""
    address, _, workers = cluster
    done, said = [], []
    for outcome in run_units(slow_double, list(range(12)), Compute(scheduler=address), said.append):
        done.append(outcome)
        if len(done) == 2:
            workers[0].send_signal(signal.SIGKILL)
    assert sorted(o.result for o in done) == [2 * n for n in range(12)]
    assert not said


def test_a_scheduler_killed_midway(cluster):
    """The remaining units run here, and it says so."""
    address, scheduler, _ = cluster
    done, said = [], []
    for outcome in run_units(slow_double, list(range(10)), Compute(scheduler=address), said.append):
        done.append(outcome)
        if len(done) == 2:
            scheduler.send_signal(signal.SIGKILL)
    assert sorted(o.result for o in done) == [2 * n for n in range(10)]
    assert any("was lost" in line for line in said)


def test_no_cluster_at_the_address():
    """The address is named, with what to do."""
    with pytest.raises(InputError, match=r"no cluster answers at 'tcp://127\.0\.0\.1:1'"):
        list(run_units(slow_double, [1, 2], Compute(scheduler="tcp://127.0.0.1:1")))


def test_local_processes_give_the_same_bytes(small_reserve, tmp_path):
    """Two local processes and one worker: same product bytes."""
    alone = cut_inputs(small_reserve, tmp_path / "alone")
    spread = cut_inputs(small_reserve, tmp_path / "spread")
    text = spread.read_text().replace("workers = 1\n", 'workers = 2\nscheduler = "processes"\n')
    spread.write_text(text)
    one = run_month(alone, month=None, progress=Progress(quiet=True))
    many = run_month(spread, month=None, progress=Progress(quiet=True))
    assert digests(Path(one["products"])) == digests(Path(many["products"]))
    shutil.rmtree(tmp_path / "spread")
