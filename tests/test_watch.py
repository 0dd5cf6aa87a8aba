"""The watch: each trace once, when it is complete; nothing stops it but the user."""

import os
import signal
import subprocess
import sys
import threading
import time
from collections import Counter
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from dataclasses import replace
from types import SimpleNamespace

import night_fits
import pytest
from night_fits import make_folder, write_trace

from scatterfit.cli_watch import PageKeeper
from scatterfit.overnight.batch import Listener, ended
from scatterfit.overnight.crew import Crew
from scatterfit.overnight.jobs import Job
from scatterfit.overnight.results import open_results
from scatterfit.overnight.settling import Settling
from scatterfit.overnight.watch import Watcher, WatchError, Watching

pytest.importorskip("watchfiles", reason="watchfiles is not installed")
PATIENCE = 30.0


class Notes(Listener):
    """Keeps what a watch tells."""

    def __init__(self):
        self.catalogue, self.traces, self.remarks = None, [], []

    def begin(self, catalogue, _count):
        self.catalogue = catalogue

    def pulse(self, outcome):
        self.traces.append(outcome.job.trace)

    def remark(self, text):
        self.remarks.append(text)


@contextmanager
def threads(plan, _count):
    with ThreadPoolExecutor(2) as pool, ended(Crew(plan, lambda: pool, lambda: 4)) as crew:
        yield crew


@contextmanager
def watched(plan, **how):
    """Watch a folder in a thread, with a cheap fit in threads; give what it tells."""
    notes, stop, failures = Notes(), SimpleNamespace(asked=False), []
    watcher = Watcher(plan, plan.folder.parent / "night.sqlite",
                      Watching(**({"settle": 0.25} | how)), listener=notes)

    def run():
        try:
            watcher.run(stop, threads)
        except BaseException as error:
            failures.append(error)
            raise

    thread = threading.Thread(target=run)
    thread.start()
    try:
        wait_for(lambda: notes.catalogue is not None)
        yield notes
    finally:
        stop.asked = True
        thread.join(PATIENCE)
    assert not thread.is_alive()
    assert failures == []


def wait_for(condition):
    end = time.monotonic() + PATIENCE
    while not condition():
        assert time.monotonic() < end, "waited in vain"
        time.sleep(0.02)


def results_of(plan):
    return open_results(plan.folder.parent / "night.sqlite")


@pytest.fixture(params=[False, True], ids=["told", "polled"])
def plan_and_way(tmp_path, request):
    return replace(make_folder(tmp_path, 0), fit=night_fits.logged), request.param


def calls_of(plan):
    log = plan.folder.parent / "calls.log"
    return Counter(log.read_text(encoding="utf-8").split()) if log.exists() else Counter()


def test_a_trace_is_fitted_once_and_only_when_complete(plan_and_way):
    plan, poll = plan_and_way
    whole = plan.folder.parent / "whole.csv"
    write_trace(whole, 1)
    content = whole.read_bytes()
    with watched(plan, poll=poll) as notes:
        with (plan.folder / "slow.csv").open("wb") as file:  # as a digitizer writes, bit by bit
            for start in range(0, len(content), 100):
                file.write(content[start : start + 100])
                file.flush()
                time.sleep(0.08)
        wait_for(lambda: notes.traces == ["slow.csv"])
        part = plan.folder / ".moved.csv.part"
        part.write_bytes(content)
        part.rename(plan.folder / "moved.csv")
        wait_for(lambda: notes.traces == ["slow.csv", "moved.csv"])
        time.sleep(0.6)
    assert calls_of(plan) == {"slow.csv": 1, "moved.csv": 1}
    assert [row["verdict"] for row in results_of(plan).rows()] == ["accepted"] * 2


def test_what_was_there_is_done_and_a_restart_repeats_nothing(tmp_path):
    plan = replace(make_folder(tmp_path, 3), fit=night_fits.logged)
    with watched(plan) as notes:
        wait_for(lambda: len(notes.traces) == 3)
    make_folder(tmp_path, 1, start=3)
    with watched(plan) as notes:
        assert (notes.catalogue.done, notes.catalogue.todo) == (3, 1)
        wait_for(lambda: notes.traces == ["p003.csv"])
    assert max(calls_of(plan).values()) == 1


def test_a_trace_that_changes_is_fitted_again_and_a_touched_one_is_not(tmp_path):
    plan = replace(make_folder(tmp_path, 2), fit=night_fits.logged)
    with watched(plan) as notes:
        wait_for(lambda: len(notes.traces) == 2)
        (plan.folder / "p000.csv").touch()
        write_trace(plan.folder / "p001.csv", 50)
        wait_for(lambda: len(notes.traces) == 3)
        time.sleep(0.5)
    assert calls_of(plan) == {"p000.csv": 1, "p001.csv": 2}


def test_bad_files_are_survived(tmp_path):
    plan = replace(make_folder(tmp_path, 0), fit=night_fits.by_name)
    with watched(plan) as notes:
        write_trace(plan.folder / "throws.csv", 1)
        (plan.folder / "link.csv").symlink_to("nowhere")
        os.mkfifo(plan.folder / "pipe.csv")
        (plan.folder / "folder.csv").mkdir()
        (plan.folder / "here-and.csv").write_text("x", encoding="utf-8")
        (plan.folder / "here-and.csv").unlink()
        (plan.folder / "junk.csv").write_bytes(b"\x00\xff" * 50)
        write_trace(plan.folder / "good.csv", 2)
        wait_for(lambda: len(notes.traces) == 5)
    verdicts = {row["trace"]: row["verdict"] for row in results_of(plan).rows()}
    assert verdicts.pop("good.csv") == "accepted"
    assert verdicts == dict.fromkeys(["throws.csv", "link.csv", "pipe.csv", "junk.csv"], "failed")


def test_a_chamber_file_that_breaks_holds_the_watch_until_it_is_right(tmp_path):
    plan = make_folder(tmp_path, 1)
    good = plan.chamber.read_text(encoding="utf-8")
    with watched(plan) as notes:
        wait_for(lambda: len(notes.traces) == 1)
        plan.chamber.write_text("[beam]\n", encoding="utf-8")
        wait_for(lambda: notes.remarks)
        assert "waiting until that is put right" in notes.remarks[0]
        make_folder(tmp_path, 1, start=1)
        time.sleep(0.7)
        assert len(notes.traces) == 1
        plan.chamber.write_text(good + "# better\n", encoding="utf-8")
        wait_for(lambda: "p001.csv" in notes.traces)
    assert "it holds from now on" in notes.remarks[-1]
    assert all(row["verdict"] == "accepted" for row in results_of(plan).rows())


def test_values_in_pulses_csv_reach_the_pulse_they_are_for(tmp_path):
    plan = make_folder(tmp_path, 2)
    with watched(plan) as notes:
        wait_for(lambda: len(notes.traces) == 2)
        pulses = plan.folder / "pulses.csv"
        pulses.write_text("trace,chamber.temperatur_K\n", encoding="utf-8")
        wait_for(lambda: any("temperature_K" in text for text in notes.remarks))
        pulses.write_text("trace,chamber.temperature_K\np001.csv,297.5\n", encoding="utf-8")
        wait_for(lambda: len(notes.traces) == 3)
    assert notes.traces[2] == "p001.csv"


def test_folders_on_request_and_hidden_ones_never(tmp_path):
    plan = make_folder(tmp_path, 0)
    for name in ("deep", ".hidden"):
        (plan.folder / name).mkdir()
    for recursive, expected in ((False, {"top.csv"}), (True, {"top2.csv", "deep/x.csv"})):
        with watched(plan, recursive=recursive) as notes:
            write_trace(plan.folder / "deep" / "x.csv", 1)
            write_trace(plan.folder / ".hidden" / "x.csv", 1)
            write_trace(plan.folder / ("top2.csv" if recursive else "top.csv"), 1)
            wait_for(lambda want=expected: set(notes.traces) == want)


def test_a_missing_library_is_one_line(tmp_path, monkeypatch):
    plan = make_folder(tmp_path, 0)
    monkeypatch.setitem(sys.modules, "watchfiles", None)
    watcher = Watcher(plan, tmp_path / "night.sqlite")
    with pytest.raises(WatchError, match="scatterfit\\[watch\\]"):
        watcher.run(SimpleNamespace(asked=False), threads)


def test_settling_waits_until_size_and_times_stand_still(tmp_path):
    now, path = [0.0], tmp_path / "a.csv"
    settling = Settling(tmp_path, 0.3, clock=lambda: now[0], shared=True)
    path.write_text("x", encoding="utf-8")
    settling.note(Job("a.csv"))

    def at(moment):
        now[0] = moment
        return [job.trace for job in settling.ready()]

    assert at(0.0) == at(0.2) == []
    path.write_text("xy", encoding="utf-8")
    assert at(0.4) == at(0.6) == []
    assert at(0.75) == ["a.csv"]
    assert len(settling) == 0
    path.write_text("", encoding="utf-8")  # just made, and still empty
    settling.note(Job("a.csv"))
    assert at(1.0) == at(2.0) == []
    assert at(4.5) == ["a.csv"]
    settling.note(Job("gone.csv"))
    assert at(5.0) == []
    assert len(settling) == 0


def test_the_page_follows_the_ledger(tmp_path):
    plan = make_folder(tmp_path, 2)
    with watched(plan) as notes:
        wait_for(lambda: len(notes.traces) == 2)
    page, screen = tmp_path / "night.html", SimpleNamespace(stored=2, remark=pytest.fail)
    keeper = PageKeeper(tmp_path / "night.sqlite", page, screen)
    try:
        wait_for(lambda: keeper.keep() or page.exists())
        assert '"live_seconds":2.0' in page.read_text(encoding="utf-8")
    finally:
        keeper.close()
    assert '"live_seconds":0.0' in page.read_text(encoding="utf-8")
    assert "p001.csv" in page.read_text(encoding="utf-8")


@pytest.mark.slow
def test_the_command_ends_with_ctrl_c_and_a_tally(tmp_path):
    plan = make_folder(tmp_path, 1)
    words = [sys.executable, "-m", "scatterfit", "watch", plan.chamber, plan.folder, "--out",
             tmp_path / "night.sqlite", "--page", tmp_path / "night.html", "--jobs", "1"]
    with subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
                          start_new_session=True) as process:
        first = process.stdout.readline()
        os.killpg(process.pid, signal.SIGINT)
        out, err = process.communicate(timeout=60)
    assert process.returncode == 0
    assert "p000.csv" in first
    assert out.startswith("1 pulse: ")
    assert out.count("\n") == 1
    assert "Traceback" not in err
    assert (tmp_path / "night.html").exists()
