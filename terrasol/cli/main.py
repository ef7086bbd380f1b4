"""The program `terrasol`: it runs a command line, and ends well however that ends.

All that takes time to import is imported once interrupts are taken care of.
"""

from __future__ import annotations

import os
import signal
import sys
import threading
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager

from terrasol.cli.endings import DONE, verdict
from terrasol.cli.streams import give_up, hold_closed_streams, say
from terrasol.errors import TerrasolError

REQUESTS_TO_END = tuple(
    getattr(signal, name) for name in ("SIGINT", "SIGTERM", "SIGHUP") if hasattr(signal, name)
)
"""Ctrl-C, a polite request, and a terminal that is gone."""


def main(arguments: Sequence[str] | None = None) -> int:
    """Run a command line and return its exit code; every failure is one sentence on stderr.

    With TERRASOL_DEBUG=1 in the environment, the traceback comes with it.
    """
    debug = os.environ.get("TERRASOL_DEBUG") == "1"
    with _endable() as asked_to_end:
        try:
            hold_closed_streams()
            return _run(arguments, debug)
        except BaseException as error:
            if debug:
                import traceback

                traceback.print_exc()
            if asked_to_end() and not isinstance(error, TerrasolError):
                error = KeyboardInterrupt()  # libraries may put errors of their own in its place
            code, sentence = verdict(error)
            say(f"terrasol: {sentence}")
            return code


def _run(arguments: Sequence[str] | None, debug: bool) -> int:
    """Carry out the command that was asked for."""
    import logging
    import warnings

    from terrasol.cli.commands import terrasol

    logging.getLogger("rasterio").addHandler(logging.NullHandler())
    with warnings.catch_warnings():
        if not debug:
            warnings.simplefilter("ignore")
        try:
            code = terrasol.main(arguments, prog_name="terrasol", standalone_mode=False)
        except SystemExit:  # so click ends when the reader of its help has gone
            code = DONE
        except OSError as error:  # all but streams raise errors of our own, or name their file
            if error.filename is None:
                give_up(error)
            raise
    return code if isinstance(code, int) else DONE


@contextmanager
def _endable() -> Iterator[Callable[[], bool]]:
    """Let every request to end clean up, once: a second one would disturb the cleaning.

    A request that the caller chose to ignore (nohup) stays ignored. Yields whether there was
    a request.
    """
    requests: list[bool] = []

    def stop(*_: object) -> None:
        requests.append(True)
        for request in before:
            signal.signal(request, signal.SIG_IGN)
        raise KeyboardInterrupt

    if threading.current_thread() is not threading.main_thread():
        yield lambda: False
        return
    before = {
        request: handler
        for request in REQUESTS_TO_END
        if (handler := signal.getsignal(request)) not in (signal.SIG_IGN, None)
    }
    for request in before:
        signal.signal(request, stop)
    try:
        yield lambda: bool(requests)
    finally:
        for request, handler in before.items():
            signal.signal(request, handler)


if __name__ == "__main__":
    sys.exit(main())
