"""Write the sample of the invented utility anew: `python -m tracker.demo FOLDER`.

The sample that comes with the sources is `python -m tracker.demo demo_data`, run at their root.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence
from pathlib import Path

from tracker.demo.larkmoor import write_sample
from tracker.errors import InputError


def main(arguments: Sequence[str] | None = None) -> int:
    """Write the sample into the folder given; return the exit status."""
    parser = argparse.ArgumentParser(
        prog="python -m tracker.demo", description="Write the sample of the invented utility."
    )
    parser.add_argument("folder", type=Path, help="where to, for instance demo_data")
    try:
        write_sample(parser.parse_args(arguments).folder)
    except InputError as error:
        sys.stderr.write(f"{error}\n")
        return 2
    return 0


if __name__ == "__main__":
    sys.exit(main())
