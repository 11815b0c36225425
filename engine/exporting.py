"""A result as a file, its format by the ending of the name: complete, or not there at all."""

import contextlib
import os
import secrets
from collections.abc import Callable
from pathlib import Path
from typing import IO, TYPE_CHECKING

from midspread.engine.errors import MidspreadError, UsageError
from midspread.engine.publishing import publish

if TYPE_CHECKING:
    import pyarrow as pa


def check_target(path: Path, *, replace: bool) -> None:
    """Refuse, before any work is done, a file that could not be written.

    Parameters
    ----------
    path : Path
        The file to write.
    replace : bool
        Whether it may replace a file that exists.

    Raises
    ------
    UsageError
        When the ending is none of those that name a format.
    MidspreadError
        When the file exists, is no file, or its folder does not exist.
    """
    if _ending(path) not in _WRITERS:
        raise UsageError(
            f"query: {path.name} does not say in which format to write; let --out end in "
            f"{', '.join(list(_WRITERS)[:-1])} or {list(_WRITERS)[-1]}."
        )
    target = Path(os.path.realpath(path))
    if target.is_dir():
        raise MidspreadError(f"query: {path} is a folder; give --out the name of a file.")
    if target.exists() and not target.is_file():
        raise MidspreadError(f"query: {path} is no ordinary file; give --out another name.")
    if target.exists() and not replace:
        raise MidspreadError(
            f"query: {path} exists and was left as it is; add --replace, or give --out another "
            "name."
        )
    if not target.parent.is_dir():
        raise MidspreadError(
            f"query: the folder {target.parent} does not exist; make it, or give --out another "
            "name."
        )


def write_file(table: "pa.Table", path: Path, *, replace: bool) -> None:
    """Write a result to a file, in the format its ending names.

    CSV and JSON hold what :func:`midspread.engine.formatting.write_text` writes. Parquet keeps all
    types but intervals and unions, which become text. A workbook takes numbers that it can hold
    exactly, dates and times; everything else, and every text that looks like a formula, goes in as
    text.

    Parameters
    ----------
    table : pyarrow.Table
        The result.
    path : Path
        The file: .csv, .json, .ndjson, .parquet or .xlsx.
    replace : bool
        Whether it may replace a file that exists. The old file stays until the new one is complete.

    Raises
    ------
    UsageError
        When the ending is none of those that name a format.
    MidspreadError
        When the file exists, or cannot be written. Nothing is left behind.
    """
    check_target(path, replace=replace)
    target = Path(os.path.realpath(path))
    fresh = target.with_name(f".{target.name}.{secrets.token_hex(6)}.part")
    try:
        with fresh.open("xb") as file:
            _WRITERS[_ending(path)](table, file)
            file.flush()
            os.fsync(file.fileno())
        if replace:
            if target.exists():
                fresh.chmod(target.stat().st_mode & 0o7777)
            fresh.replace(target)
        else:
            publish(fresh, target)
    except FileExistsError:
        raise MidspreadError(
            f"query: {path} has come into being meanwhile and was left as it is; add --replace, or "
            "give --out another name."
        ) from None
    except OSError as error:
        reason = (error.strerror or str(error)).splitlines()[0].rstrip(".")
        raise MidspreadError(
            f"query: {path} could not be written ({reason}); nothing was changed: make room or "
            "allow writing there, or give --out another name."
        ) from error
    finally:
        with contextlib.suppress(OSError):
            fresh.unlink(missing_ok=True)


def _ending(path: Path) -> str:
    return path.suffix.lower()


def _write_text(form: str) -> Callable[["pa.Table", IO[bytes]], None]:
    def write(table: "pa.Table", file: IO[bytes]) -> None:
        import io

        from midspread.engine.formatting import write_text

        stream = io.TextIOWrapper(file, encoding="utf-8", newline="")
        write_text(table, form, stream)
        stream.flush()
        stream.detach()

    return write


def _write_parquet(table: "pa.Table", file: IO[bytes]) -> None:
    import pyarrow as pa
    from pyarrow import parquet

    from midspread.engine.column_texts import unique_names

    columns = [
        column if _fits_parquet(column.type) else _as_texts(column) for column in table.columns
    ]
    named = pa.Table.from_arrays(columns, names=unique_names(table.column_names))
    parquet.write_table(named, file, compression="zstd")


def _fits_parquet(kind: "pa.DataType") -> bool:
    from pyarrow import types

    if types.is_interval(kind) or types.is_union(kind):
        return False
    if types.is_struct(kind) and kind.num_fields == 0:
        return False
    return all(_fits_parquet(kind.field(place).type) for place in range(kind.num_fields))


def _as_texts(column: "pa.ChunkedArray") -> "pa.ChunkedArray":
    import pyarrow as pa

    from midspread.engine.column_texts import plain_texts

    pieces = [pa.array(plain_texts(piece), pa.string()) for piece in column.chunks]
    return pa.chunked_array(pieces, pa.string())


def _write_workbook(table: "pa.Table", file: IO[bytes]) -> None:
    from midspread.engine.workbooks import write_workbook

    write_workbook(table, file)


_WRITERS: dict[str, Callable[["pa.Table", IO[bytes]], None]] = {
    ".csv": _write_text("csv"),
    ".json": _write_text("json"),
    ".ndjson": _write_text("ndjson"),
    ".parquet": _write_parquet,
    ".xlsx": _write_workbook,
}
