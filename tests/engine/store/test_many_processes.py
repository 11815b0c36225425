"""Several commands at once, and commands killed while they write."""

import random
import subprocess
import time
from collections.abc import Callable
from pathlib import Path

from midspread.engine.store.answers import Answers
from midspread.engine.store.housekeeping import check
from midspread.engine.store.store import Store

Start = Callable[..., "subprocess.Popen[str]"]

WORK = """
import sys
from pathlib import Path
import pyarrow as pa
from midspread.engine.store.answers import Answers
from midspread.engine.store.store import Store
path, worker, rounds = Path(sys.argv[1]), int(sys.argv[2]), int(sys.argv[3])
for number in range(rounds):
    answers = Answers(Store.open(path))
    own, shared = pa.table({"x": [worker, number]}), pa.table({"x": [float(number)]})
    assert answers.keep(f"own {worker} {number}", "SELECT 1", own)
    assert answers.keep(f"shared {number}", "SELECT 2", shared)
    for key, table in ((f"own {worker} {number}", own), (f"shared {number}", shared)):
        kept = answers.find(key)
        assert kept is not None and kept.table == table, key
    if number % 3 == 0:
        answers.size_bytes()
print("done")
"""


def test_eight_commands_at_once_all_succeed(path: Path, start: Start) -> None:
    """Not even the store exists when they start."""
    rounds = 6
    programs = [start(WORK, path, worker, rounds) for worker in range(8)]
    for program in programs:
        out, err = program.communicate(timeout=240)
        assert (out, program.returncode) == ("done\n", 0), err
    store = Store.open(path)
    assert Answers(store).count() == 8 * rounds + rounds
    assert check(store) == []
    assert not list(path.parent.glob("*.new*"))


KEEP_FOREVER = """
import os, sys
from pathlib import Path
import pyarrow as pa
from midspread.engine.store.answers import Answers
from midspread.engine.store.store import Store
answers = Answers(Store.open(Path(sys.argv[1])))
number = int(sys.argv[2])
while True:
    number += 1
    table = pa.table({"x": [os.urandom(300_000), str(number).encode()]})
    answers.keep(f"k{number}", f"SELECT {number}", table, limit=6_000_000)
    print(number, flush=True)
"""


def test_commands_killed_while_they_keep_leave_a_sound_store(path: Path, start: Start) -> None:
    chance = random.Random(20310203)
    number = 0
    for _ in range(12):
        program = start(KEEP_FOREVER, path, number)
        assert program.stdout is not None
        said = [int(program.stdout.readline())]
        time.sleep(chance.uniform(0.0, 0.4))
        program.kill()
        said += [int(line) for line in program.stdout.read().split()]
        program.wait()
        store = Store.open(path)
        assert check(store) == []
        answers = Answers(store)
        kept = answers.find(f"k{said[-1]}")
        assert kept is not None, "an answer said to be kept is there"
        assert kept.table.column(0)[1].as_py() == str(said[-1]).encode()
        assert answers.size_bytes() <= 6_000_000
        number = said[-1] + 1


def test_commands_killed_while_they_make_a_store(path: Path, start: Start) -> None:
    chance = random.Random(5)
    for _ in range(6):
        path.unlink(missing_ok=True)
        program = start(KEEP_FOREVER, path, 0)
        time.sleep(chance.uniform(0.1, 0.5))
        program.kill()
        program.wait()
        store = Store.open(path)
        assert check(store) == []
