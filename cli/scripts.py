"""SQL from the command line, a file or standard input."""

import sys
from pathlib import Path

from midspread.engine.errors import MidspreadError, UsageError


def read_script(command: str, sql: str | None, file: Path | None) -> str:
    """The SQL itself, from the argument, a file or standard input."""
    if (sql is None) == (file is None):
        found = "both are" if sql is not None else "neither is"
        raise UsageError(
            f"{command}: it takes SQL in quotes or --file FILE (- for standard input), and {found} "
            "given; give one of them."
        )
    if sql is not None:
        return sql
    assert file is not None
    try:
        if str(file) == "-":
            return sys.stdin.buffer.read().decode("utf-8-sig")
        return file.read_text(encoding="utf-8-sig")
    except UnicodeDecodeError as error:
        raise MidspreadError(
            f"{command}: {file} is not text in UTF-8 (byte {error.start + 1}); save it as UTF-8."
        ) from None
    except OSError as error:
        reason = (error.strerror or "it cannot be read").lower()
        raise MidspreadError(
            f"{command}: the file {file} cannot be read ({reason}); give the path of a text file "
            "that holds SQL."
        ) from None
