"""Worker processes: results in order, a lost worker is one error, nobody outlives the parent."""

from __future__ import annotations

import multiprocessing
import os
import signal
import subprocess
import sys
import time
import traceback
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from types import FrameType

import pytest

from latchscan.errors import AnalysisError
from latchscan.tasks import Silent, Workers, open_workers


def test_results_come_in_the_order_of_the_items() -> None:
    with open_workers(2, Silent()) as workers:
        assert workers.map("squares", abs, list(range(-9, 0))) == list(range(9, 0, -1))


@pytest.mark.parametrize("jobs", [1, 2])
def test_an_attempt_leaves_out_what_has_no_answer(jobs: int) -> None:
    with open_workers(jobs, Silent()) as workers:
        assert workers.attempt("roots", _root, [4.0, -1.0, 9.0]) == [2.0, None, 3.0]
        with pytest.raises(AnalysisError, match="no root"):
            workers.map("roots", _root, [4.0, -1.0, 9.0])


def _root(square: float) -> float:
    if square < 0:
        raise AnalysisError("no root")
    return square**0.5


def test_a_lost_worker_is_one_clear_error_and_nobody_waits_for_the_others() -> None:
    begin = time.monotonic()
    with (
        pytest.raises(AnalysisError, match="a worker process was lost") as caught,
        open_workers(2, Silent()) as workers,
    ):
        workers.map("wells", _lost_or_slow, [0.0, 60.0, 60.0])
    assert caught.value.exit_status == 3
    assert "--jobs" in caught.value.hint
    assert time.monotonic() - begin < 30
    while multiprocessing.active_children():
        assert time.monotonic() - begin < 30, "workers still run"
        time.sleep(0.02)


def _lost_or_slow(seconds: float) -> None:
    if seconds == 0:
        os._exit(7)
    time.sleep(seconds)


def test_workers_end_with_a_parent_that_is_killed() -> None:
    code = (
        "import multiprocessing, time\n"
        "from latchscan.tasks import Silent, Workers, open_workers\n"
        "with open_workers(2, Silent()) as workers:\n"
        "    workers.map('start', time.sleep, [0.01] * 4)\n"
        "    print(*(child.pid for child in multiprocessing.active_children()), flush=True)\n"
        "    time.sleep(60)\n"
    )
    with subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.PIPE) as parent:
        assert parent.stdout is not None
        children = [int(word) for word in parent.stdout.readline().split()]
        parent.send_signal(signal.SIGKILL)
    assert len(children) == 2
    end = time.monotonic() + 20
    while any(_runs(child) for child in children):
        assert time.monotonic() < end, "workers still run"
        time.sleep(0.02)


def _runs(process: int) -> bool:
    """Whether a process is there and not merely waiting to be reaped."""
    try:
        state = Path(f"/proc/{process}/stat").read_text(encoding="utf-8").rpartition(")")[2]
    except FileNotFoundError:
        return False
    return state.split()[0] != "Z"


class StoppedError(Exception):
    """What the handler of a signal raises."""


def signalled(item: int) -> int:
    """Send this process a signal from within a task."""
    os.kill(os.getpid(), signal.SIGTERM)
    time.sleep(0.02)
    return item


def test_a_signal_acts_when_the_pool_is_left_alone_and_leaves_it_usable() -> None:
    # Source: Python's signal module; a handler that raises while a lock is being taken leaves
    # the lock taken
    def stop(_number: int, _frame: FrameType | None) -> None:
        inside = {frame.name for frame in traceback.extract_stack()}
        assert not inside & {"submit", "result", "wait"}
        raise StoppedError

    before = signal.signal(signal.SIGTERM, stop)
    try:
        with ThreadPoolExecutor(1) as executor:
            workers = Workers(executor=executor)
            with pytest.raises(StoppedError):
                workers.map("stopped", signalled, [0, 1, 2])
            assert signal.getsignal(signal.SIGTERM) is stop
            signal.signal(signal.SIGTERM, signal.SIG_IGN)
            assert workers.map("again", abs, [-1, -2]) == [1, 2]
    finally:
        signal.signal(signal.SIGTERM, before)
