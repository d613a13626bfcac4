"""Writes a demo result folder from invented data: ``python -m tracker.report [FOLDER] [--kind payout]``."""

import argparse
import sys
from pathlib import Path

from calibration.notice import BadInput
from tracker.report.demo import DEMOS, demo
from tracker.report.folder import write_folder


def main(arguments: list[str] | None = None) -> int:
    """Write it and say where; 2 where it cannot be written."""
    parser = argparse.ArgumentParser(prog="python -m tracker.report", description=__doc__)
    parser.add_argument("folder", type=Path, nargs="?", default=Path("harrow-point-results"))
    parser.add_argument("--kind", choices=sorted(DEMOS), default="payout")
    parser.add_argument("--frames", type=int, default=240, help="how many frames to invent")
    parser.add_argument("--replace", action="store_true")
    asked = parser.parse_args(arguments)
    made = demo(asked.kind, asked.frames)
    try:
        print(write_folder(made.result, asked.folder, frames=made.frames, replace=asked.replace) / "report.html")
    except BadInput as fault:
        print(fault, file=sys.stderr)
        return 2
    return 0


if __name__ == "__main__":
    sys.exit(main())
