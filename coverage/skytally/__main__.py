"""Run the command line, as the command ``skytally`` and as ``python -m skytally``."""

from __future__ import annotations

import sys
from typing import NoReturn

__all__ = ["main"]


def main() -> NoReturn:
    """Run the command line; Ctrl-C while it is being imported ends it no less quietly."""
    try:
        from skytally.cli import main as run

        run()
    except KeyboardInterrupt:
        sys.exit(130)


if __name__ == "__main__":
    main()
