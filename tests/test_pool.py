"""Jobs in processes: all are done, each once, and one that kills its process is lost alone."""

from __future__ import annotations

import multiprocessing
import os
import signal
import threading
from collections import deque

import pytest

from scanclean.batches.pool import Ready, run_jobs
from tests.works import Number


def numbers(jobs, **options):
    return [number for number, _ in run_jobs(iter(jobs), **options)]


@pytest.mark.parametrize("processes", [1, 3])
def test_every_job_is_done_once(processes):
    found = numbers([Number(i) for i in range(1, 12)], processes=processes)
    assert sorted(found) == list(range(1, 12))
    assert numbers([], processes=processes) == []


def test_one_process_does_them_in_order_and_in_the_calling_one():
    assert numbers([Number(i) for i in range(5)], processes=1) == [0, 1, 2, 3, 4]


def test_processes_have_one_thread_each_and_the_caller_keeps_its_own(monkeypatch):
    monkeypatch.setenv("OMP_NUM_THREADS", "7")
    assert list(run_jobs(iter([Number(1)]), processes=2)) == [(1, "1")]
    assert os.environ["OMP_NUM_THREADS"] == "7"
    monkeypatch.delenv("OMP_NUM_THREADS")
    assert list(run_jobs(iter([Number(1)]), processes=2)) == [(1, "1")]
    assert "OMP_NUM_THREADS" not in os.environ


@pytest.mark.parametrize("processes", [1, 2])
def test_jobs_added_on_the_way_go_first(processes):
    later: deque[Number] = deque()
    seen = []
    for number, _ in run_jobs(map(Number, range(1, 9)), processes=processes, later=later):
        seen.append(number)
        if number == 1:
            later.append(Number(100))
    assert sorted(seen) == [*range(1, 9), 100]
    assert seen.index(100) - seen.index(1) <= 1 + 2 * processes


@pytest.mark.parametrize("processes", [1, 2])
def test_what_takes_no_work_is_handed_on_without_a_process(processes):
    known = object()  # could not be sent to another process and come back as the same
    found = list(run_jobs(iter([Ready(known), Ready(known)]), processes=processes))
    assert found == [known, known]
    later: deque = deque()
    seen = []
    for result in run_jobs(iter([Number(1), Number(2)]), processes=processes, later=later):
        seen.append(result)
        if len(seen) == 1:
            later.append(Ready(known))
    assert seen.count(known) == 1
    assert len(seen) == 3


@pytest.mark.parametrize("processes", [1, 2])
def test_no_more_is_taken_than_is_needed(processes):
    taken = []

    def ready():
        for i in range(30):
            taken.append(i)
            yield Number(i)

    for count, _ in enumerate(run_jobs(ready(), processes=processes), start=1):
        # what is done, what is in hand, and one that waits
        assert len(taken) <= count + processes + 1


@pytest.mark.parametrize("processes", [1, 2])
def test_once_stopped_no_further_job_is_begun(processes):
    stop = threading.Event()
    seen = []
    for number, _ in run_jobs(map(Number, range(50)), processes=processes, stop=stop):
        seen.append(number)
        stop.set()
    assert 1 <= len(seen) <= 1 + 2 * processes
    assert 49 not in seen


def test_a_job_that_kills_its_process_is_lost_alone():
    jobs = [Number(i, "die" if i in (3, 7) else "") for i in range(1, 10)]
    assert sorted(numbers(jobs, processes=2)) == [-7, -3, 1, 2, 4, 5, 6, 8, 9]


def test_a_job_whose_process_died_is_tried_once_more(tmp_path):
    jobs = [Number(i, "once" if i == 2 else "", str(tmp_path)) for i in range(1, 6)]
    assert sorted(numbers(jobs, processes=2)) == [1, 2, 3, 4, 5]
    assert (tmp_path / "once").exists()


def test_processes_end_with_an_error_and_with_a_caller_that_leaves():
    with pytest.raises(ValueError, match="job 2"):
        numbers([Number(1), Number(2, "raise"), Number(3, pause=60)], processes=2)
    results = run_jobs(iter([Number(1), Number(2, pause=60), Number(3, pause=60)]), processes=2)
    assert next(results)[0] == 1
    results.close()
    assert multiprocessing.active_children() == []


def test_an_interrupt_ends_the_processes():
    threading.Timer(1.0, os.kill, [os.getpid(), signal.SIGINT]).start()
    with pytest.raises(KeyboardInterrupt):
        numbers([Number(i, pause=60) for i in range(4)], processes=2)
    assert multiprocessing.active_children() == []
