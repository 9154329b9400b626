"""Every check of the project: format, lint, types, tests. Stops at the first that fails.

With ``--record`` the table of checks against the outside goes into DEVELOPERS.md at the end.
"""

import os
import shutil
import subprocess
import sys
from pathlib import Path

from tests.checks import TABLE, put_record

ROOT = Path(__file__).parent.parent
CHECKS = (
    ("ruff", "format", "--check", "."),
    ("ruff", "check", "."),
    ("mypy",),
    ("pytest",),
)


def main(arguments: list[str]) -> int:
    """Run the checks; further arguments go to pytest. Exit status of the first failure."""
    recorded = "--record" in arguments
    arguments = [argument for argument in arguments if argument != "--record"]
    TABLE.unlink(missing_ok=True)
    if not os.environ.get("CHROMIUM") and not shutil.which("chromium"):
        # The browser tests need one; where no package provides it, playwright brings its own.
        install = ("playwright", "install", "--with-deps", "chromium")
        subprocess.run([sys.executable, "-m", *install], cwd=ROOT, check=True)
    for check in CHECKS:
        command = [*check, *arguments] if check[0] == "pytest" else list(check)
        print("→", " ".join(command), flush=True)
        status = subprocess.run([sys.executable, "-m", *command], cwd=ROOT).returncode
        if status:
            return status
    if recorded and TABLE.exists():
        put_record()
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
