"""A batch on a real Dask cluster on loopback, one of whose workers is killed on the way."""

import os
import signal
import threading
import time
from collections import Counter
from concurrent.futures import Executor, Future
from contextlib import contextmanager
from dataclasses import replace
from functools import partial

import night_fits
import pytest
from night_fits import make_folder

from scatterfit.cli import main
from scatterfit.overnight import cluster
from scatterfit.overnight.batch import ended, run_batch
from scatterfit.overnight.cluster import ClusterError, cluster_crew
from scatterfit.overnight.crew import Crew
from scatterfit.overnight.results import open_results

distributed = pytest.importorskip("distributed", reason="distributed is not installed")
pytestmark = [pytest.mark.slow, pytest.mark.filterwarnings("ignore")]


@pytest.fixture(scope="module")
def scheduler():
    """Run a cluster of two worker processes on loopback."""
    with distributed.LocalCluster(
        n_workers=2, threads_per_worker=1, processes=True, host="127.0.0.1",
        dashboard_address=None, silence_logs=50,
    ) as running:
        yield running


def run(plan, address):
    return run_batch(plan, plan.folder.parent / "night.sqlite",
                     crew=partial(cluster_crew, address=address))


def rows_of(plan):
    return {row["trace"]: row for row in
            open_results(plan.folder.parent / "night.sqlite").rows()}


def test_a_batch_survives_the_death_of_a_worker(scheduler, tmp_path):
    plan = replace(make_folder(tmp_path, 120), fit=night_fits.logged)
    alone = make_folder(tmp_path / "alone", 120)
    log = tmp_path / "calls.log"

    def kill_one():
        while not log.exists() or len(log.read_text(encoding="utf-8").split()) < 20:
            time.sleep(0.01)
        with distributed.Client(scheduler.scheduler_address, set_as_default=False) as client:
            victim = next(iter(client.run(os.getpid).values()))
        os.kill(victim, signal.SIGKILL)

    killer = threading.Thread(target=kill_one)
    killer.start()
    report = run(plan, scheduler.scheduler_address)
    killer.join()
    assert report.fitted == 120
    assert Counter(row["verdict"] for row in rows_of(plan).values()) == {"accepted": 120}
    run(alone, scheduler.scheduler_address)
    for trace, row in rows_of(alone).items():
        assert rows_of(plan)[trace]["final_radius_um"] == row["final_radius_um"]
    assert run(plan, scheduler.scheduler_address).fitted == 0


def test_what_happens_to_a_pulse_is_said_there_too(scheduler, tmp_path):
    plan = replace(make_folder(tmp_path, 3), fit=night_fits.by_name, time_limit=1.0)
    for name in ("throws.csv", "loops.csv"):
        night_fits.write_trace(plan.folder / name, 1)
    assert run(plan, scheduler.scheduler_address).fitted == 5
    assert rows_of(plan)["throws.csv"]["reasons"] == "internal-error"
    assert rows_of(plan)["loops.csv"]["reasons"] == "took-too-long"


def test_workers_that_do_not_see_the_files_are_one_line(scheduler, tmp_path, monkeypatch):
    plan = make_folder(tmp_path, 1)
    monkeypatch.setattr(cluster, "_surroundings", partial(_elsewhere, str(plan.folder)))
    with pytest.raises(ClusterError, match=r"does not see .*night.*all share"):
        run(plan, scheduler.scheduler_address)


def _elsewhere(folder, _chamber, _folder):
    from scatterfit.overnight.jobs import version

    return version(), folder


def test_no_scheduler_is_one_line_and_nothing_is_lost(tmp_path, capsys, monkeypatch):
    monkeypatch.setattr(cluster, "_CONNECT_SECONDS", 1.0)
    plan = make_folder(tmp_path, 1)
    words = ["batch", str(plan.chamber), str(plan.folder), "--out", str(tmp_path / "n.sqlite")]
    for address in ("tcp://127.0.0.1:9", "nonsense://x"):
        assert main([*words, "--cluster", address]) == 1
        err = capsys.readouterr().err
        assert f"scatterfit: {address}: no scheduler" in err
        assert "Traceback" not in err


def test_a_job_that_never_comes_back_is_given_up(tmp_path):
    plan = replace(make_folder(tmp_path, 3), time_limit=0.1, grace=0.0)

    class Deaf(Executor):
        """Takes tasks and answers only some."""

        def submit(self, fn, job):
            future = Future()
            if job.trace != "p001.csv":
                future.set_result(fn(job))
            return future

    @contextmanager
    def crew(plan, _count):
        with ended(Crew(plan, Deaf, lambda: 4, patience=0.3)) as made:
            yield made

    assert run_batch(plan, tmp_path / "night.sqlite", crew=crew).fitted == 3
    assert {trace: row["reasons"] for trace, row in rows_of(plan).items()
            if row["verdict"] == "failed"} == {"p001.csv": "took-too-long"}
