"""Requests to end a run, by hand or by the system: each is heard, and cleaning is left in peace."""

from __future__ import annotations

import signal
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from queue import SimpleQueue
from typing import Any, Final

REQUESTS_TO_END = tuple(
    getattr(signal, name) for name in ("SIGINT", "SIGTERM", "SIGHUP") if hasattr(signal, name)
)
"""Ctrl-C, a polite request, and a terminal that is gone."""

PATIENCE: Final = 0.2
"""Seconds after which a request that nothing came of is made again (judgement, no source)."""


class Requests:
    """What was asked, and whether the run is ending of it.

    A request raises KeyboardInterrupt. Python drops what is raised while it disposes of an object,
    and a library may drop it too: so the request is made again until the run ends. While a
    KeyboardInterrupt is being handled, the run cleans up, and further requests are ignored.
    """

    def __init__(self) -> None:
        self.asked = False
        self._over = False
        self._made: SimpleQueue[int | None] = SimpleQueue()  # may be put to at any moment

    def end(self) -> None:
        """Ignore all further requests: only the last words are left."""
        self._over = True

    def stop(self, request: int, *_: object) -> None:
        """Raise KeyboardInterrupt, unless one is being handled; a handler of signals."""
        self.asked = True
        if self._over or _interrupted(sys.exc_info()[1]):
            return
        self._made.put(request)
        raise KeyboardInterrupt

    def repeat(self) -> None:
        """Make each request again and again, until `no_more`; for a thread of its own."""
        while (request := self._made.get()) is not None:
            self._repeat(request)

    def _repeat(self, request: int) -> None:
        """Make one request again until another, or the end, takes its place."""
        while self._made.empty():
            time.sleep(PATIENCE)
            if self._made.empty():
                _send(request)

    def no_more(self) -> None:
        """Let `repeat` end."""
        self._made.put(None)


def _interrupted(error: BaseException | None) -> bool:
    """Whether an error is, or came of, a KeyboardInterrupt."""
    seen: set[int] = set()
    while error is not None and id(error) not in seen:
        if isinstance(error, KeyboardInterrupt):
            return True
        seen.add(id(error))
        error = error.__cause__ or error.__context__
    return False


def _send(request: int) -> None:
    """Send a request to the main thread, awake or asleep."""
    if hasattr(signal, "pthread_kill"):
        signal.pthread_kill(threading.main_thread().ident or 0, request)
    else:
        signal.raise_signal(request)


@contextmanager
def endable() -> Iterator[Requests]:
    """Let every request to end clean up.

    A request that the caller chose to ignore (nohup) stays ignored. What Python prints of a
    KeyboardInterrupt that it drops is not printed, since another follows.
    """
    requests = Requests()
    if threading.current_thread() is not threading.main_thread():
        yield requests
        return
    hook = sys.unraisablehook

    def dropped(what: Any) -> None:
        if not (requests.asked and issubclass(what.exc_type, KeyboardInterrupt)):
            hook(what)

    before = {
        request: handler
        for request in REQUESTS_TO_END
        if (handler := signal.getsignal(request)) not in (signal.SIG_IGN, None)
    }
    repeater = threading.Thread(target=requests.repeat, daemon=True)
    repeater.start()
    for request in before:
        signal.signal(request, requests.stop)
    sys.unraisablehook = dropped
    try:
        yield requests
    finally:
        requests.end()
        requests.no_more()
        repeater.join()
        sys.unraisablehook = hook
        for request, handler in before.items():
            signal.signal(request, handler)
