"""The lists of functions compared with the engine that is installed."""

import duckdb

from midspread.engine.harmless import (
    ALLOWED_SETTINGS,
    HARMLESS_TABLE_FUNCTIONS,
    HARMLESS_VOLATILE_FUNCTIONS,
    REFUSED_TABLE_FUNCTIONS,
    REFUSED_VOLATILE_FUNCTIONS,
    SETTINGS_THAT_CHANGE_RESULTS,
)


def names(condition: str) -> set[str]:
    with duckdb.connect() as engine:
        rows = engine.execute(
            "SELECT DISTINCT lower(function_name) FROM duckdb_functions() WHERE " + condition
        ).fetchall()
    return {name for (name,) in rows}


def test_every_table_function_of_the_engine_has_been_judged() -> None:
    assert names("function_type IN ('table', 'table_macro') AND internal") <= (
        HARMLESS_TABLE_FUNCTIONS | REFUSED_TABLE_FUNCTIONS
    )


def test_every_volatile_function_of_the_engine_has_been_judged() -> None:
    assert names("stability = 'VOLATILE'") <= (
        HARMLESS_VOLATILE_FUNCTIONS | REFUSED_VOLATILE_FUNCTIONS
    )


def test_nothing_is_on_both_sides() -> None:
    assert not HARMLESS_TABLE_FUNCTIONS & REFUSED_TABLE_FUNCTIONS
    assert not HARMLESS_VOLATILE_FUNCTIONS & REFUSED_VOLATILE_FUNCTIONS


def test_allowed_settings_exist() -> None:
    with duckdb.connect() as engine:
        rows = engine.execute("SELECT name FROM duckdb_settings()").fetchall()
    known = {name.lower() for (name,) in rows}
    assert set(SETTINGS_THAT_CHANGE_RESULTS) <= ALLOWED_SETTINGS
    assert ALLOWED_SETTINGS - {"variable"} <= known
