"""Engines: order, bounded look-ahead, and workers that die."""

import builtins
import os
import subprocess
import sys
import time
from collections.abc import Iterator

import pytest

from printmetrics.batch.engine import AHEAD_PER_WORKER, ONE_THREAD, in_order

# Each task is an expression, so that a worker needs nothing from this file.
WORK = builtins.eval
DIE = "__import__('os')._exit(9)"


def _lost(task: str) -> str:
    return f"lost {task}"


@pytest.mark.parametrize("workers", [1, 2])
def test_results_come_in_the_order_of_the_tasks(workers: int) -> None:
    tasks = ["__import__('time').sleep(0.3) or 'slow'", "'a'", "'b'", "'c'"]
    assert list(in_order(WORK, tasks, workers, _lost)) == ["slow", "a", "b", "c"]


@pytest.mark.parametrize("workers", [1, 2])
def test_tasks_are_taken_only_as_workers_free_up(workers: int) -> None:
    taken = 0

    def tasks() -> Iterator[str]:
        nonlocal taken
        for taken in range(1, 101):  # noqa: B007
            yield "0"

    results = in_order(WORK, tasks(), workers, _lost)
    next(results)
    assert taken <= AHEAD_PER_WORKER * workers + 1
    results.close()


def test_a_task_that_ends_its_worker_is_lost_and_the_others_are_not() -> None:
    tasks = ["1", "2", DIE, "4", DIE, *map(str, range(6, 15))]
    expected = [1, 2, _lost(DIE), 4, _lost(DIE), *range(6, 15)]
    assert list(in_order(WORK, tasks, 2, _lost)) == expected


def test_a_task_whose_worker_was_killed_once_is_tried_again(tmp_path: object) -> None:
    mark = f"{tmp_path}/tried"
    once = (
        f"__import__('os')._exit(9) if not __import__('os').path.exists({mark!r}) and open({mark!r}, 'w') else 'done'"
    )
    assert list(in_order(WORK, [once, "2"], 2, _lost)) == ["done", 2]


def test_workers_run_one_thread_each_and_the_parent_keeps_its_own_setting() -> None:
    before = {name: os.environ.get(name) for name in ONE_THREAD}
    ask = "(__import__('cv2').getNumThreads(), __import__('os').environ['OMP_NUM_THREADS'])"
    assert list(in_order(WORK, [ask, ask], 2, _lost)) == [(1, "1")] * 2
    assert {name: os.environ.get(name) for name in ONE_THREAD} == before


def test_workers_end_when_their_parent_is_killed() -> None:
    script = (
        "import builtins\n"
        "from printmetrics.batch.engine import in_order\n"
        "if __name__ == '__main__':\n"
        "    tasks = ['__import__(\"os\").getpid()', *['__import__(\"time\").sleep(60)'] * 4]\n"
        "    for result in in_order(builtins.eval, tasks, 2, str):\n"
        "        print(result, flush=True)\n"
    )
    with subprocess.Popen(
        [sys.executable, "-c", script], stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True
    ) as parent:
        assert parent.stdout is not None
        worker = int(parent.stdout.readline())
        parent.kill()
    deadline = time.monotonic() + 10
    while _alive(worker) and time.monotonic() < deadline:
        time.sleep(0.05)
    assert not _alive(worker)


def _alive(pid: int) -> bool:
    try:
        with open(f"/proc/{pid}/stat") as stat:  # noqa: PTH123
            return stat.read().rpartition(")")[2].split()[0] != "Z"
    except FileNotFoundError:
        return False
