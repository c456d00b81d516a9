"""Work off the loop, one piece at a time, in the thread that owns the record."""

from collections import deque
from collections.abc import Callable
from concurrent.futures import Executor, Future
from typing import Any, TypeVar

T = TypeVar("T")


class InlineExecutor(Executor):
    """Runs a job at once in the calling thread: for tests and single-threaded simulation."""

    def submit(self, fn: Callable[..., T], /, *args: Any, **kwargs: Any) -> Future[T]:
        future: Future[T] = Future()
        try:
            future.set_result(fn(*args, **kwargs))
        except Exception as error:
            future.set_exception(error)
        return future


class JobQueue:
    """The executor as the loop sees it: submit, be told in the loop's thread, wait one's turn."""

    def __init__(self, executor: Executor, wake: Callable[[], None]) -> None:
        self._executor = executor
        self._wake = wake
        self._future: Future[Any] | None = None
        self._done: Callable[[Any], None] = _ignore
        self._waiting: deque[Callable[[], None]] = deque()

    @property
    def busy(self) -> bool:
        return self._future is not None

    @property
    def has_work(self) -> bool:
        """`poll` would do something now."""
        return bool(self._waiting) if self._future is None else self._future.done()

    def submit(self, work: Callable[[], T], done: Callable[[T], None] | None = None) -> None:
        """Run work in the executor; `done` gets its result in the loop's thread.

        Raises RuntimeError if a job is under way: whoever may come at such a time uses
        `when_free`.
        """
        if self._future is not None:
            raise RuntimeError("the executor is busy; use when_free")
        self._done = done or _ignore
        self._future = self._executor.submit(work)
        self._future.add_done_callback(lambda _: self._wake())

    def when_free(self, call: Callable[[], None]) -> None:
        """Call now if nothing is under way, else after all that waits already."""
        if self._future is None and not self._waiting:
            call()
        else:
            self._waiting.append(call)

    def poll(self) -> None:
        """Hand on the result of a job that is done, and what waited for it, one a call.

        Raises what the job raised.
        """
        if self._future is not None:
            if not self._future.done():
                return
            future, self._future = self._future, None
            self._done(future.result())
        elif self._waiting:
            self._waiting.popleft()()


def _ignore(_: Any) -> None:
    """A result that nobody needs."""
