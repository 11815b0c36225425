"""Ctrl-C and progress."""

import os
import signal
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

import pytest

from midspread.engine.answer import Progress
from midspread.engine.errors import Interrupted, MidspreadError
from midspread.engine.interrupts import run_interruptibly
from midspread.engine.session import Session

LONG = {
    "the engine": "SELECT sum(sqrt(i * j)) FROM range(3000000) a(i), range(3000000) b(j)",
    "our functions": "SELECT sum(m) FROM (SELECT trimmed_mean(i) OVER (ORDER BY i "
    "ROWS 3000 PRECEDING) AS m FROM range(3000000) AS r(i))",
}


@contextmanager
def signal_after(seconds: float, times: int = 1) -> Iterator[None]:
    """Press Ctrl-C while the block runs; once it has ended the signal would hit pytest itself."""
    ended = threading.Event()

    def send() -> None:
        for _ in range(times):
            if ended.wait(seconds):
                return
            os.kill(os.getpid(), signal.SIGINT)

    sender = threading.Thread(target=send)
    sender.start()
    try:
        yield
    finally:
        ended.set()
        sender.join()


@pytest.mark.parametrize("sql", LONG.values(), ids=LONG.keys())
def test_ctrl_c_stops_a_query_and_leaves_the_session_usable(session: Session, sql: str) -> None:
    session.query("SELECT trimmed_mean(dwell_s) FROM visits")  # compiled by now
    began = time.monotonic()
    with pytest.raises(Interrupted) as caught, signal_after(0.7):
        session.query(sql)
    # The batch of windows that is under way is finished first.
    assert time.monotonic() - began < 20
    assert caught.value.exit_code == 130
    assert str(caught.value) == "query: interrupted; nothing was changed."
    assert session.query("SELECT mad_scale(dwell_s) > 0 FROM visits").rows() == [(True,)]


def test_interrupt_from_another_thread(session: Session) -> None:
    timer = threading.Timer(0.5, session.interrupt)
    timer.start()
    with pytest.raises(Interrupted):
        session.query(LONG["the engine"])
    timer.join()
    assert session.query("SELECT 1").rows() == [(1,)]


def test_interrupt_while_nothing_runs(session: Session) -> None:
    session.interrupt()
    assert session.query("SELECT trimmed_mean(dwell_s) > 0 FROM visits").rows() == [(True,)]


def test_ctrl_c_while_a_view_is_being_made(session: Session) -> None:
    with pytest.raises(Interrupted), signal_after(0.7):
        list(session.run(f"SET VARIABLE long = ({LONG['the engine']})"))
    assert session.query("SELECT 1").rows() == [(1,)]


def test_progress_counts_rows_and_values(visits_file: object) -> None:
    seen: list[Progress] = []
    assert visits_file
    with Session(use_store=False, threads=1, on_progress=seen.append) as session:
        session.query(
            "SELECT g, hodges_lehmann(x) FROM (SELECT i % 40 AS g, sqrt(i) AS x "
            "FROM range(15000000) AS r(i)) GROUP BY g"
        )
    assert [one.seconds for one in seen] == sorted(one.seconds for one in seen)
    assert [one.elements for one in seen] == sorted(one.elements for one in seen)
    assert all(one.fraction is None or 0 <= one.fraction <= 1 for one in seen)
    assert len(seen) > 2


class TestRunInterruptibly:
    """The waiting itself, without an engine."""

    def test_results_and_errors_are_carried_over(self) -> None:
        assert run_interruptibly(lambda: 42, lambda: None) == 42
        with pytest.raises(MidspreadError, match="no stop"):
            run_interruptibly(self.fail, lambda: None)

    def test_stop_is_asked_for_until_the_work_ends(self) -> None:
        stopped = threading.Event()
        asked: list[int] = []

        def stop() -> None:
            asked.append(1)
            if len(asked) == 3:
                stopped.set()

        with pytest.raises(Interrupted), signal_after(0.2):
            run_interruptibly(stopped.wait, stop)
        assert len(asked) >= 3

    def test_a_second_ctrl_c_does_not_wait(self) -> None:
        release = threading.Event()
        began = time.monotonic()
        with pytest.raises(Interrupted), signal_after(0.3, times=2):
            run_interruptibly(release.wait, lambda: None)
        assert time.monotonic() - began < 5
        release.set()

    def test_an_error_while_telling_progress_stops_the_work(self) -> None:
        stopped = threading.Event()
        with pytest.raises(MidspreadError, match="no stop"):
            run_interruptibly(stopped.wait, stopped.set, self.fail)
        assert stopped.is_set()

    def test_ticks_come_about_ten_times_a_second(self) -> None:
        ticks: list[float] = []
        wait: Callable[[], None] = lambda: time.sleep(1.05)  # noqa: E731
        run_interruptibly(wait, lambda: None, lambda: ticks.append(time.monotonic()))
        assert 3 <= len(ticks) <= 11

    @staticmethod
    def fail() -> None:
        raise MidspreadError("there is no stop of this name.")
