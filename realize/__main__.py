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

        return run(sys.argv[1:])
    except KeyboardInterrupt:
        sys.stderr.write("realize: interrupted; nothing was half-written\n")
        return 130


if __name__ == "__main__":
    sys.exit(main())
