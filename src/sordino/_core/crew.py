"""A crew of threads that share kernel work. Kernels run without the GIL, so plain threads do.

What is shared is exact in any order: members write to rows or columns of their own, or to sums of
integers of their own that are added up afterwards. So results are the same for any crew.
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import Future, ThreadPoolExecutor
from itertools import count

LEAST = 2**15               # items below which sharing costs more than it gains
CHUNK = 2**13


class Crew:
    """So many threads, the calling one among them.

    threads  members
    least    work of fewer items is done by the calling thread alone
    chunk    items that a member takes at a time
    """

    def __init__(self, threads: int = 1, least: int = LEAST, chunk: int = CHUNK):
        self.threads, self.least, self.chunk = threads, least, chunk
        self.stopped = False
        self._pool: ThreadPoolExecutor | None = None

    def each(self, work: Callable[[int], None]):
        """work(member) for every member at once; the first exception of any is raised.

        Where the calling thread is interrupted, `stopped` tells the others to come to an end.
        """
        self.stopped = False
        others = [self._submit(work, member) for member in range(1, self.threads)]
        try:
            work(0)
        except BaseException:
            self.stopped = True
            raise
        finally:
            failures = [failure for failure in map(Future.exception, others) if failure]
        if failures:
            raise failures[0]

    def share(self, n: int, work: Callable[[int, int, int], None]):
        """work(member, first, stop) over 0..n in chunks, each taken by whoever is free.

        It should take under 50 ms, so that Ctrl-C need not wait.
        """
        places = count(0, self.chunk)

        def run(member: int):
            while not self.stopped and (first := next(places)) < n:
                work(member, first, min(first + self.chunk, n))

        if n < self.least or self.threads == 1:
            self.stopped = False
            run(0)
        else:
            self.each(run)

    def _submit(self, work, member: int) -> Future:
        if self._pool is None:
            self._pool = ThreadPoolExecutor(self.threads - 1, thread_name_prefix="sordino")
        return self._pool.submit(work, member)
