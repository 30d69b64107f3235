"""Processors and memory, held against what the standard library and psutil say."""

from __future__ import annotations

import os
import subprocess
import sys
import time

import psutil

from service.commands import pinning

BUSY = "import time\nend = time.process_time() + 0.3\nwhile time.process_time() < end: pass\n"


def test_a_process_is_kept_on_one_processor_only_inside_the_block() -> None:
    """Afterwards all that were allowed are allowed again."""
    before = os.sched_getaffinity(0)
    with pinning.on(0):
        assert os.sched_getaffinity(0) == ({min(before)} if len(before) > 1 else before)
    assert os.sched_getaffinity(0) == before


def test_processor_time_is_what_psutil_counts() -> None:
    """Of this process, within the ticks that pass between the two readings."""
    time.sleep(0.01)
    times = psutil.Process().cpu_times()
    assert abs(pinning.processor_s(os.getpid()) - (times.user + times.system)) < 1.0


def test_the_time_of_children_counts_while_they_live() -> None:
    """A child that worked for 0.3 s adds that much to its parent's."""
    words = [sys.executable, "-c", BUSY + "input()"]
    with subprocess.Popen(words, stdin=subprocess.PIPE) as child:
        assert child.pid in pinning.children(os.getpid())
        end = time.monotonic() + 30
        while pinning.processor_s(child.pid) < 0.3 and time.monotonic() < end:
            time.sleep(0.05)
        assert pinning.processor_s(os.getpid()) >= pinning.processor_s(child.pid) >= 0.3
        child.communicate(b"\n")


def test_memory_is_what_psutil_counts() -> None:
    """In KiB, within a tenth."""
    seen = psutil.Process().memory_info().rss / 1024
    assert abs(pinning.memory_kib(os.getpid()) - seen) < 0.1 * seen


def test_a_crew_answers_by_its_workers_and_a_server_without_one_by_itself() -> None:
    """The workers are found below whoever started them; the clerk is none of them."""
    words = [sys.executable, "-c", "input()", "service.commands.child"]
    crew = "import subprocess, sys\nfor role in ('worker', 'clerk', 'worker'):\n"
    crew += f"    subprocess.Popen([*{words}, role])\ninput()"
    with subprocess.Popen([sys.executable, "-c", crew], stdin=subprocess.PIPE) as child:
        end = time.monotonic() + 30
        while len(pinning.children(child.pid)) < 3 and time.monotonic() < end:
            time.sleep(0.05)
        time.sleep(0.05)
        started = pinning.children(child.pid)
        assert sorted(pinning.workers(child.pid)) == sorted([started[0], started[2]])
        assert pinning.workers(started[1]) == [started[1]]
        assert pinning.processor_s(child.pid) >= pinning.serving_s(child.pid) > 0.0
        child.communicate(b"\n\n\n\n")
    assert pinning.processors() == len(os.sched_getaffinity(0))
