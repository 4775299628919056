"""Entry point: `realize` and `python -m realize`."""

from __future__ import annotations

import sys


def main() -> int:
    """Run the command line; `--version` answers before anything heavy is imported."""
    if sys.argv[1:] == ["--version"]:
        from realize._version import __version__

        sys.stdout.write(f"realize {__version__}\n")
        return 0
    from realize.commands.main import run

    return run(sys.argv[1:])


if __name__ == "__main__":
    sys.exit(main())
