"""A sweep on dask: waves of segments, summed by a fixed binary tree, waves folded in order."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from contextlib import contextmanager
from typing import Any, Protocol

from bigsvd.sweep.events import OutOfTimeError, StoppedError
from bigsvd.sweep.one_segment import run_segment
from bigsvd.sweep.partial import Partial, combine
from bigsvd.sweep.task import SweepTask

Compute = Callable[[Any], Partial]
Wave = Sequence[tuple[int, int]]


class WaveKeeper(Protocol):
    """Keeps the sums of a sweep wave by wave, and knows those of the waves that need not be read again."""

    def begin(self) -> tuple[int, Partial | None]:
        """How many waves are known, and their sums."""
        ...

    def keep(self, waves: int, of: int, total: Partial, *, stopping: bool = False) -> None:
        """Take note of the sums of the first `waves` of `of` waves; `stopping` when no more will come."""
        ...


class Engine:
    """Runs the graphs of a sweep on dask's threaded scheduler in this process.

    Parameters
    ----------
    workers : int
        Threads. The graphs do not depend on them, so neither do the bits.
    """

    def __init__(self, workers: int) -> None:
        self._pool = ThreadPoolExecutor(workers, thread_name_prefix="bigsvd-worker")
        # Two waves are alive at a time: the next is submitted before the last is folded.
        self._conductors = ThreadPoolExecutor(2, thread_name_prefix="bigsvd-wave")

    def sweep(self, task: SweepTask, waves: Sequence[Wave], keeper: WaveKeeper | None = None) -> Partial:
        """Sweep all waves and return the total.

        Parameters
        ----------
        task : SweepTask
        waves : sequence of waves, each a sequence of (first panel, one past the last)
        keeper : WaveKeeper, optional

        Returns
        -------
        Partial
        """
        done, total = (0, None) if keeper is None else keeper.begin()
        task.reader.pass_over(run for wave in waves[:done] for run in wave)
        pending: list[Future[Partial]] = []
        try:
            for ahead in range(done, len(waves) + 1):
                if ahead < len(waves):
                    pending.append(self._conductors.submit(self._run, task, waves[ahead]))
                # The next wave is under way while one is folded and kept.
                while pending and (len(pending) == 2 or ahead == len(waves)):
                    total = _fold_wave(total, pending.pop(0).result())
                    done += 1
                    if keeper is not None:
                        keeper.keep(done, len(waves), total)
        except BaseException as error:
            # Whoever raised, no worker may outlive the sweep: they hold the file, the scratch and the buffers. A graph
            # returns at its first failure while its other segments still run, so the threads themselves are awaited.
            task.reader.control.stop()
            for future in pending:
                future.exception()
            self._pool.shutdown(cancel_futures=True)
            if isinstance(error, OutOfTimeError):
                # Only reading is over: what was certified is still to be checked and written.
                task.reader.control.go_on()
            if isinstance(error, StoppedError) and keeper is not None and total is not None:
                keeper.keep(done, len(waves), total, stopping=True)
            raise
        assert total is not None
        return total

    def _run(self, task: SweepTask, wave: Wave) -> Partial:
        """Compute one wave."""
        result: Partial = wave_graph(task, wave).compute(scheduler="threads", pool=self._pool)
        return result

    def close(self) -> None:
        """End the threads."""
        self._pool.shutdown()
        self._conductors.shutdown()


def wave_graph(task: SweepTask, wave: Wave) -> Any:
    """Build the dask graph of one wave: a task per segment, neighbours summed pairwise up a binary tree.

    Returns
    -------
    dask.delayed.Delayed
        Its value is the Partial of the wave.
    """
    from dask.delayed import delayed

    shared = delayed(task, traverse=False, pure=False, name=f"task-{id(task)}")
    run = delayed(run_segment, pure=False)
    add = delayed(combine, pure=False)
    level = [run(shared, first, stop) for first, stop in wave]
    while len(level) > 1:
        pairs = [add(level[i], level[i + 1]) for i in range(0, len(level) - 1, 2)]
        level = pairs + level[len(pairs) * 2 :]
    return level[0]


def _fold_wave(total: Partial | None, wave: Partial) -> Partial:
    """Add a wave to the total, in order."""
    return wave if total is None else combine(total, wave)


@contextmanager
def one_blas_thread() -> Iterator[None]:
    """Limit every BLAS pool to one thread: workers bring the parallelism, and thread counts change bits."""
    # SciPy brings a BLAS of its own; a limit set before it is loaded would not reach it.
    import scipy.linalg  # noqa: F401
    from threadpoolctl import threadpool_limits

    with threadpool_limits(limits=1):
        yield
