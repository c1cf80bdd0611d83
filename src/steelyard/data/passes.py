"""The pass: map a kernel over blocks, merge the parts pairwise in a fixed order.

This is the one place that decides where work is done. A kernel is a picklable callable from a
block to a part (numbers, arrays, and tuples or dicts of them); parts add up unless the caller says
how else to merge. The tree of merges depends on the number of blocks alone, so the answer is the
same bit for bit for any number of workers.
"""

from __future__ import annotations

import os
from collections import deque
from collections.abc import Callable, Iterable, Iterator, Sized
from concurrent.futures import Executor, Future, ThreadPoolExecutor
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, field
from typing import Any, Generic, TypeVar

Part = TypeVar("Part")
Item = TypeVar("Item")
Progress = Callable[[str, int, int], None]


def add(left: Any, right: Any) -> Any:
    """Return the sum of two parts of the same shape: arrays and numbers, or tuples and dicts of them."""
    if isinstance(left, tuple):
        return tuple(add(a, b) for a, b in zip(left, right, strict=True))
    if isinstance(left, dict):
        return {key: add(left[key], right[key]) for key in left}
    return left + right


def silent(what: str, done: int, total: int) -> None:
    """Report progress to nobody."""


@dataclass(frozen=True)
class Engine:
    """Where passes run: an executor, how many tasks it may hold at once, and whom to tell.

    ``executor`` None runs in the calling thread.
    """

    executor: Executor | None = None
    window: int = 8
    progress: Progress = field(default=silent)

    def run(
        self,
        what: str,
        blocks: Iterable[Item],
        kernel: Callable[[Item], Part],
        merge: Callable[[Part, Part], Part] = add,
        total: int | None = None,
    ) -> Part:
        """Return the merged parts of ``kernel`` over all blocks; ``total`` counts them where they do not.

        Raises
        ------
        ValueError
            There is no block.
        """
        if total is None:
            blocks = blocks if isinstance(blocks, Sized) else list(blocks)
            total = len(blocks)
        merged: _PairwiseMerge[Part] = _PairwiseMerge(merge)
        for done, part in enumerate(self._parts(blocks, kernel), start=1):
            merged.push(part)
            self.progress(what, done, total)
        return merged.result()

    def local(self) -> Engine:
        """Return an engine for work that cannot leave this process: this one's threads, or none."""
        if self.executor is None or isinstance(self.executor, ThreadPoolExecutor):
            return self
        return Engine(progress=self.progress)

    def map(self, function: Callable[[Item], Part], items: Iterable[Item]) -> list[Part]:
        """Return ``function`` of each item, in order: for what is left to do when a pass is merged."""
        if self.executor is None:
            return [function(item) for item in items]
        return list(self.executor.map(function, items))

    def _parts(self, blocks: Iterable[Item], kernel: Callable[[Item], Part]) -> Iterator[Part]:
        if self.executor is None:
            yield from map(kernel, blocks)
            return
        waiting: deque[Future[Part]] = deque()
        try:
            for block in blocks:
                waiting.append(self.executor.submit(kernel, block))
                if len(waiting) >= self.window:
                    yield waiting.popleft().result()
            while waiting:
                yield waiting.popleft().result()
        finally:
            for future in waiting:
                future.cancel()


class _PairwiseMerge(Generic[Part]):
    """Merge parts as they come, as a balanced tree: after 2^k parts one sum of 2^k is held."""

    def __init__(self, merge: Callable[[Part, Part], Part]) -> None:
        self._merge = merge
        self._held: list[tuple[int, Part]] = []

    def push(self, part: Part) -> None:
        size = 1
        while self._held and self._held[-1][0] == size:
            part = self._merge(self._held.pop()[1], part)
            size *= 2
        self._held.append((size, part))

    def result(self) -> Part:
        if not self._held:
            raise ValueError("a pass over no blocks has no result")
        part = self._held.pop()[1]
        while self._held:
            part = self._merge(self._held.pop()[1], part)
        return part


@contextmanager
def threads(workers: int | None = None, progress: Progress = silent) -> Iterator[Engine]:
    """Give an engine with ``workers`` threads (default: one a processor), one BLAS thread each.

    BLAS is held to one thread a worker where ``threadpoolctl`` is installed: two pools that
    compete for the same processors are slower than one.
    """
    workers = workers or os.cpu_count() or 1
    with ExitStack() as stack:
        try:
            from threadpoolctl import threadpool_limits
        except ImportError:
            pass
        else:
            stack.enter_context(threadpool_limits(limits=1, user_api="blas"))
        executor = stack.enter_context(ThreadPoolExecutor(workers)) if workers > 1 else None
        yield Engine(executor, window=2 * workers, progress=progress)
