"""A grid's record: all that is needed to compute it again elsewhere, and doing so."""

import contextlib
import json
import re
import tempfile
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final

import duckdb

from midspread.engine.errors import MidspreadError
from midspread.engine.grids import ledger
from midspread.engine.grids.columns import add_column
from midspread.engine.grids.entering import create, enter
from midspread.engine.grids.freshness import in_order
from midspread.engine.grids.keeping import keep
from midspread.engine.grids.ledger import found_grid
from midspread.engine.grids.model import ColumnKind, Grid, GridKind
from midspread.engine.store.quoting import quoted
from midspread.engine.store.store import Store, reading

if TYPE_CHECKING:
    from midspread.engine.session import Session

_FORMAT: Final = 1
_IN_ANY_ORDER: Final = frozenset(
    {"avg", "mean", "sum", "stddev", "stddev_samp", "stddev_pop", "variance", "var_samp"}
    | {"var_pop", "corr", "covar_samp", "covar_pop", "skewness", "kurtosis"}
)
"""Aggregates of the engine that add floating point numbers in the order they come."""


@dataclass(frozen=True)
class Verdict:
    """What recomputing one grid of a record gave.

    Attributes
    ----------
    grid : str
        Its name.
    agrees : bool
        Whether every digit is the same.
    why : str
        What differs, in words; empty when it agrees.
    """

    grid: str
    agrees: bool
    why: str = ""


def record_of(store_path: Path, name: str) -> dict[str, Any]:
    """Everything needed to compute a grid again, as a tree that JSON can hold."""
    with reading(store_path) as engine:
        grid = found_grid(engine, "show", name)
        grids = ledger.grids(engine)
        steps = [_step(engine, grids[folded]) for folded in in_order(grids, [grid.folded])]
    return {"record": "midspread grid", "format": _FORMAT, "grid": grid.name, "steps": steps}


def _step(engine: duckdb.DuckDBPyConnection, grid: Grid) -> dict[str, Any]:
    step: dict[str, Any] = {
        "grid": grid.name,
        "kind": str(grid.kind),
        "keys": list(grid.keys),
        "rows": grid.rows,
        "version": grid.version,
    }
    if grid.version > 0:
        step["digest"] = digest(engine, ledger.contents(grid.name), _own_columns(grid))
    if grid.kind is GridKind.DERIVED:
        step |= {"sql": grid.sql, "folder": grid.folder, **grid.record.__dict__}
        step["added"] = [
            [column.name, column.type, column.expression]
            for column in grid.columns
            if column.kind is not ColumnKind.DERIVED
        ]
        step["entries"] = [
            [json.loads(key), column, value]
            for key, column, value in engine.execute(
                "SELECT key, name, value FROM store.ledger.entries"
                " WHERE lower(grid) = lower($1) ORDER BY ALL",
                [grid.name],
            ).fetchall()
        ]
        return step
    columns = grid.of_kind(ColumnKind.ENTERED)
    listed = ", ".join(f"CAST({quoted(c.name)} AS VARCHAR)" for c in columns)
    step["columns"] = [[column.name, column.type] for column in columns]
    step["values"] = [
        list(row)
        for row in engine.execute(
            f"SELECT {listed} FROM {ledger.contents(grid.name)} ORDER BY ALL"
        ).fetchall()
    ]
    return step


def _own_columns(grid: Grid) -> list[str]:
    """The columns that a recalculation gives, without those added by people."""
    kind = ColumnKind.DERIVED if grid.kind is GridKind.DERIVED else ColumnKind.ENTERED
    return [column.name for column in grid.of_kind(kind)]


def digest(engine: duckdb.DuckDBPyConnection, table: str, columns: list[str]) -> str:
    """A number made of every digit of a table, whatever the order of its rows."""
    listed = ", ".join(quoted(name) for name in columns)
    rows = engine.execute(
        f"SELECT count(*), coalesce(sum(CAST(md5_number_lower(CAST(to_json(r) AS VARCHAR)) AS"
        f" HUGEINT)), 0) FROM (SELECT {listed} FROM {table}) AS r"
    ).fetchall()
    return f"{rows[0][0]}-{int(rows[0][1]):x}"


def read_record(path: Path) -> dict[str, Any]:
    """A record from a file.

    Raises
    ------
    MidspreadError
        When the file holds none.
    """
    try:
        document = json.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        reason = (error.strerror or "it cannot be read").lower()
        raise MidspreadError(f"verify: {path} cannot be read ({reason}); check the path.") from None
    except ValueError:
        document = None
    if not isinstance(document, dict) or document.get("record") != "midspread grid":
        raise MidspreadError(
            f"verify: {path} holds no record of a grid; write one with midspread show GRID "
            f"--record --format json."
        )
    if document.get("format") != _FORMAT:
        raise MidspreadError(
            f"verify: {path} was written by another version of Midspread; update this one."
        )
    return document


def verify(open_session: Callable[[Path], "Session"], document: dict[str, Any]) -> list[Verdict]:
    """Compute a recorded grid again, with all it rests on, and compare every digit.

    Parameters
    ----------
    open_session : callable
        Makes a session over a store; the folder is the current one.
    document : dict
        A record.

    Returns
    -------
    list of Verdict
        One for each grid of the record, in the order in which they rest on one another.
    """
    verdicts = []
    with tempfile.TemporaryDirectory(prefix="midspread-verify-") as scratch:
        place = Path(scratch) / "midspread.duckdb"
        for step in document["steps"]:
            try:
                verdicts.append(_verified(open_session, place, step))
            except MidspreadError as error:
                verdicts.append(Verdict(step["grid"], False, str(error)))
                break
    return verdicts


def _add(place: Path, step: dict[str, Any]) -> None:
    """Add a derived grid's own columns, and the values typed into them."""
    name = step["grid"]
    for column, kind, expression in step["added"]:
        text = f"AS ({expression})" if expression else kind
        add_column(place, name, f"{quoted(column)} {text}")
    for key, column, value in step["entries"]:
        with contextlib.suppress(MidspreadError):  # its row may be gone, which the digest tells
            enter(place, name, [*step["keys"], column], [[*key, value]])


def _verified(
    open_session: Callable[[Path], "Session"], place: Path, step: dict[str, Any]
) -> Verdict:
    name = step["grid"]
    if step["kind"] == GridKind.ENTERED:
        listed = ", ".join(f"{quoted(column)} {kind}" for column, kind in step["columns"])
        create(place, name, listed, step["keys"])
        enter(place, name, [column for column, _ in step["columns"]], step["values"])
    else:
        with open_session(place) as session:
            keep(session, place, name, step["sql"], key=step["keys"])
        _add(place, step)
    store = Store.open(place, create=False)
    with contextlib.closing(store), store.reading() as engine:
        grid = ledger.grids(engine)[name.casefold()]
        found = digest(engine, ledger.contents(grid.name), _own_columns(grid))
    if "digest" not in step:
        return Verdict(name, True)
    if found == step["digest"]:
        return Verdict(name, True)
    rows = int(found.split("-")[0])
    why = (
        f"{rows} rows now, {step['rows']} then"
        if rows != step["rows"]
        else "the same number of rows, with other values"
    )
    unordered = sorted(_IN_ANY_ORDER & set(re.findall(r"\w+", step.get("sql", "").lower())))
    if unordered and rows == step["rows"]:
        why += (
            f" (the engine's own {unordered[0]} adds up in no fixed order, so its last digits may "
            f"differ from run to run)"
        )
    return Verdict(name, False, why)
