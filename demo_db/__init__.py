"""Larkmoor Transit: an invented town's buses, to try midspread on.

`build` writes about two million stop visits of one year, contaminated in known ways, and a small
warehouse to join to. What is true of them stands in `midspread.demo_db.truth`.
"""

from midspread.demo_db.building import Demo, build
from midspread.demo_db.folders import DemoError
from midspread.demo_db.generator import create_truth_view

__all__ = ["Demo", "DemoError", "build", "create_truth_view"]
