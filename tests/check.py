"""One command for people and for CI: format, lint, types, tests.

python tests/check.py            everything but the slow tests
python tests/check.py --all      the slow tests too
python tests/check.py --fast     format, lint and types alone
"""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent


def main(arguments: list[str]) -> int:
    """Run each check; stop at the first that fails."""
    python = sys.executable
    workers = str(min(2, os.cpu_count() or 1))
    tests = [python, "-m", "pytest", "-n", workers, "--dist", "loadfile"]
    if "--all" not in arguments:
        tests += ["-m", "not slow"]
    steps = {
        "format": [python, "-m", "ruff", "format", "--check", "."],
        "lint": [python, "-m", "ruff", "check", "."],
        "types": [python, "-m", "mypy"],
        "tests": tests,
    }
    if "--fast" in arguments:
        del steps["tests"]
    for name, command in steps.items():
        print(f"== {name}", flush=True)
        code = subprocess.run(command, cwd=ROOT, check=False).returncode
        if code:
            print(f"== {name} failed (exit status {code})", flush=True)
            return code
    print("== all checks passed", flush=True)
    return 0


if __name__ == "__main__":
    raise SystemExit(main(sys.argv[1:]))
