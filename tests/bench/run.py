"""All benchmarks, as ratios measured in one run: ``python tests/bench/run.py``.

Each figure is the wall time of ours divided by that of the named reference on the same table,
taken in turn in one process, round by round; the median of the rounds is printed. A target
stands beside a figure where the project has promised one. Nothing here asserts: a slow machine
is not a failure.
"""

import argparse
import sys
from collections.abc import Callable
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))

import against_engine
import against_pandas
import association
import comparison
import growth
import memory
import outlying
import permutation
import processes
import reexpression
import resampling
import sensitivity
from measuring import Figure, print_figures

SECTIONS: dict[str, Callable[[int], list[Figure]]] = {
    "engine": against_engine.measure,
    "pandas": against_pandas.measure,
    "comparison": comparison.measure,
    "growth": growth.measure,
    "association": association.measure,
    "memory": memory.measure,
    "outlying": outlying.measure,
    "permutation": permutation.measure,
    "processes": processes.measure,
    "reexpression": reexpression.measure,
    "resampling": resampling.measure,
    "sensitivity": sensitivity.measure,
}


def main() -> None:
    """Run the chosen sections and print their figures."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("sections", nargs="*", choices=[*SECTIONS, []], metavar="section")
    parser.add_argument("--rows", type=int, default=10_000_000)
    chosen = parser.parse_args()
    for name in chosen.sections or SECTIONS:
        print_figures(name, SECTIONS[name](chosen.rows))


if __name__ == "__main__":
    main()
