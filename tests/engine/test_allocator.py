"""The allocator's setting changes speed only."""

import subprocess
import sys

from midspread.engine.allocator import keep_freed_memory


def test_it_can_be_asked_for_again_and_anywhere() -> None:
    keep_freed_memory()
    keep_freed_memory()


def test_a_system_without_the_setting_is_left_alone() -> None:
    code = (
        "import ctypes; ctypes.CDLL = lambda name: object()\n"
        "from midspread.engine.allocator import keep_freed_memory as keep\n"
        "keep(); print('fine')"
    )
    answer = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True)
    assert answer.stdout == "fine\n", answer.stderr
