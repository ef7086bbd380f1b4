"""Every check in one command, from the checkout: ``python -m tests.check``.

With ``--heavy``, the heavy tests on real data in place of the quick ones.
"""

import subprocess
import sys

CHECKS = (
    ("ruff", "check", "."),
    ("ruff", "format", "--check", "."),
    ("mypy", "terrasol"),
    ("lint-imports",),
)
TESTS = {False: ("pytest",), True: ("pytest", "-m", "heavy", "-rs")}


def run(*command):
    """Run one tool of this Python's environment and return whether it was content."""
    print("+", *command, flush=True)
    name, *words = command
    if name == "lint-imports":
        code = "from importlinter.cli import lint_imports_command; lint_imports_command()"
        return subprocess.run([sys.executable, "-c", code, *words]).returncode == 0
    return subprocess.run([sys.executable, "-m", name, *words]).returncode == 0


def main():
    """Run all checks, even after a failure, and exit with 1 if any failed."""
    heavy = "--heavy" in sys.argv[1:]
    results = [run(*command) for command in (*CHECKS, TESTS[heavy])]
    sys.exit(0 if all(results) else 1)


if __name__ == "__main__":
    main()
