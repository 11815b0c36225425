"""A script's inputs, and running it as the session does."""

import duckdb

from midspread.engine.inputs.fingerprints import Inputs, InputWatch, inputs_of, reason_not_to_keep

Engine = duckdb.DuckDBPyConnection
OURS = frozenset({"robust_summary"})


def inputs(engine: Engine, *script: str) -> Inputs:
    return inputs_of(script, engine, table_functions=OURS)


def run(engine: Engine, *script: str) -> str | None:
    """Run a script as the session does; say why its answer must not be kept."""
    found = inputs(engine, *script)
    before = found.look()
    with InputWatch(engine) as watch:
        for statement in script:
            engine.execute(statement).fetchall()
    return reason_not_to_keep(script, engine, before, watch, found.look(), table_functions=OURS)
