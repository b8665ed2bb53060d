"""Benchmarks in one command: `python -m tests.bench`. Both sides of every ratio run in turns on the same machine.

    --quick        fewer rounds, under a minute once everything is compiled; the native build of the library only if it is there
    --json         one JSON object of ratios on standard output, progress on standard error
    --only NAME    one subject; may be repeated

Times hold for this computer and this moment; ratios are what to compare. No test asserts either.
"""

import argparse
import importlib
import json
import sys
import time

from tests.bench.table import Finding, as_json, as_text

SUBJECTS = ("kernels", "one_cycle", "laws", "lockstep", "imports", "live_loop")


def main() -> int:
    parser = argparse.ArgumentParser(
        prog="python -m tests.bench", description=__doc__, formatter_class=argparse.RawTextHelpFormatter
    )
    parser.add_argument("--quick", action="store_true", help="fewer rounds")
    parser.add_argument("--json", action="store_true", help="one JSON object on standard output")
    parser.add_argument("--only", action="append", choices=SUBJECTS, help="one subject")
    options = parser.parse_args()
    everything: list[Finding] = []
    for name in SUBJECTS:
        if options.only and name not in options.only:
            continue
        began_s = time.monotonic()
        print(f"measuring {name}", file=sys.stderr, flush=True)
        for title, findings in importlib.import_module(f"tests.bench.{name}").measure(options.quick):
            everything += findings
            if not options.json:
                print(as_text(title, findings), end="\n\n", flush=True)
        print(f"{name}: {time.monotonic() - began_s:.0f} s", file=sys.stderr, flush=True)
    if options.json:
        print(json.dumps(as_json(everything)))
    return 0


if __name__ == "__main__":
    sys.exit(main())
