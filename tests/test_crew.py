"""Work in processes: the same results in the same order, and the file on which a process dies is named."""

import os
import time

import pytest

from reconcile.gather.crew import FEW, LARGEST_CHUNK, Crew

JOBS = list(range(3 * LARGEST_CHUNK))
DEADLY = (5, 21)


def square(job):
    time.sleep(0.001 * (job % 3))  # so that the chunks do not end in their order
    return job * job, os.environ["OMP_NUM_THREADS"], os.getpid()


def square_or_die(job):
    if job in DEADLY:
        os._exit(9)
    return job * job


def fails_on_seven(job):
    return 1 / (job - 7)


def lost(job):
    return f"lost {job}"


def test_the_results_come_in_the_order_of_the_jobs_whatever_the_number_of_workers():
    told = []
    with Crew(2, square, lost) as crew:
        first = crew.run(JOBS, told.append)
        again = crew.run(JOBS, told.append)
    assert [result[0] for result in first] == [result[0] for result in again] == [job * job for job in JOBS]
    assert {result[1] for result in first} == {"1"}
    processes = {result[2] for result in (*first, *again)}
    assert 1 <= len(processes) <= 2 and os.getpid() not in processes
    assert told[-1] == len(JOBS) and sorted(told[: len(told) // 2]) == told[: len(told) // 2]
    with Crew(1, square, lost) as alone:
        here = alone.run(JOBS, told.append)
    assert [result[0] for result in here] == [job * job for job in JOBS]
    assert {result[2] for result in here} == {os.getpid()}


def test_few_jobs_are_done_here():
    with Crew(2, square, lost) as crew:
        assert {result[2] for result in crew.run(JOBS[:FEW], lambda done: None)} == {os.getpid()}


def test_a_job_on_which_its_process_dies_is_named_and_the_others_are_done():
    with Crew(2, square_or_die, lost) as crew:
        results = crew.run(JOBS, lambda done: None)
    assert results == [f"lost {job}" if job in DEADLY else job * job for job in JOBS]


def test_an_error_of_the_work_itself_reaches_whoever_asked():
    with Crew(2, fails_on_seven, lost) as crew, pytest.raises(ZeroDivisionError):
        crew.run(JOBS, lambda done: None)


def test_the_environment_is_left_as_it_was(monkeypatch):
    monkeypatch.setenv("OMP_NUM_THREADS", "3")
    monkeypatch.delenv("MKL_NUM_THREADS", raising=False)
    with Crew(2, square, lost) as crew:
        assert {result[1] for result in crew.run(JOBS, lambda done: None)} == {"1"}
    assert os.environ["OMP_NUM_THREADS"] == "3" and "MKL_NUM_THREADS" not in os.environ
