"""The one check command: format, lint, types, layers, tests.

Run as ``python tests/check.py``; options are handed to pytest.
"""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
STEPS = {
    "format": ["ruff", "format", "--check", "."],
    "lint": ["ruff", "check", "."],
    "types": ["mypy"],
    "layers": ["lint-imports", "setup.cfg"],
    "tests": ["pytest", "-q", "-n", "auto"],
}


def main(options: list[str]) -> int:
    """Run every step, also after one has failed, and say which did."""
    bin_folder = Path(sys.executable).parent
    failed = []
    for name, (tool, *arguments) in STEPS.items():
        more = options if name == "tests" else []
        print(f"== {name}", flush=True)
        if subprocess.run([bin_folder / tool, *arguments, *more], cwd=ROOT).returncode:
            failed.append(name)
    print(f"failed: {', '.join(failed)}" if failed else "all checks passed", file=sys.stderr)
    return bool(failed)


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
