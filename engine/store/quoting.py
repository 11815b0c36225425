"""Text of ours or the user's as part of SQL: the only place where it becomes so."""


def quoted(name: str) -> str:
    """Spell an identifier.

    Examples
    --------
    >>> quoted("dwell s")
    '"dwell s"'
    """
    return '"' + name.replace('"', '""') + '"'


def literal(text: str) -> str:
    """Spell a string.

    Examples
    --------
    >>> literal("it's")
    "'it''s'"
    """
    return "'" + text.replace("'", "''") + "'"
