"""`python tests`: every check of the project, one after the other, whatever fails.

Words after the command go to pytest: `python tests -k intake`.
"""

from __future__ import annotations

import subprocess
import sys
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
HERE = Path(sys.executable).parent

CHECKS = {
    "format": [str(HERE / "ruff"), "format", "--check", "."],
    "lint": [str(HERE / "ruff"), "check", "."],
    "types": [sys.executable, "-m", "mypy"],
    "import rules": [str(HERE / "lint-imports"), "--no-logo"],
    "tests and examples": [
        sys.executable,
        "-m",
        "pytest",
        "-n",
        "auto",
        "-q",
        "-m",
        "not slow",
        "--benchmark-disable",
    ],
}


def main() -> int:
    """Run every check; return 1 when one fails."""
    failed = []
    for name, command in CHECKS.items():
        extra = sys.argv[1:] if "pytest" in command else []
        sys.stdout.write(f"\n== {name}\n")
        sys.stdout.flush()
        began = time.monotonic()
        if subprocess.run([*command, *extra], cwd=ROOT, check=False).returncode:
            failed.append(name)
        sys.stdout.write(f"== {name}: {time.monotonic() - began:.0f} s\n")
    sys.stdout.write(f"\n{'failed: ' + ', '.join(failed) if failed else 'all checks passed'}\n")
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())
