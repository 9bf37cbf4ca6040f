"""Samples run one by one and in parallel: isolation, resuming, progress, processes that die."""

from functools import partial
from pathlib import Path

import cohort_fakes as fakes
import pytest

from ramulus import UnusableInputError
from ramulus._folder import is_finished
from ramulus.cohort.run import run_samples


@pytest.fixture
def measured(tmp_path):
    """Return a measuring function that can be sent to another process, and its folder."""
    return partial(fakes.measure, out=str(tmp_path), log=str(tmp_path / "log")), tmp_path


FAILURES = {
    "unusable": ("input", "broken.tif: the z spacing is 0.0, expected um > 0; give --spacing-um"),
    "failing": ("work", "the network has no inlet"),
    "raising": ("work", "IndexError: list index out of range"),
    "hungry": ("work", "out of memory"),
}


def test_a_sample_that_fails_leaves_the_others_alone(measured):
    measure, folder = measured
    names = ["a", "unusable", "b", "failing", "raising", "hungry", "c"]
    outcomes = run_samples(fakes.rows_named(*names), measure)
    assert [outcome.sample for outcome in outcomes] == names
    for outcome in outcomes:
        kind, reason = FAILURES.get(outcome.sample, ("", ""))
        assert outcome.kind == kind
        assert outcome.reason.startswith(reason)
        assert outcome.folder == (None if kind else folder / outcome.sample)


def test_finished_samples_are_not_measured_again(measured):
    measure, folder = measured
    rows = fakes.rows_named("a", "b", "c")
    run_samples(rows[:1], measure)

    def finished(row):
        return folder / row.sample if is_finished(folder / row.sample) else None

    outcomes = run_samples(rows, measure, finished=finished)
    assert [outcome.resumed for outcome in outcomes] == [True, False, False]
    assert [line.split()[0] for line in (folder / "log").read_text().splitlines()] == list("abc")


def test_progress_counts_and_knows_the_time_left(measured):
    measure, _ = measured
    told = []
    rows = fakes.rows_named("slow1", "failing", "slow2")
    run_samples(rows, measure, on_progress=told.append)
    assert [(p.done, p.failed, p.total) for p in told] == [(1, 0, 3), (2, 1, 3), (3, 1, 3)]
    assert told[0].seconds_left == pytest.approx(0.6, abs=0.4)
    assert told[-1].seconds_left == 0
    assert told[1].outcome.sample == "failing"


def test_an_interrupt_is_not_a_failure_of_the_sample():
    def interrupted(_):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        run_samples(fakes.rows_named("a"), interrupted)


def test_no_workers_are_refused(measured):
    with pytest.raises(UnusableInputError, match="--workers: found 0"):
        run_samples(fakes.rows_named("a"), measured[0], workers=0)


@pytest.fixture
def importable(monkeypatch):
    """Let other processes import the fakes as this one does."""
    folder = str(Path(__file__).parents[1])
    package = str(Path(__file__).parents[2] / "pipeline")
    monkeypatch.setenv("PYTHONPATH", f"{folder}:{package}")


@pytest.mark.usefixtures("importable")
def test_two_processes_survive_samples_that_kill_them(measured):
    measure, folder = measured
    names = ["slow1", "dying1", "a", "slow2", "failing", "dying2", "b", "slow3"]
    outcomes = run_samples(fakes.rows_named(*names), measure, workers=2)
    assert [outcome.sample for outcome in outcomes] == names
    kinds = {outcome.sample: outcome.kind for outcome in outcomes}
    expected = {"dying1": "died", "dying2": "died", "failing": "work"}
    assert kinds == dict.fromkeys(names, "") | expected
    assert all(is_finished(folder / name) for name in names if not kinds[name])
    attempts = [line.split() for line in (folder / "log").read_text().splitlines()]
    assert sum(name == "dying1" for name, _ in attempts) == 2  # the second time alone
    assert len({process for _, process in attempts}) >= 2


@pytest.mark.usefixtures("importable")
def test_parallel_results_equal_those_of_one_process(tmp_path):
    rows = fakes.rows_named("a", "bb", "ccc")
    folders = []
    for workers in (1, 2):
        out = tmp_path / str(workers)
        run_samples(rows, partial(fakes.measure, out=str(out)), workers=workers)
        folders.append({p.relative_to(out): p.read_bytes() for p in out.rglob("*.*")})
    assert folders[0] == folders[1]


def test_a_scheduler_that_does_not_answer_is_refused(measured):
    with pytest.raises(UnusableInputError, match=r"no dask scheduler .* 'nonsense://x:1'"):
        run_samples(fakes.rows_named("a"), measured[0], scheduler="nonsense://x:1")


@pytest.mark.usefixtures("importable")
def test_a_scheduler_elsewhere_runs_the_samples(measured):
    from distributed import LocalCluster

    measure, _ = measured
    with LocalCluster(
        n_workers=1, threads_per_worker=1, host="127.0.0.1", dashboard_address="127.0.0.1:0"
    ) as cluster:
        address = cluster.scheduler_address
        outcomes = run_samples(fakes.rows_named("a", "raising"), measure, scheduler=address)
    assert [outcome.kind for outcome in outcomes] == ["", "work"]
