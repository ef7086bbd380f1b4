"""The program `terrasol`: it runs a command line, and ends well however that ends.

All that takes time to import is imported once interrupts are taken care of.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Sequence

from terrasol.cli.endings import DONE, verdict
from terrasol.cli.requests import endable
from terrasol.cli.streams import give_up, hold_closed_streams, say
from terrasol.errors import TerrasolError


def main(arguments: Sequence[str] | None = None) -> int:
    """Run a command line and return its exit code; every failure is one sentence on stderr.

    With TERRASOL_DEBUG=1 in the environment, the traceback comes with it.
    """
    debug = os.environ.get("TERRASOL_DEBUG") == "1"
    with endable() as requests:
        try:
            hold_closed_streams()
            return _run(arguments, debug)
        except BaseException as error:
            requests.end()
            if debug:
                import traceback

                traceback.print_exc()
            if requests.asked and not isinstance(error, TerrasolError):
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


if __name__ == "__main__":
    sys.exit(main())
