"""Sessions over DuckDB: the user's SQL guarded, rewritten, answered from the store or computed."""

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from midspread.engine.session import Answer, Progress, Session

__all__ = ["Answer", "Progress", "Session"]


def __getattr__(name: str) -> Any:
    # Errors and paths are often wanted without the engine behind a session.
    if name in __all__:
        from midspread.engine import session

        return getattr(session, name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
