"""Tables as bytes that give the same table back: types, order, chunks, every bit of every value."""

from typing import TYPE_CHECKING

if TYPE_CHECKING:  # Arrow takes 0.1 s to import; a kept answer may never need it
    import pyarrow as pa

_WORTH_COMPRESSING = 32 * 1024


def to_bytes(table: "pa.Table") -> bytes:
    """Write a table.

    Parameters
    ----------
    table : pyarrow.Table
        Any table.

    Returns
    -------
    bytes
        An Arrow stream, compressed where that pays.
    """
    import pyarrow as pa

    compress = table.nbytes > _WORTH_COMPRESSING and pa.Codec.is_available("zstd")
    options = pa.ipc.IpcWriteOptions(compression="zstd" if compress else None)
    sink = pa.BufferOutputStream()
    with pa.ipc.new_stream(sink, table.schema, options=options) as writer:
        writer.write_table(table)
    content: bytes = sink.getvalue().to_pybytes()
    return content


def from_bytes(content: bytes) -> "pa.Table":
    """Read a table written by :func:`to_bytes`.

    Parameters
    ----------
    content : bytes
        What it gave.

    Returns
    -------
    pyarrow.Table

    Raises
    ------
    pyarrow.ArrowInvalid
        When the bytes are something else.
    """
    import pyarrow as pa

    with pa.ipc.open_stream(pa.py_buffer(content)) as reader:
        return reader.read_all()
