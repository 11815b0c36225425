"""Which engine functions and settings a user's SQL may reach.

Every table function and every volatile function of the engine is listed on one side or the other;
a test compares the lists with the installed engine, so that a new one has to be judged.
"""

from typing import Final

from midspread.engine.inputs.scanning import FILE_READERS, TABLE_NAMERS

# Readers are guarded by what they read, SQL in a text is guarded in turn.
HARMLESS_TABLE_FUNCTIONS: Final = (
    FILE_READERS
    | TABLE_NAMERS
    | frozenset(
        {
            "duckdb_approx_database_count",
            "duckdb_available_metrics",
            "duckdb_columns",
            "duckdb_connection_count",
            "duckdb_constraints",
            "duckdb_coordinate_systems",
            "duckdb_databases",
            "duckdb_dependencies",
            "duckdb_dialects",
            "duckdb_eviction_queues",
            "duckdb_extension_repositories",
            "duckdb_extensions",
            "duckdb_external_file_cache",
            "duckdb_external_resource_types",
            "duckdb_external_resources",
            "duckdb_functions",
            "duckdb_grammar_extensions",
            "duckdb_indexes",
            "duckdb_keywords",
            "duckdb_live_query_metrics",
            "duckdb_log_contexts",
            "duckdb_logs",
            "duckdb_logs_parsed",
            "duckdb_memory",
            "duckdb_optimizers",
            "duckdb_prepared_statements",
            "duckdb_profiling_settings",
            "duckdb_schemas",
            "duckdb_secret_type_parameters",
            "duckdb_secret_types",
            "duckdb_secrets",
            "duckdb_sequences",
            "duckdb_settings",
            "duckdb_table_sample",
            "duckdb_tables",
            "duckdb_temporary_files",
            "duckdb_triggers",
            "duckdb_types",
            "duckdb_variables",
            "duckdb_views",
            "generate_series",
            "histogram",
            "histogram_values",
            "icu_calendar_names",
            "json_each",
            "json_tree",
            "pg_timezone_names",
            "pragma_collations",
            "pragma_database_size",
            "pragma_metadata_info",
            "pragma_platform",
            "pragma_show",
            "pragma_storage_info",
            "pragma_table_info",
            "pragma_user_agent",
            "pragma_version",
            "range",
            "repeat",
            "repeat_row",
            "summary",
            "test_all_types",
            "test_vector_types",
            "unnest",
            "which_secret",
        }
    )
)

REFUSED_TABLE_FUNCTIONS: Final = frozenset(
    {
        "add_grammar_extension",
        "arrow_scan",
        "arrow_scan_dumb",
        "checkpoint",
        "create_external_resource",
        "deregister_external_resource",
        "destroy_external_resource",
        "disable_logging",
        "disable_profiling",
        "enable_logging",
        "enable_profiling",
        "force_checkpoint",
        "json_execute_serialized_sql",
        "pandas_scan",
        "python_arrow_scan",
        "python_map_function",
        "register_external_resource",
        "register_external_resource_type",
        "remove_grammar_extension",
        "seq_scan",
        "truncate_duckdb_logs",
    }
)

HARMLESS_VOLATILE_FUNCTIONS: Final = frozenset(
    {
        "current_connection_id",
        "current_query",
        "current_query_id",
        "current_transaction_id",
        "currval",
        "error",
        "gen_random_uuid",
        "random",
        "setseed",
        "sleep_ms",
        "stats",
        "txid_current",
        "uuid",
        "uuidv4",
        "uuidv7",
        "vector_type",
    }
)

REFUSED_VOLATILE_FUNCTIONS: Final = frozenset({"nextval", "setval", "write_log"})

SETTINGS_THAT_CHANGE_RESULTS: Final = (
    "calendar",
    "default_null_order",
    "default_order",
    "ieee_floating_point_ops",
    "integer_division",
    "order_by_non_integer_literal",
    "preserve_insertion_order",
    "scalar_subquery_error_on_multiple_rows",
    "timezone",
)

ALLOWED_SETTINGS: Final = frozenset(
    {
        *SETTINGS_THAT_CHANGE_RESULTS,
        "memory_limit",
        "pivot_filter_threshold",
        "pivot_limit",
        "schema",
        "search_path",
        "threads",
        "variable",
    }
)
