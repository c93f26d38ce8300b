"""Print every measured claim as a ratio to its reference, run in turn in the same session.

python tests/benchmarks                  all of them
python tests/benchmarks voice slew       some
python tests/benchmarks --runs 21        more runs, for a quieter median
python tests/benchmarks --scale 0.02     small sizes, to see that everything works
"""

import argparse
import importlib
import sys
from pathlib import Path

HERE = Path(__file__).resolve().parent
BENCHMARKS = (
    "voice",
    "slew",
    "processes",
    "memory",
    "loudness",
    "comparison",
    "batch",
    "cluster",
    "panel",
    "live",
)


def main() -> None:
    """Run the benchmarks named on the command line."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("names", nargs="*", metavar="NAME", help=f"which: {', '.join(BENCHMARKS)} (all)")
    parser.add_argument("--runs", type=int, default=11, help="runs of each pair (11)")
    parser.add_argument("--scale", type=float, default=1.0, help="size of the work against the claim's (1)")
    choices = parser.parse_args()
    unknown = set(choices.names) - set(BENCHMARKS)
    if unknown:
        parser.error(f"no benchmark {', '.join(sorted(unknown))}: choose from {', '.join(BENCHMARKS)}")
    sys.path[:0] = [str(HERE), str(HERE.parent)]
    for name in choices.names or BENCHMARKS:
        for line in importlib.import_module(name).report(choices.runs, choices.scale):
            print(line, flush=True)


if __name__ == "__main__":
    main()
