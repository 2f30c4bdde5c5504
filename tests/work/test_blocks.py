"""Blocks are the same wherever they are computed; a stopped run goes on where it stopped."""

from __future__ import annotations

import multiprocessing
import os
from concurrent.futures import Executor, Future, ProcessPoolExecutor, ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from robustrm.errors import ArgumentError, LostWorkError
from robustrm.work import run_blocks, workers


@dataclass(frozen=True)
class Job:
    seed: int
    marks: str = ""

    @property
    def key(self) -> str:
        return f"job {self.seed}"


JOBS = [Job(seed) for seed in range(7)]


def drawn(job: Job) -> dict:
    return {
        "values": np.random.default_rng(job.seed).standard_normal(5),
        "words": np.array(["below", "missing"]),
    }


def marked(job: Job) -> dict:
    """Leave a mark, to count how often a job was done."""
    with (Path(job.marks) / str(job.seed)).open("a") as file:
        file.write("x")
    return drawn(job)


def dies_once(job: Job) -> dict:
    """End the process without a word, the first time."""
    mark = Path(job.marks) / f"died {job.seed}"
    if job.seed == 3 and not mark.exists():
        mark.touch()
        os._exit(9)
    return drawn(job)


def dies(job: Job) -> dict:
    os._exit(9)


def fails(job: Job) -> dict:
    if job.seed == 3:
        raise ZeroDivisionError("of the third")
    return marked(job)


def same(found: list, expected: list) -> bool:
    pairs = zip(found, expected, strict=True)
    return all(
        one.keys() == other.keys() and all(np.array_equal(one[name], other[name]) for name in one)
        for one, other in pairs
    )


def of(folder: Path) -> list[Job]:
    return [Job(job.seed, str(folder)) for job in JOBS]


def times_done(folder: Path) -> list[int]:
    marks = (folder / str(job.seed) for job in JOBS)
    return [len(mark.read_text()) if mark.exists() else 0 for mark in marks]


def test_blocks_come_in_the_order_of_the_jobs():
    assert same(run_blocks(drawn, JOBS), [drawn(job) for job in JOBS])


def test_threads_and_processes_give_the_same_blocks():
    expected = run_blocks(drawn, JOBS)
    with ThreadPoolExecutor(3) as threads:
        assert same(run_blocks(drawn, JOBS, executor=threads), expected)
    with ProcessPoolExecutor(2, mp_context=multiprocessing.get_context("spawn")) as processes:
        assert same(run_blocks(drawn, JOBS, executor=processes), expected)
    with workers(2) as executor:
        assert same(run_blocks(drawn, JOBS, executor=executor), expected)


def test_one_worker_is_this_process():
    with workers(1) as one, workers(None) as none:
        assert (one, none) == (None, None)


def test_progress_counts_blocks():
    seen: list = []
    run_blocks(drawn, JOBS, progress=lambda *call: seen.append(call))
    assert seen == [(done, 7) for done in range(1, 8)]


def test_two_jobs_do_not_share_a_key():
    with pytest.raises(ArgumentError, match="a key of their own, got 'job 0' twice"):
        run_blocks(drawn, [Job(0), Job(1), Job(0)])


def stop_after_three(done: int, total: int) -> None:
    if done == 3:
        raise KeyboardInterrupt


def test_a_stopped_run_goes_on_where_it_stopped(tmp_path: Path):
    jobs, kept = of(tmp_path), tmp_path / "kept"
    with pytest.raises(KeyboardInterrupt):
        run_blocks(marked, jobs, resume=kept, progress=stop_after_three)
    assert times_done(tmp_path) == [1, 1, 1, 0, 0, 0, 0]
    seen: list = []
    found = run_blocks(marked, jobs, resume=kept, progress=lambda *call: seen.append(call))
    assert seen == [(done, 7) for done in range(3, 8)]
    assert times_done(tmp_path) == [1] * 7
    assert same(found, run_blocks(drawn, JOBS))


class Three(Executor):
    """Does three pieces of work and leaves the others waiting."""

    def __init__(self) -> None:
        self.futures: list[Future] = []

    def submit(self, fn, /, *args, **kwargs):
        future: Future = Future()
        if len(self.futures) < 3:
            future.set_result(fn(*args, **kwargs))
        self.futures.append(future)
        return future


def test_a_stop_cancels_what_is_not_begun(tmp_path: Path):
    executor, kept = Three(), tmp_path / "kept"
    with pytest.raises(KeyboardInterrupt):
        run_blocks(drawn, JOBS, executor=executor, resume=kept, progress=stop_after_three)
    assert [future.cancelled() for future in executor.futures] == [False] * 3 + [True] * 4
    assert len(list(kept.iterdir())) == 3


def test_a_block_that_was_cut_short_is_computed_again(tmp_path: Path):
    jobs = of(tmp_path)
    run_blocks(marked, jobs, resume=tmp_path / "kept")
    file = next((tmp_path / "kept").iterdir())
    file.write_bytes(file.read_bytes()[:40])
    assert same(run_blocks(marked, jobs, resume=tmp_path / "kept"), run_blocks(drawn, JOBS))
    assert sum(times_done(tmp_path)) == 8


def test_another_function_does_not_take_what_was_kept(tmp_path: Path):
    run_blocks(drawn, of(tmp_path), resume=tmp_path / "kept")
    run_blocks(marked, of(tmp_path), resume=tmp_path / "kept")
    assert times_done(tmp_path) == [1] * 7


def test_an_error_stops_the_run_and_keeps_what_is_finished(tmp_path: Path):
    with pytest.raises(ZeroDivisionError, match="of the third"):
        run_blocks(fails, of(tmp_path), resume=tmp_path / "kept")
    assert len(list((tmp_path / "kept").iterdir())) == 3
    with ThreadPoolExecutor(2) as threads, pytest.raises(ZeroDivisionError):
        run_blocks(fails, of(tmp_path), executor=threads)


def test_a_block_is_arrays_without_objects():
    with pytest.raises(TypeError, match="dictionary of arrays, got list"):
        run_blocks(lambda job: [1], JOBS)  # type: ignore[arg-type, return-value]
    with pytest.raises(TypeError, match="objects in 'x'"):
        run_blocks(lambda job: {"x": np.array([None])}, JOBS)


def test_a_lost_worker_is_replaced_and_its_block_goes_out_again(tmp_path: Path):
    with workers(2) as executor:
        found = run_blocks(dies_once, of(tmp_path), executor=executor)
    assert (tmp_path / "died 3").exists()
    assert same(found, run_blocks(drawn, JOBS))


def test_a_block_that_kills_every_worker_is_given_up():
    with workers(2) as executor, pytest.raises(LostWorkError, match=r"'job 0' was lost .* 4 times"):
        run_blocks(dies, JOBS[:1], executor=executor)


def test_a_broken_pool_says_what_to_do(tmp_path: Path):
    context = multiprocessing.get_context("spawn")
    with (
        ProcessPoolExecutor(1, mp_context=context) as pool,
        pytest.raises(LostWorkError, match="Run again with a new one"),
    ):
        run_blocks(dies, of(tmp_path), executor=pool)
