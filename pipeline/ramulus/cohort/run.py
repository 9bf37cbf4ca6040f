"""Run the samples of a cohort: each on its own, resumed, isolated; one after another or on dask."""

import logging
import os
import time
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from ..errors import UnusableInputError, WorkFailedError
from .manifest import ManifestRow

__all__ = ["MeasureSample", "Outcome", "Progress", "run_samples"]

MeasureSample = Callable[[ManifestRow], Path]


@dataclass(frozen=True, slots=True)
class Outcome:
    """What became of one sample.

    Parameters
    ----------
    sample : str
        Its name.
    folder : Path or None
        Its results; None where it failed.
    kind : str
        Why it failed: "input", "work" or "died"; empty where it did not.
    reason : str
        One line that says more.
    resumed : bool
        True where finished results were there already.
    """

    sample: str
    folder: Path | None
    kind: str = ""
    reason: str = ""
    resumed: bool = False


@dataclass(frozen=True, slots=True)
class Progress:
    """How far a cohort is, told after every sample."""

    outcome: Outcome
    done: int
    failed: int
    total: int
    seconds_left: float

    @property
    def words(self) -> str:
        """The sample and what became of it."""
        outcome = self.outcome
        state = "failed" if outcome.folder is None else "found" if outcome.resumed else "done"
        return f"{outcome.sample} {state}"


def run_samples(
    rows: Sequence[ManifestRow],
    measure_sample: MeasureSample,
    *,
    finished: Callable[[ManifestRow], Path | None] = lambda _: None,
    workers: int = 1,
    scheduler: str = "",
    on_progress: Callable[[Progress], None] = lambda _: None,
) -> list[Outcome]:
    """Measure every sample; one that fails, or takes its process down, leaves the others alone.

    Parameters
    ----------
    rows : sequence of ManifestRow
        The samples.
    measure_sample : callable
        Measures one row and returns the sample's folder. For several workers it has to be one that
        they can import: a function of a module, or a `functools.partial` of it.
    finished : callable
        Returns the folder of a row whose results are there and valid, else None.
    workers : int
        Samples measured at a time; 1 runs them in this process.
    scheduler : str
        Address of a dask scheduler that runs them instead; its workers see the same files.
    on_progress : callable
        Is given a Progress after every sample.

    Returns
    -------
    list of Outcome
        One per row, in their order.

    Raises
    ------
    UnusableInputError
        If `workers` is below 1, or no scheduler answers at the address.
    WorkFailedError
        If the scheduler is lost on the way.

    Examples
    --------
    >>> row = ManifestRow("m1", Path("a.tif"), "m1")
    >>> run_samples([row], lambda row: Path("out") / row.sample)[0].folder.name
    'm1'
    """
    if workers < 1:
        msg = f"--workers: found {workers}, expected a number from 1 up"
        raise UnusableInputError(msg)
    outcomes: dict[str, Outcome] = {}
    teller = _Teller(len(rows), on_progress)
    waiting = []
    for row in rows:
        folder = finished(row)
        if folder is None:
            waiting.append(row)
        else:
            outcomes[row.sample] = Outcome(row.sample, folder, resumed=True)
            teller.tell(outcomes[row.sample])
    for outcome in _outcomes(waiting, measure_sample, workers, scheduler):
        outcomes[outcome.sample] = outcome
        teller.tell(outcome)
    return [outcomes[row.sample] for row in rows]


class _Teller:
    """Count outcomes and judge the time left from those that were measured now."""

    def __init__(self, total: int, on_progress: Callable[[Progress], None]) -> None:
        self.total, self.on_progress = total, on_progress
        self.done = self.failed = self.measured = 0
        self.start = time.monotonic()

    def tell(self, outcome: Outcome) -> None:
        self.done += 1
        self.failed += outcome.folder is None
        self.measured += not outcome.resumed
        each = (time.monotonic() - self.start) / max(1, self.measured)
        left = each * (self.total - self.done)
        self.on_progress(Progress(outcome, self.done, self.failed, self.total, left))


def _outcomes(
    rows: list[ManifestRow], measure_sample: MeasureSample, workers: int, scheduler: str
) -> Iterator[Outcome]:
    if not rows:
        return
    if workers == 1 and not scheduler:
        yield from (_attempt(measure_sample, row) for row in rows)
        return
    with _cluster(workers, scheduler) as client:
        at_once = workers if not scheduler else max(workers, len(client.nthreads()))
        suspects: list[ManifestRow] = []
        for row, outcome in _in_parallel(client, rows, measure_sample, at_once):
            if outcome is None:
                suspects.append(row)
            else:
                yield outcome
        # A process that dies takes its neighbours along: each is tried again, alone this time.
        for row, outcome in _in_parallel(client, suspects, measure_sample, 1):
            yield outcome or Outcome(row.sample, None, "died", _DIED)


_DIED = "the process that measured it was killed, twice (for want of memory, or by a fault)"


def _attempt(measure_sample: MeasureSample, row: ManifestRow) -> Outcome:
    """Measure one sample; whatever goes wrong becomes its reason."""
    try:
        return Outcome(row.sample, Path(measure_sample(row)))
    except UnusableInputError as refusal:
        return Outcome(row.sample, None, "input", _one_line(str(refusal)))
    except WorkFailedError as failure:
        return Outcome(row.sample, None, "work", _one_line(str(failure)))
    except MemoryError:
        return Outcome(row.sample, None, "work", "out of memory")
    except Exception as failure:  # no fault of one sample may stop the others
        logging.getLogger(__name__).debug("sample %s", row.sample, exc_info=True)
        words = f"{type(failure).__name__}: {failure}"
        return Outcome(row.sample, None, "work", _one_line(words))


def _one_line(words: str) -> str:
    plain = words.encode("utf-8", "backslashreplace").decode()  # a file's name may be no Unicode
    return " ".join(plain.split())[:500] or "no reason given"


@contextmanager
def _cluster(workers: int, scheduler: str) -> Iterator[Any]:
    """Yield a client of the scheduler asked for, or of a cluster of our own on this machine."""
    import dask  # noqa: PLC0415 - dask and distributed cost half a second at start-up
    from distributed import Client, LocalCluster  # noqa: PLC0415
    from distributed.security import Security  # noqa: PLC0415

    if scheduler:
        with _connected(scheduler) as client:
            yield client
        return
    # Encrypted with keys that live in memory only: else any user of this machine could have the
    # scheduler run code. No pages are served beside it.
    security = Security.temporary()
    options = {
        "distributed.scheduler.allowed-failures": 0,
        "distributed.scheduler.http.routes": [],
        "distributed.worker.http.routes": [],
    }
    with (
        dask.config.set(options),
        LocalCluster(
            n_workers=workers, threads_per_worker=1, processes=True, memory_limit=0,
            host="127.0.0.1", protocol="tls://", security=security,
            dashboard_address="127.0.0.1:0", worker_dashboard_address="127.0.0.1:0",
            silence_logs=logging.CRITICAL, env=_threads_each(workers),
        ) as cluster,
        Client(cluster, security=security) as client,
    ):  # fmt: skip
        yield client


def _threads_each(workers: int) -> dict[str, str]:
    """Share the processors out, so that N samples do not start N threads on each."""
    share = str(max(1, (os.cpu_count() or 1) // workers))
    names = ("NUMBA_NUM_THREADS", "OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")
    return {name: os.environ.get(name, share) for name in names}


@contextmanager
def _connected(scheduler: str) -> Iterator[Any]:
    from distributed import Client  # noqa: PLC0415 - costs half a second at start-up

    try:
        client = Client(scheduler, timeout="20s", set_as_default=False)
        client.wait_for_workers(1, timeout=60)
    except (OSError, ValueError, TimeoutError) as failure:
        msg = (
            f"--scheduler: no dask scheduler with workers answers at {scheduler!r}: "
            f"{_one_line(str(failure))}; expected an address such as tcp://node7:8786"
        )
        raise UnusableInputError(msg) from failure
    with client:
        yield client


def _in_parallel(
    client: Any, rows: list[ManifestRow], measure_sample: MeasureSample, at_once: int
) -> Iterator[tuple[ManifestRow, Outcome | None]]:
    """Keep so many samples on the way; None is yielded for one whose process died."""
    from distributed import KilledWorker, as_completed  # noqa: PLC0415 - costs half a second

    waiting, running = deque(rows), {}
    ready = as_completed(loop=client.loop)

    def submit() -> None:
        row = waiting.popleft()
        future = client.submit(_attempt, measure_sample, row, pure=False, retries=0)
        running[future.key] = row
        ready.add(future)

    for _ in range(min(at_once, len(waiting))):
        submit()
    for future in ready:
        row = running.pop(future.key)
        failure = future.exception()
        if failure is not None and not isinstance(failure, KilledWorker):
            msg = f"the dask scheduler was lost at sample {row.sample!r}: {_one_line(str(failure))}"
            raise WorkFailedError(msg) from failure
        outcome = None if failure is not None else future.result()
        future.release()
        if waiting:
            submit()
        yield row, outcome
