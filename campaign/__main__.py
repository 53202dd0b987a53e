"""Runs the command line as ``python -m campaign``."""

from campaign.cli import main

if __name__ == "__main__":
    raise SystemExit(main())
