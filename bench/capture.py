"""Calls of the inner functions, caught in a real run and made again alone: the limit of each at its own shapes."""

from __future__ import annotations

import threading
import time
from collections import defaultdict
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np

from bench.phases import FLOOR, ONCE, READ, Clocks

# Calls kept per thread: about a panel of them, so that they find the caches as a sweep does.
MOST_CALLS = 8
MOST_BYTES = 32 * 2**20
# Every thread repeats its calls at least so long.
LEAST_SECONDS = 0.2

Call = Callable[[], Any]


@dataclass(frozen=True)
class Caught:
    """A call that was made, with copies of its arrays.

    Attributes
    ----------
    call : callable
        Makes it again.
    words : tuple
        Its arguments.
    size : int
        Entries of its arrays, or of the smallest where each is needed once: what its time is proportional to.
    held : int
        Bytes of the copies.
    """

    call: Call
    words: tuple[Any, ...]
    size: int
    held: int


class Captures(Clocks):
    """Clocks that keep a few calls of every phase of the floor, by stage and thread, and the sizes of all.

    Attributes
    ----------
    catching : bool
        Off, calls are timed only.
    sizes : dict
        Entries of all calls, by (stage, phase).
    """

    def __init__(self) -> None:
        super().__init__()
        self.catching = True
        self.sizes: dict[tuple[str, str], int] = defaultdict(int)
        # Units that are recomputed in double, and the last of a panel, look otherwise: calls are kept by their looks.
        self._seen: dict[tuple[str, str], dict[Any, int]] = defaultdict(lambda: defaultdict(int))
        self._kept: dict[tuple[str, str, Any], dict[int, list[Caught]]] = defaultdict(lambda: defaultdict(list))

    def note(self, phase: str, function: Callable[..., Any], words: tuple[Any, ...], options: dict[str, Any]) -> None:
        """Count the call, and keep it where few like it were kept."""
        if not self.catching or phase not in FLOOR or not self.stage.startswith("sweep"):
            return
        key, looks = (self.stage, phase), (function.__name__, *(_looks(word) for word in words))
        entries = [found for word in words if (found := _entries(word))]
        size = (min(entries) if phase in ONCE else sum(entries)) if entries else 0
        with self._lock:
            self.sizes[key] += size
            self._seen[key][looks] += 1
            kept = self._kept[*key, looks][threading.get_ident()]
            full = len(kept) >= MOST_CALLS or sum(each.held for each in kept) >= MOST_BYTES
        if full or phase == READ or not size:
            return
        copies = tuple(_copy(word) for word in words)
        # Kept without a clock: the function as it is.
        held = sum(_bytes(word) for word in copies)
        kept.append(Caught(partial(function, *copies, **options), copies, size, held))

    def stages(self) -> list[str]:
        """Sweeps in which anything was caught, in order."""
        return list(dict.fromkeys(stage for stage, _ in self._seen))

    def caught(self, stage: str, phase: str, threads: int) -> list[list[Caught]]:
        """Calls of the most frequent looks, a list for each thread; empty where the phase was never met."""
        seen = self._seen.get((stage, phase))
        if not seen:
            return []
        kept = list(self._kept[stage, phase, max(seen, key=lambda looks: seen[looks])].values())
        kept = [calls for calls in kept if calls]
        # A phase that only one thread came to is made again by as many as are asked for, each writing to the same.
        return [kept[i % len(kept)] for i in range(threads)] if kept else []


def seconds_for(size: int, lists: Sequence[Sequence[Caught]]) -> float:
    """Seconds in which these threads together would do calls of so many entries."""
    work = [([each.call for each in calls], sum(each.size for each in calls)) for calls in lists]
    return size / rate(work)


def rate(work: Sequence[tuple[Sequence[Call], int]]) -> float:
    """Units of work per second of all threads together, each repeating its calls, which make so many units a round."""
    started = threading.Barrier(len(work))
    done: list[float] = [0.0] * len(work)

    def repeat(index: int) -> None:
        calls, size = work[index]
        with np.errstate(all="ignore"):
            for call in calls:
                call()
            started.wait()
            start, rounds, spent = time.perf_counter(), 0, 0.0
            while spent < LEAST_SECONDS:
                for call in calls:
                    call()
                rounds += 1
                spent = time.perf_counter() - start
        done[index] = rounds * size / spent

    threads = [threading.Thread(target=repeat, args=(index,)) for index in range(len(work))]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    return sum(done)


def _looks(word: Any) -> Any:
    """Type and shape of arrays, also in a list; anything else by its type."""
    if isinstance(word, np.ndarray):
        return word.shape, word.dtype.str
    if isinstance(word, (list, tuple)):
        return tuple(_looks(part) for part in word)
    return type(word).__name__


def _entries(word: Any) -> int:
    """Entries of an array, or of all in a list."""
    if isinstance(word, np.ndarray):
        return int(word.size)
    return sum(_entries(part) for part in word) if isinstance(word, (list, tuple)) else 0


def _bytes(word: Any) -> int:
    """Bytes of an array, or of all in a list."""
    if isinstance(word, np.ndarray):
        return int(word.nbytes)
    return sum(_bytes(part) for part in word) if isinstance(word, (list, tuple)) else 0


def _copy(word: Any) -> Any:
    """A copy with the same layout; what is no array stays what it is."""
    if isinstance(word, np.ndarray):
        return word.copy(order="K")
    return [_copy(part) for part in word] if isinstance(word, list) else word
