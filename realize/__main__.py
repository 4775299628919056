"""Entry point: `realize` and `python -m realize`."""

from __future__ import annotations

import os
import sys


def main() -> int:
    """Run the command line; `--version` answers before anything heavy is imported."""
    if sys.argv[1:] == ["--version"]:
        from realize._version import __version__

        sys.stdout.write(f"realize {__version__}\n")
        return 0
    if "reduce" not in sys.argv[1:]:
        # only the reduction of large models gains from threads; small matrices lose tenfold on a busy machine, and
        # one thread gives the same bits everywhere
        for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
            os.environ.setdefault(name, "1")
    try:
        from realize.commands.main import run

        status = run(sys.argv[1:])
    except KeyboardInterrupt:
        sys.stderr.write("realize: interrupted; nothing was half-written\n")
        status = 130
    return status if status != 130 else _ended(status)


def _ended(status: int) -> int:
    """End the process with this status.

    The interpreter remembers an interruption that met code run from a string (some modules run such code while they
    are imported), and would end by the signal in place of the status although the interruption was dealt with.
    """
    import atexit
    import contextlib

    atexit._run_exitfuncs()
    for stream in (sys.stdout, sys.stderr):
        with contextlib.suppress(OSError):
            stream.flush()
    os._exit(status)


if __name__ == "__main__":
    sys.exit(main())
