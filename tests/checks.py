"""The one command for all checks: lint, types, tests. Stops at nothing, fails if one of them fails."""

import subprocess
import sys

CHECKS = (
    ("ruff", "check", "."),
    ("ruff", "format", "--check", "."),
    ("mypy",),
    ("pytest",),
)


def main() -> int:
    """Run them all, in the order of how soon they tell something; the exit code is 0 only if all passed."""
    failed = [
        check for check in CHECKS if subprocess.run([sys.executable, "-m", *check], check=False).returncode
    ]
    for check in failed:
        print(f"failed: {' '.join(check)}", file=sys.stderr)
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())
