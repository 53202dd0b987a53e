"""Writes the invented demonstration: ``python -m campaign.simulation --into FOLDER``."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence
from pathlib import Path

from campaign.simulation.demo import demo_files
from campaign.simulation.folder import FolderHoldsOther, write_campaign


def main(arguments: Sequence[str] | None = None) -> int:
    """Write the demonstration and return the exit status: 0 written, 2 refused."""
    parser = argparse.ArgumentParser(
        prog="python -m campaign.simulation",
        description="Writes the demonstration campaign: invented recordings with known truth.",
    )
    parser.add_argument("--into", type=Path, required=True, metavar="FOLDER", help="folder to write")
    options = parser.parse_args(arguments)
    campaign_files = demo_files()
    try:
        write_campaign(campaign_files, options.into)
    except (FolderHoldsOther, OSError) as refusal:
        print(f"not written: {refusal}", file=sys.stderr)
        return 2
    size = sum(map(len, campaign_files.values()))
    print(f"{len(campaign_files)} files, {size / 1e6:.1f} MB, written to {options.into}")
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
