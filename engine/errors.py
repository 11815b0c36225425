"""What can go wrong, as one sentence each.

``str(error)`` of every class here is a sentence for the user: it names the function or command,
says what was wrong, what is allowed and what to do.
"""


class MidspreadError(Exception):
    """The request failed; the command line exits with 1."""

    exit_code = 1


class UsageError(MidspreadError):
    """The request was put wrongly; the command line exits with 2."""

    exit_code = 2


class RefusedStatement(MidspreadError):
    """A statement that would change a source, a file or the session's safety settings."""


class Interrupted(MidspreadError):
    """The user pressed Ctrl-C; the command line exits with 130."""

    exit_code = 130


class StoreError(MidspreadError):
    """Something about the local store of kept answers."""


class StoreBusy(StoreError):
    """Another program holds the store for longer than we wait."""


class StoreDamaged(StoreError):
    """The store cannot be read; it is left as it is."""


class StoreTooNew(StoreError):
    """The store was written by a newer version; it is left as it is."""


class NotAStore(StoreError):
    """The path holds some other file; it is left as it is."""


class StoreNotWritable(StoreError):
    """The store, or the folder it would be created in, cannot be written."""
