"""Run the command line as ``python -m skytally``."""

from skytally.cli import main

__all__ = ["main"]

if __name__ == "__main__":
    main()
