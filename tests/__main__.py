"""One command for every check: `python -m tests` = format, lint, types, then all tests but the long ones.

    --all      the long tests too
    --quick    leave out the tests marked slow (real processes, real time)
    --json     one JSON object on standard output, progress on standard error

Pytest's closing line is printed last. Exit code 0: everything passed, 1: something failed.
"""

import argparse
import json
import subprocess
import sys
import time
from pathlib import Path

TOP = Path(__file__).resolve().parents[1]
STATIC_CHECKS = {
    "format": ["ruff", "format", "--check", "--quiet", "."],
    "lint": ["ruff", "check", "--quiet", "."],
    "types": ["mypy"],
}


def run_static(name: str, progress: bool) -> dict[str, object]:
    """Run one check of the sources; its output is shown only when it fails."""
    began = time.monotonic()
    done = subprocess.run([sys.executable, "-m", *STATIC_CHECKS[name]], cwd=TOP, capture_output=True, text=True)
    passed = done.returncode == 0
    if not passed:
        print(done.stdout + done.stderr, file=sys.stderr, end="")
    seconds = time.monotonic() - began
    if progress:
        print(f"{name}: {'passed' if passed else 'FAILED'} in {seconds:.1f} s", file=sys.stderr, flush=True)
    return {"name": name, "passed": passed, "duration_s": round(seconds, 1)}


def run_tests(which: str, quiet: bool) -> tuple[dict[str, object], str]:
    """Run pytest in one process, real-time tests last and one at a time; returns the result and pytest's closing line.

    One process on purpose: tests that measure time must not compete with others, and every process would compile again.
    """
    began = time.monotonic()
    command = [sys.executable, "-u", "-m", "pytest", "-q", "--durations=5", "-m", which]
    # Pytest reports through a pipe so that its closing line can be repeated last; -u keeps the progress visible.
    with subprocess.Popen(command, cwd=TOP, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True, bufsize=1) as process:
        assert process.stdout is not None
        output = ""
        while chunk := process.stdout.read(1):
            output += chunk
            print(chunk, file=sys.stderr if quiet else sys.stdout, end="", flush=True)
    lines = output.strip().splitlines()
    closing = lines[-1] if lines else "pytest printed nothing"
    return {"name": "tests", "passed": process.returncode == 0, "duration_s": round(time.monotonic() - began, 1)}, closing


def main() -> int:
    parser = argparse.ArgumentParser(prog="python -m tests", description=__doc__, formatter_class=argparse.RawTextHelpFormatter)
    which = parser.add_mutually_exclusive_group()
    which.add_argument("--all", action="store_const", dest="which", const="", help="the long tests too")
    which.add_argument("--quick", action="store_const", dest="which", const="not slow and not long", help="no slow tests")
    parser.add_argument("--json", action="store_true", help="one JSON object on standard output")
    parser.set_defaults(which="not long")
    options = parser.parse_args()

    checks = [run_static(name, progress=True) for name in STATIC_CHECKS]
    tests, closing = run_tests(options.which, quiet=options.json)
    checks.append(tests)
    passed = all(check["passed"] for check in checks)
    failed = [str(check["name"]) for check in checks if not check["passed"]]
    if options.json:
        print(json.dumps({"verdict": "pass" if passed else "refuse", "checks": checks, "tests": closing}))
    else:
        print(f"failed: {', '.join(failed)}" if failed else "all checks passed", flush=True)
        print(closing, flush=True)
    return 0 if passed else 1


if __name__ == "__main__":
    sys.exit(main())
