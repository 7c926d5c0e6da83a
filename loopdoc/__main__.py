"""Runs the command line by ``python -m loopdoc``."""

from loopdoc.cli import main

if __name__ == "__main__":
    raise SystemExit(main())
