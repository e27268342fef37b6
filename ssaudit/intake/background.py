"""One worker thread for what need not be waited for: digests, and taking note of models."""

from collections import deque
from collections.abc import Callable
from concurrent.futures import Future, ThreadPoolExecutor
from types import TracebackType
from typing import Any

# What is done sooner than another thread is woken.
SMALL_BYTES = 500_000
# Tasks that wait at the most; each holds a batch of matrices in memory.
WAITING = 2


class Background:
    """Runs tasks one after the other in one thread, in the order in which they are given.

    Hashing and array operations let other threads run meanwhile. Use it in a ``with`` statement.

    Examples
    --------
    >>> seen = []
    >>> with Background() as background:
    ...     background.run(seen.append, 1)
    ...     background.run(seen.append, 2)
    ...     background.wait()
    >>> seen
    [1, 2]
    """

    def __init__(self) -> None:
        self._pool = ThreadPoolExecutor(max_workers=1)
        self._tasks: deque[Future[Any]] = deque()

    def __enter__(self) -> "Background":
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:  # fmt: skip
        self._pool.shutdown(cancel_futures=True)

    def run(self, task: Callable[..., Any], *arguments: Any) -> None:
        """Give a task; wait first while too many others wait, and raise what they raised."""
        while len(self._tasks) >= WAITING:
            self._tasks.popleft().result()
        self._tasks.append(self._pool.submit(task, *arguments))

    def start(self, task: Callable[..., Any], *arguments: Any) -> "Future[Any]":
        """Give a task whose result is asked for later."""
        return self._pool.submit(task, *arguments)

    def run_sized(self, size: int, task: Callable[..., Any], *arguments: Any) -> None:
        """Give a task on some bytes; a small one is done at once, after those that wait."""
        if size >= SMALL_BYTES:
            self.run(task, *arguments)
            return
        self.wait()
        task(*arguments)

    def wait(self) -> None:
        """Wait for all tasks, and raise what they raised."""
        while self._tasks:
            self._tasks.popleft().result()
