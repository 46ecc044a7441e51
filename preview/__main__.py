"""``python -m preview`` and the ``preview`` command."""

from __future__ import annotations

import sys

from preview.cli import main as run

__all__ = ["main"]


def main() -> int:
    """Run the command line; the exit code."""
    return run()


if __name__ == "__main__":
    sys.exit(main())
