"""Building into folders: what is written, reused, refused, and left after an interruption."""

import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import duckdb
import pytest

from midspread.demo_db import Demo, DemoError, build


def snapshot(folder: Path) -> dict[str, tuple[int, bytes]]:
    return {
        str(path.relative_to(folder)): (path.stat().st_mtime_ns, path.read_bytes())
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def count(demo: Demo) -> tuple[int, int, int]:
    with duckdb.connect(":memory:") as connection:
        row = connection.execute(
            "SELECT count(*), min(visit), max(visit) FROM read_parquet(?)", [demo.dwell]
        ).fetchone()
    assert row is not None
    return row[0], row[1], row[2]


@pytest.mark.parametrize("visits", [1_000, 4_321])
def test_scales_to_the_visit(tmp_path: Path, visits: int) -> None:
    demo = build(tmp_path / "demo", visits=visits)
    assert demo == Demo(tmp_path / "demo", visits, reused=False)
    assert count(demo) == (visits, 1, visits)


def test_layout(demo: Demo) -> None:
    assert sorted(path.name for path in demo.folder.iterdir()) == [
        *("dwell", "larkmoor.json", "warehouse.duckdb"),
    ]
    names = [path.name for path in sorted((demo.folder / "dwell").iterdir())]
    assert names == [f"2031-{month:02d}.parquet" for month in range(1, 13)]
    with duckdb.connect(":memory:") as connection:
        for month, name in enumerate(names, start=1):
            file = str(demo.folder / "dwell" / name)
            (months,) = connection.execute(
                "SELECT list(DISTINCT month(day)) FROM read_parquet(?)", [file]
            ).fetchall()
            assert months == ([month],)
        columns = connection.execute("DESCRIBE FROM read_parquet(?)", [demo.dwell]).fetchall()
    assert [(name, kind) for name, kind, *_ in columns] == [
        ("visit", "INTEGER"),
        ("day", "DATE"),
        ("day_part", "VARCHAR"),
        ("route", "VARCHAR"),
        ("direction", "VARCHAR"),
        ("stop", "VARCHAR"),
        ("vehicle", "VARCHAR"),
        ("boardings", "INTEGER"),
        ("alightings", "INTEGER"),
        ("ramp_used", "BOOLEAN"),
        ("payment", "VARCHAR"),
        ("dwell_s", "DOUBLE"),
    ]


def test_every_file_stands_in_order_of_visit_and_day(demo: Demo) -> None:
    visits: list[int] = []
    for file in sorted((demo.folder / "dwell").iterdir()):
        with duckdb.connect(":memory:", config={"threads": 1}) as connection:
            rows = connection.execute("SELECT visit, day FROM read_parquet(?)", [str(file)])
            pairs = rows.fetchall()
        assert pairs == sorted(pairs)
        assert [day for _, day in pairs] == sorted(day for _, day in pairs)
        visits += [visit for visit, _ in pairs]
    assert visits == list(range(1, demo.visits + 1))


def test_progress_rises_from_0_to_1(tmp_path: Path) -> None:
    seen: list[float] = []
    build(tmp_path / "demo", visits=1_000, on_progress=seen.append)
    assert seen[0] == 0 and seen[-1] == 1
    assert seen == sorted(seen) and len(seen) > 5


@pytest.mark.parametrize("visits", [999, 0, -5, 100_000_001, 2e6, True, "many"])
def test_visits_out_of_range_are_refused(tmp_path: Path, visits: object) -> None:
    with pytest.raises(DemoError, match=r"whole number of visits from 1,000 to 100,000,000"):
        build(tmp_path / "demo", visits=visits)  # type: ignore[arg-type]
    assert not list(tmp_path.iterdir())


def test_threads_below_1_are_refused(tmp_path: Path) -> None:
    with pytest.raises(DemoError, match="1 or more threads; 0 is not"):
        build(tmp_path / "demo", visits=1_000, threads=0)


def test_same_demo_is_reused_untouched(tmp_path: Path) -> None:
    first = build(tmp_path / "demo", visits=1_000)
    (tmp_path / "demo" / "notes.txt").write_text("mine")
    before = snapshot(tmp_path)
    seen: list[float] = []
    second = build(tmp_path / "demo", visits=1_000, on_progress=seen.append)
    assert second.reused and not first.reused
    assert seen == [1.0]
    assert snapshot(tmp_path) == before


def test_empty_folder_is_filled(tmp_path: Path) -> None:
    folder = tmp_path / "empty"
    folder.mkdir()
    inode = folder.stat().st_ino
    assert count(build(folder, visits=1_000)) == (1_000, 1, 1_000)
    assert folder.stat().st_ino == inode, "a folder that was there must stay the same folder"
    assert len(list(folder.iterdir())) == 3
    assert build(folder, visits=1_000).reused


def test_relative_and_awkward_paths(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    demo = build(Path("it's [new] é/deep er/demo"), visits=1_000)
    assert demo.folder.is_absolute() and demo.warehouse.is_file()
    assert count(demo) == (1_000, 1, 1_000)


def with_foreign_file(folder: Path) -> None:
    folder.mkdir()
    (folder / "takings.csv").write_text("route,takings\nL1,4\n")


def with_foreign_manifest(folder: Path) -> None:
    folder.mkdir()
    (folder / "larkmoor.json").write_text('{"visits": 1000}')


def with_broken_manifest(folder: Path) -> None:
    folder.mkdir()
    (folder / "larkmoor.json").write_text("{")


def with_other_visits(folder: Path) -> None:
    build(folder, visits=1_001)


def with_other_edition(folder: Path) -> None:
    build(folder, visits=1_000)
    manifest = folder / "larkmoor.json"
    manifest.write_text(manifest.read_text().replace('"edition": ', '"edition": 90'))


def with_a_month_gone(folder: Path) -> None:
    build(folder, visits=1_000)
    (folder / "dwell" / "2031-05.parquet").unlink()


def with_a_month_changed(folder: Path) -> None:
    build(folder, visits=1_000)
    with (folder / "dwell" / "2031-05.parquet").open("ab") as file:
        file.write(b"more")


def as_a_file(folder: Path) -> None:
    folder.write_text("not a folder")


@pytest.mark.parametrize(
    ("prepare", "sentence"),
    [
        (with_foreign_file, "holds files that are not the demo database"),
        (with_foreign_manifest, "holds files that are not the demo database"),
        (with_broken_manifest, "holds files that are not the demo database"),
        (with_other_visits, "holds a demo database of 1001 visits, not 1000"),
        (with_other_edition, "of another version of midspread"),
        (with_a_month_gone, "changed or removed"),
        (with_a_month_changed, "changed or removed"),
        (as_a_file, "is a file"),
    ],
)
def test_what_is_not_ours_is_refused_and_left_alone(
    tmp_path: Path, prepare: Callable[[Path], None], sentence: str
) -> None:
    prepare(tmp_path / "demo")
    before = snapshot(tmp_path)
    with pytest.raises(DemoError, match=sentence) as refusal:
        build(tmp_path / "demo", visits=1_000)
    assert str(refusal.value).count("\n") == 0
    assert snapshot(tmp_path) == before


def test_parent_that_is_a_file_is_refused(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("mine")
    with pytest.raises(DemoError, match="could not be built"):
        build(tmp_path / "file" / "demo", visits=1_000)
    assert snapshot(tmp_path).keys() == {"file"}


@pytest.mark.parametrize("existing", [False, True])
@pytest.mark.parametrize("stop", [KeyboardInterrupt, RuntimeError])
@pytest.mark.parametrize("when", [0.0, 0.3, 0.99])
def test_stopped_build_leaves_nothing(
    tmp_path: Path, existing: bool, stop: type[BaseException], when: float
) -> None:
    folder = tmp_path / "new" / "demo"
    if existing:
        folder.mkdir(parents=True)

    def stop_there(done: float) -> None:
        if done >= when:
            raise stop

    with pytest.raises(stop):
        build(folder, visits=5_000, on_progress=stop_there)
    left = sorted(str(path.relative_to(tmp_path)) for path in tmp_path.rglob("*"))
    assert left == (["new", "new/demo"] if existing else [])


def test_somebody_elses_file_appearing_meanwhile_survives(tmp_path: Path) -> None:
    folder = tmp_path / "demo"
    folder.mkdir()

    def appear(_done: float) -> None:
        (folder / "warehouse.duckdb").write_text("theirs")

    with pytest.raises(DemoError, match="appeared in"):
        build(folder, visits=1_000, on_progress=appear)
    assert [path.name for path in folder.iterdir()] == ["warehouse.duckdb"]
    assert (folder / "warehouse.duckdb").read_text() == "theirs"


def test_other_build_finishing_first_is_reused(tmp_path: Path) -> None:
    folder = tmp_path / "demo"
    others: list[Demo] = []

    def finish_first(done: float) -> None:
        if done > 0.9 and not others:
            others.append(build(folder, visits=1_000))

    demo = build(folder, visits=1_000, on_progress=finish_first)
    assert count(demo) == (1_000, 1, 1_000)
    assert [path.name for path in tmp_path.iterdir()] == ["demo"]


BUILD_IN_CHILD = """
import sys
from pathlib import Path
from midspread.demo_db import DemoError, build
try:
    build(Path(sys.argv[1]), visits=int(sys.argv[2]), on_progress=lambda d: print(d, flush=True))
except DemoError as error:
    print("refused:", error)
"""


@pytest.mark.skipif(sys.platform == "win32", reason="sends SIGINT to a child")
def test_ctrl_c_stops_at_once_and_leaves_nothing(tmp_path: Path) -> None:
    child = subprocess.Popen(
        [sys.executable, "-c", BUILD_IN_CHILD, str(tmp_path / "demo"), "100000000"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    assert child.stdout is not None
    child.stdout.readline()
    time.sleep(0.5)  # into the first months, which take seconds at this size
    child.send_signal(signal.SIGINT)
    asked = time.monotonic()
    _, error = child.communicate(timeout=60)
    assert "KeyboardInterrupt" in error
    assert child.returncode != 0
    assert time.monotonic() - asked < 10, "a month of this size alone takes longer"
    assert not list(tmp_path.iterdir())


@pytest.mark.skipif(sys.platform == "win32", reason="needs a limit on file sizes")
def test_disk_that_refuses_gives_one_sentence(tmp_path: Path) -> None:
    limit = "import resource; resource.setrlimit(resource.RLIMIT_FSIZE, (40_000, 40_000))\n"
    done = subprocess.run(
        [sys.executable, "-c", limit + BUILD_IN_CHILD, str(tmp_path / "demo"), "200000"],
        capture_output=True,
        text=True,
        timeout=120,
    )
    assert done.returncode == 0, done.stderr
    refused = [line for line in done.stdout.splitlines() if line.startswith("refused:")]
    assert len(refused) == 1 and "could not be built" in refused[0]
    assert done.stderr == ""
    assert not list(tmp_path.iterdir())
