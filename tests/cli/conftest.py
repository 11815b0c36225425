"""What the tests of the command line share: a small demo folder and ways to run commands."""

import os
import shutil
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from midspread.cli.main import application
from midspread.demo_db import build

VISITS = 20_000
Run = Callable[..., Result]
Spawn = Callable[..., "subprocess.CompletedProcess[str]"]


@pytest.fixture(scope="session")
def demo(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The demo database, built once; tests leave it as it is."""
    folder = tmp_path_factory.mktemp("town") / "larkmoor"
    build(folder, visits=VISITS)
    return folder


@pytest.fixture
def here(demo: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A demo folder of the test's own, the current one."""
    folder = tmp_path / "larkmoor"
    shutil.copytree(demo, folder)
    monkeypatch.chdir(folder)
    monkeypatch.delenv("MIDSPREAD_STORE", raising=False)
    monkeypatch.delenv("MIDSPREAD_DEBUG", raising=False)
    return folder


@pytest.fixture
def kept(demo: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """The shared demo folder as the current one, and the path of a store of the test's own."""
    monkeypatch.chdir(demo)
    monkeypatch.setenv("MIDSPREAD_STORE", str(tmp_path / "kept.duckdb"))
    monkeypatch.delenv("MIDSPREAD_DEBUG", raising=False)
    return tmp_path / "kept.duckdb"


@pytest.fixture
def run() -> Run:
    """``run("query", "SELECT 1")``: a command in this process, its output in a pipe."""

    def one(*arguments: str, stdin: str | None = None) -> Result:
        return CliRunner().invoke(application, list(arguments), input=stdin)

    return one


@pytest.fixture
def spawn() -> Spawn:
    """``spawn("query", "SELECT 1")``: a command as a process of its own."""

    def one(*arguments: str, **options: object) -> "subprocess.CompletedProcess[str]":
        environment = {**os.environ, "PYTHONWARNINGS": "default"}
        return subprocess.run(  # type: ignore[call-overload, no-any-return]
            [sys.executable, "-m", "midspread.cli.main", *arguments],
            capture_output=True,
            text=True,
            encoding="utf-8",
            env=environment,
            timeout=120,
            **options,
        )

    return one
