"""The test command: ``python -m tests``. Style, types, layers, then the tests; stops at nothing, fails for any."""

from __future__ import annotations

import subprocess
import sys
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
PYTEST = [sys.executable, "-m", "pytest", "-q"]
STEPS: dict[str, list[str]] = {
    "style": [sys.executable, "-m", "ruff", "check", "."],
    "format": [sys.executable, "-m", "ruff", "format", "--check", "--quiet", "."],
    "types": [sys.executable, "-m", "mypy"],
    "layers": [str(Path(sys.executable).with_name("lint-imports")), "--no-cache"],
    "tests": [*PYTEST, "-n", "2", "--dist", "loadfile", "-m", "not browser"],
    "browser": [*PYTEST, "-m", "browser"],
}


def main(asked: list[str]) -> int:
    """Run the named steps, or all of them; the worst exit code is returned."""
    unknown = [name for name in asked if name not in STEPS]
    if unknown:
        print(f"There is no step {unknown[0]!r}; the steps are {', '.join(STEPS)}.")
        return 2
    worst = 0
    for name in asked or STEPS:
        print(f"== {name}", flush=True)
        start = time.monotonic()
        code = subprocess.run(STEPS[name], cwd=ROOT, check=False).returncode
        print(
            f"== {name}: {'ok' if code == 0 else f'failed ({code})'}, {time.monotonic() - start:.0f} s",
            flush=True,
        )
        worst = max(worst, abs(code))
    return worst


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
