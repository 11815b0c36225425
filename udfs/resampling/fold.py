"""`fold`: which part of a cross-validation a key belongs to."""

import hashlib
from typing import Final

from midspread.udfs.declaring import Parameter, row_function
from midspread.udfs.resampling.randomness import SEED

FOLDS: Final = Parameter(
    "folds", "how many parts the rows are dealt into", default=10, low=2, high=1e6, whole=True
)


def _checked(parameter: Parameter) -> str:
    """SQL for a parameter as a whole number, or the error about it."""
    name = parameter.name
    start, end = str(parameter.refused("fold", "|")).replace("'", "''").split("|")
    given = f"coalesce(regexp_replace(CAST({name} AS VARCHAR), '\\.0$', ''), 'NULL')"
    return (
        f"CASE WHEN {name} BETWEEN {parameter.low:.0f} AND {parameter.high:.0f} "
        f"AND {name} = floor({name}) THEN CAST({name} AS BIGINT) "
        f"ELSE error('{start}' || {given} || '{end}') END"
    )


# -0.0 is 0.0, here as everywhere.
_TEXT: Final = "CASE WHEN CAST(key AS VARCHAR) = '-0.0' THEN '0.0' ELSE CAST(key AS VARCHAR) END"
_BODY: Final = (
    f"CAST('0x' || left(md5(CAST({_checked(SEED)} AS VARCHAR) || ':' || {_TEXT}), 15) AS BIGINT) "
    f"% ({_checked(FOLDS)}) + 1"
)


@row_function(
    family="resampling",
    columns=("key",),
    keys=("key",),
    parameters=(FOLDS, SEED),
    body=_BODY,
    field_types={"": "BIGINT"},
    formula=(
        "1 + (the first 15 hexadecimal digits of MD5(seed ‖ ':' ‖ key as text), as a number) "
        "modulo folds"
    ),
    source="MD5: Rivest 1992, RFC 1321; folds: Stone 1974, J. R. Statist. Soc. B 36, 111–147",
    example="fold(vehicle, folds := 5)",
)
def fold(key: str, folds: int = 10, seed: int = 0) -> int:
    """Part of a cross-validation that a key belongs to, 1 to folds, the same everywhere and always.

    Rows with the same key stand in the same fold: given a vehicle or a day, all of its rows are
    left out together; given what tells rows apart, such as a visit, each row goes its own way.

    Parameters
    ----------
    key : any type
        What is dealt into folds; a NULL key has no fold.
    folds : int
        How many, 2 to 1,000,000.
    seed : int
        Another one deals anew.

    Returns
    -------
    int
        1 to folds. NULL for a NULL key.

    Notes
    -----
    Any other program can repeat it: write the seed without decimals, a colon and the key as text,
    take MD5 of its UTF-8 bytes, read the first 15 hexadecimal digits (60 bits) as a whole number,
    take the remainder after division by folds and add 1.

    The key becomes text as in ``CAST(key AS VARCHAR)``: whole numbers without a point, DOUBLE in
    its shortest exact form with a point (1.0), DECIMAL with all of its places (1.00), dates as
    2031-03-07, timestamps as 2031-03-07 08:15:00. So 1, 1.0 and 1.00 are different keys: cast
    them to one type first. TIMESTAMP WITH TIME ZONE is written in the session's time zone. -0.0
    is taken for 0.0.

    Folds are of nearly equal size for many keys, not exactly so; a few keys may leave a fold
    empty.

    References
    ----------
    Stone, M. (1974). J. R. Statist. Soc. B 36, 111–147.
    Rivest, R. (1992). The MD5 Message-Digest Algorithm, RFC 1321.
    """
    text = "0.0" if key == "-0.0" else key
    digest = hashlib.md5(f"{seed:d}:{text}".encode(), usedforsecurity=False).hexdigest()
    return int(digest[:15], 16) % folds + 1
