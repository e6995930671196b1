"""Entry point of the ``trackfield`` command and of ``python -m controller``."""

from __future__ import annotations

import sys


def main() -> None:
    """Parse, run, and leave with a documented exit code. Never shows a traceback for bad input."""
    from controller.cli.commands import invoke  # noqa: PLC0415 - keeps `import controller` light

    sys.exit(invoke(sys.argv[1:]))


if __name__ == "__main__":
    main()
