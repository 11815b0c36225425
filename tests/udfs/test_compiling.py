"""Compiled kernels: as the plain ones, shared by processes, kept by sources."""

import inspect
import json
import math
import os
import shutil
import subprocess
import sys
from pathlib import Path

import duckdb
import numpy as np
import pytest

from midspread.udfs import Function, compiling, declaring
from tests.udfs.calling import AGGREGATES, NAMES, answers, bits, partners, value_for

FIGURES = """
import json, sys, tempfile
import duckdb
from midspread.udfs import drivers, functions, register
if "--nowhere" in sys.argv:
    sys.argv.remove("--nowhere")
    tempfile.tempdir = "/dev/null/nowhere"
if "--full-disk" in sys.argv:
    sys.argv.remove("--full-disk")
    import resource
    resource.setrlimit(resource.RLIMIT_FSIZE, (100, 100))
connection = duckdb.connect()
connection.execute("SET enable_progress_bar = false")
register(connection)
connection.execute("CREATE TABLE t AS SELECT (i * i % 97)::DOUBLE AS x FROM range(60) AS s(i)")
figures = {}
for name in sys.argv[1:]:
    figures[name] = connection.execute(f"SELECT {name}(x) FROM t").fetchall()[0][0].hex()
compiled = [drivers.driver(functions()[name]).stats.cache_misses.total() for name in sys.argv[1:]]
print(json.dumps([figures, sum(compiled)]))
"""

SHARED = ("mad_scale", "iqr_scale")
"""Functions with the same kind of loop around them, which must not be taken for one another."""


class Process:
    """A process of its own that computes some figures with a cache folder of its own."""

    def __init__(self, cache: Path, *arguments: str) -> None:
        self._process = subprocess.Popen(
            [sys.executable, "-c", FIGURES, *arguments],
            env={**os.environ, "XDG_CACHE_HOME": str(cache)},
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )

    def result(self) -> tuple[dict[str, str], int]:
        """Its figures, and how many loops it had to compile."""
        out, errors = self._process.communicate(timeout=120)
        assert self._process.returncode == 0, errors
        assert errors == ""
        figures, compiled = json.loads(out)
        return figures, compiled


@pytest.fixture(scope="module")
def right(connection: duckdb.DuckDBPyConnection) -> dict[str, str]:
    group = [float(i * i % 97) for i in range(60)]
    by_name = dict(zip(NAMES, AGGREGATES, strict=True))
    return {name: answers(connection, by_name[name], [group])[0].hex() for name in SHARED}


def test_processes_that_fill_an_empty_cache_at_once(tmp_path: Path, right: dict[str, str]) -> None:
    """Both succeed and agree; each loop is compiled once; a third process compiles nothing."""
    both = [Process(tmp_path, *SHARED), Process(tmp_path, *reversed(SHARED))]
    (first, compiled_first), (second, compiled_second) = [process.result() for process in both]
    assert first == second == right
    assert compiled_first + compiled_second == len(SHARED)
    third, compiled = Process(tmp_path, *SHARED).result()
    assert (third, compiled) == (right, 0)


def test_loops_that_different_processes_compiled(tmp_path: Path, right: dict[str, str]) -> None:
    """numba numbers what it compiles from 1 in each process; loaded together, each is itself."""
    for name in SHARED:
        assert Process(tmp_path, name).result() == ({name: right[name]}, 1)
    assert Process(tmp_path, *SHARED).result() == (right, 0)


def test_a_damaged_cache_is_compiled_anew(tmp_path: Path, right: dict[str, str]) -> None:
    """As a crash of the machine may leave it."""
    name = SHARED[0]
    expected = ({name: right[name]}, 1)
    assert Process(tmp_path, name).result() == expected
    for ending in ("nbi", "nbc"):
        (path,) = tmp_path.rglob(f"{name}.*.{ending}")
        path.write_bytes(path.read_bytes()[:1000] if ending == "nbc" else b"")
        assert Process(tmp_path, name).result() == expected


def test_a_cache_that_cannot_be_written(tmp_path: Path, right: dict[str, str]) -> None:
    name = SHARED[0]
    expected = ({name: right[name]}, 1)
    file = tmp_path / "a file where the folder should be"
    file.write_text("")
    assert Process(file, "--nowhere", name).result() == expected
    assert file.read_text() == ""
    assert Process(tmp_path / "full", "--full-disk", name).result() == expected
    assert list((tmp_path / "full").rglob(f"{name}*.nbc")) == []


def test_changed_sources_have_a_folder_of_their_own(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A kernel calls helpers of other files, so any file counts, also a new one."""
    package = tmp_path / "udfs"
    shutil.copytree(Path(inspect.getfile(compiling)).parent, package)
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    monkeypatch.setattr(compiling, "__file__", str(package / "compiling.py"))
    uncached = compiling._cache_folder.__wrapped__
    stamp = compiling._source_stamp.__wrapped__
    monkeypatch.setattr(compiling, "_source_stamp", stamp)

    first = uncached()
    assert first == uncached() and first.is_dir()
    (package / "arithmetic" / "sums.py").open("a").write("\n# a change\n")
    second = uncached()
    (package / "arithmetic" / "another.py").write_text("")
    third = uncached()
    assert len({first, second, third}) == 3
    assert all(tmp_path in folder.parents for folder in (first, second, third))


@pytest.mark.parametrize("function", AGGREGATES, ids=NAMES)
def test_compiled_as_uncompiled(
    connection: duckdb.DuckDBPyConnection, function: Function, generator: np.random.Generator
) -> None:
    """A kernel is a plain Python function too, and gives the same bits."""
    assert function.kernel is not None
    parameters = [value_for(parameter) for parameter in function.parameters]
    groups = [
        np.sort(np.round(generator.lognormal(2.0, 1.0, n), 2))
        for n in (function.smallest_n, 3, 4, 9, 30, 71)
    ]
    found = answers(connection, function, [group.tolist() for group in groups])
    for group, answer in zip(groups, found, strict=True):
        second = np.ones_like(group) if "w" in function.columns else np.array(partners(group))
        columns = [group, second][: len(function.columns)]
        control = [np.zeros(2, np.int64)] if function.watches else []
        if not function.fields:
            plain = function.kernel(*columns, *parameters)
            assert bits(answer) == bits(none_for_null(plain))
            continue
        records = 1 if function.rows is None else function.rows(group.size)
        out = np.full((records, len(function.fields)), declaring.NULL)
        answer_in = out[0] if function.rows is None else out
        function.kernel(*columns, *parameters, answer_in, *control)
        rows = [answer] if function.rows is None else answer
        assert len(rows) == records
        for row, numbers in zip(rows, out, strict=True):
            for name, number in zip(function.fields, numbers, strict=True):
                labels = function.labels.get(name)
                expected = labels[int(number)] if labels else none_for_null(number)
                assert bits(row[name]) == bits(expected)


def none_for_null(number: float) -> float | None:
    array = np.array([number], dtype=np.float64)
    return None if declaring.null_mask(array)[0] else float(array[0])


def test_null_is_a_nan_apart() -> None:
    """No arithmetic on NaN produces the marker for NULL."""
    ordinary = np.array([math.nan, np.inf - np.inf, -np.float64(math.nan), 0.0 * np.inf])
    assert not declaring.null_mask(ordinary).any()
    assert declaring.null_mask(np.array([declaring.NULL])).all()
